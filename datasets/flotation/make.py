"""Makes readings.csv: ten invented shifts; from the seventh on the feed sample is cut 10 % rich in copper."""

from pathlib import Path

import numpy as np

rng = np.random.default_rng(20)
TAGS = [
    "WT-1",
    "WT-2",
    "feed_Cu",
    "feed_Fe",
    "feed_Au",
    "conc_Cu",
    "conc_Fe",
    "conc_Au",
    "tail_Cu",
    "tail_Fe",
    "tail_Au",
    "rc_Cu",
    "rc_Fe",
    "rc_Au",
    "ct_Cu",
    "ct_Fe",
    "ct_Au",
]
DECIMALS = [1, 2, 3, 2, 3, 2, 2, 2, 3, 2, 3, 2, 2, 2, 2, 2, 2]
RELATIVE = {
    "feed": (0.02, 0.02, 0.06),
    "conc": (0.01, 0.015, 0.04),
    "tail": (0.03, 0.02, 0.10),
    "rc": (0.02, 0.02, 0.06),
    "ct": (0.02, 0.02, 0.06),
}
ABSOLUTE = {"feed": (0.005, 0, 0), "tail": (0.002, 0, 0)}
rows = []
for shift in range(10):
    feed = 420.0 + rng.normal(0, 8)
    grade = np.array([0.78, 4.3, 0.42]) * (1 + rng.normal(0, 0.04, 3))
    into = np.array([feed, *(feed * grade)])  # t/h of solids, and of each component in its own unit
    to_rougher = np.array([0.055, 0.93, 0.16, 0.72]) * (1 + rng.normal(0, 0.005, 4))
    to_cleaner = np.array([0.41, 0.945, 0.78, 0.86]) * (1 + rng.normal(0, 0.005, 4))
    # each part is split twice; what the cleaner rejects goes round again
    rougher_feed = into / (1 - to_rougher * (1 - to_cleaner))
    rougher_conc = rougher_feed * to_rougher
    streams = {
        "feed": into,
        "conc": rougher_conc * to_cleaner,
        "tail": rougher_feed * (1 - to_rougher),
        "rc": rougher_conc,
        "ct": rougher_conc * (1 - to_cleaner),
    }
    row = [feed * (1 + rng.normal(0, 0.01)), streams["conc"][0] * (1 + rng.normal(0, 0.015))]
    for name, amounts in streams.items():
        true = amounts[1:] / amounts[0]
        sigma = np.hypot(RELATIVE[name] * true, ABSOLUTE.get(name, (0, 0, 0)))
        read = true + rng.normal(0, sigma)
        if name == "feed" and shift >= 6:
            read[0] += 0.10 * true[0]
        row.extend(read)
    rows.append(",".join([f"shift {shift + 1}", *(f"{v:.{d}f}" for v, d in zip(row, DECIMALS, strict=True))]))
Path(__file__).with_name("readings.csv").write_text("\n".join([",".join(["shift", *TAGS]), *rows]) + "\n")
