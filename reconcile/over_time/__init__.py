"""What many snapshots say together: plain data with names and units; the words are in `reconcile.report.history`."""
