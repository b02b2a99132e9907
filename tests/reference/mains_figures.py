"""Figures of the open recording by numpy and pandas, for tests/reference_mains.rs to compare with.

Run: mains_figures.py FILE.csv.gz PERIOD_S; prints JSON. Needs tests/peers/requirements.txt.
"""
import json
import sys

import numpy as np
import pandas as pd

file, period_s = sys.argv[1], int(sys.argv[2])
rows = pd.read_csv(file, names=["time", "volts"], header=0, parse_dates=["time"])
rows["start"] = rows["time"].dt.floor("10min")
groups = rows.groupby("start")["volts"]
rms = groups.apply(lambda v: np.sqrt(np.mean(np.square(v.to_numpy()))))
count = groups.size()
whole = rms[count == 600 // period_s]
by_hour = whole.groupby(whole.index.hour)
mean = by_hour.mean()
print(json.dumps({
    "intervals": [[int(t.timestamp()), f"{v:.3f}", int(n)] for t, v, n in zip(rms.index, rms, count)],
    "percentiles": {f"{p:g}": f"{np.percentile(whole, p, method='linear'):.3f}" for p in (1, 5, 25, 50, 75, 95, 99)},
    "within_pct": f"{100 * np.mean((whole >= 235) & (whole <= 245)):.3f}",
    "above_pct": f"{100 * np.mean(whole > 245):.3f}",
    "mean": f"{whole.mean():.3f}",
    "max": f"{whole.max():.3f}",
    "hours": [[int(h), f"{mean[h]:.3f}", f"{np.percentile(g, 5):.3f}", f"{np.percentile(g, 95):.3f}"] for h, g in by_hour],
    "highest_hour": int(mean.idxmax()),
}))
