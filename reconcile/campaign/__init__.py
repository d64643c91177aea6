"""From a raw log to windows that are ready for the balances, with every decision on record."""
