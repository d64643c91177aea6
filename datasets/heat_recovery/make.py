"""Makes readings.csv: twelve invented hours; from the ninth on the cables of TT-3 and TT-4 are swapped."""

from pathlib import Path

import numpy as np
from iapws.iapws97 import _Region4

rng = np.random.default_rng(11)
TAGS = ["FT-1", "FT-2", "FT-3", "PT-3", "TT-1", "TT-2", "TT-3", "TT-4", "TT-5"]
DECIMALS = [0, 0, 1, 2, 1, 1, 1, 1, 1]
rows = []
for hour in range(12):
    product, water = 9000 + rng.normal(0, 150), 12000 + rng.normal(0, 200)
    hot, cold, outlet, pressure = 85 + rng.normal(0, 1), 12 + rng.normal(0, 0.5), 75 + rng.normal(0, 0.5), 4.0
    recovered = product / 3600 * 3.2 * (hot - (42 + rng.normal(0, 0.5)))  # kW
    warm = cold + recovered / (water / 3600 * 4.18)
    evaporation = _Region4(pressure / 10, 1)["h"] - _Region4(0.39, 0)["h"]  # kJ/kg, condensate boils at 3.9 bar
    steam = water / 3600 * 4.18 * (outlet - warm) / evaporation * 3600
    true = [product, water, steam, pressure, hot, hot - recovered / (product / 3600 * 3.2), cold, warm, outlet]
    sigma = [0.01 * product, 0.007 * water, 0.015 * steam, 0.05, 0.3, 0.3, 0.2, 0.2, 0.3]
    read = np.array(true) + rng.normal(0, sigma)
    if hour >= 8:
        read[[6, 7]] = read[[7, 6]]
    rows.append(",".join([f"{hour + 1}:00", *(f"{v:.{d}f}" for v, d in zip(read, DECIMALS, strict=True))]))
Path(__file__).with_name("readings.csv").write_text("\n".join([",".join(["hour", *TAGS]), *rows]) + "\n")
