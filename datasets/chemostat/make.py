"""Makes readings.csv from published.csv: concentrations times dilution rate, in rates per litre of culture."""

import csv
from pathlib import Path

FEED_GLUCOSE, FEED_NITROGEN = 10.0, 133.4  # g/L and mmol/L, as published

here = Path(__file__).parent
names = ["state", "feed_glucose", "feed_N", "biomass", "glucose", "acetate", "ammonium", "CO2", "O2"]
lines = [",".join(names)]
with (here / "published.csv").open(encoding="utf-8") as file:
    for number, row in enumerate(csv.DictReader(file), 1):
        rate = float(row["D_per_h"])
        liquid = [float(row[c]) for c in ("biomass_g_l", "glucose_g_l", "acetate_g_l", "ammonium_g_l")]
        gas = [float(row[c]) for c in ("co2_transfer_g_l_h", "o2_transfer_g_l_h")]
        values = [FEED_GLUCOSE * rate, FEED_NITROGEN * rate, *(rate * c for c in liquid), *gas]
        lines.append(",".join([str(number), *(f"{v:.5g}" for v in values)]))
(here / "readings.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
