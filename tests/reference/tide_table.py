"""The tide table's method once more in numpy, for tests/reference_mains.rs to compare with.

Run: tide_table.py FILE.csv.gz MOMENT...; prints one table of 144 (low, median, high) for each moment, as JSON.
Times are taken as UTC and the household's zone too. Needs tests/peers/requirements.txt.
"""
import json
import sys
import warnings

import numpy as np
import pandas as pd

warnings.filterwarnings("ignore", message="Mean of empty slice|All-NaN slice")
DAY, MOST_ROWS = 144, 84


def kernel(width):
    reach = int(np.ceil(2 * width))
    offsets = np.arange(-reach, reach + 1)
    return offsets, np.exp(-0.5 * (offsets / width) ** 2)


def weighted_percentiles(values, weights, at):
    there = np.isfinite(values) & (weights > 0)
    order = np.lexsort((weights[there], values[there]))
    values, weights = values[there][order], weights[there][order]
    middles = np.cumsum(weights) - weights / 2
    return np.interp(middles[0] + (middles[-1] - middles[0]) * np.asarray(at), middles, values)


def table(series, issued_at):
    index = pd.date_range(end=issued_at - pd.Timedelta("10min"), periods=MOST_ROWS * DAY, freq="10min")
    volts = series.reindex(index).to_numpy().reshape(MOST_ROWS, DAY)
    middle = np.array([np.sort(r[np.isfinite(r)])[np.isfinite(r).sum() // 2] if np.isfinite(r).any() else np.nan for r in volts])
    volts = np.where(np.abs(volts - middle[:, None]) > 0.1 * middle[:, None], np.nan, volts)
    first = int(np.argmax(np.isfinite(volts).sum(1) >= DAY // 2))
    volts, index = volts[first:], index[first * DAY:]
    n = len(volts)
    age = n - 1 - np.arange(n)
    slot = (index.hour * 6 + index.minute // 10).to_numpy().reshape(n, DAY)
    weekend = (index.dayofweek >= 5).reshape(n, DAY)
    there = np.isfinite(volts)
    row_mean = np.where(there.sum(1) >= DAY // 2, np.nanmean(volts, axis=1), np.nan)

    def by_kind(pair, slots, kinds):
        return np.where(kinds, pair[1][slots], pair[0][slots])

    # shape
    left, shape = volts - row_mean[:, None], [np.zeros(DAY), np.zeros(DAY)]
    for half_life, width, other in ((20.0, 0.6, 0.4), (2.5, 3.0, 0.3)):
        passed = []
        for kind in (False, True):
            weight = 0.5 ** (age / half_life)[:, None] * np.where(weekend == kind, 1.0, other) * np.isfinite(left)
            sums = np.bincount(slot.ravel(), (weight * np.nan_to_num(left)).ravel(), DAY)
            weights = np.bincount(slot.ravel(), weight.ravel(), DAY)
            offsets, shares = kernel(width)
            passed.append(sum(s * np.roll(sums, -o) for o, s in zip(offsets, shares))
                          / sum(s * np.roll(weights, -o) for o, s in zip(offsets, shares)))
        left = left - by_kind(passed, slot, weekend)
        shape = [a + b for a, b in zip(shape, passed)]
    fading = 0.5 ** (age / 20.0) * np.isfinite(row_mean)
    base = np.sum(np.nan_to_num(row_mean) * fading) / fading.sum()
    left = (volts - base - by_kind(shape, slot, weekend)).ravel()

    # level
    def standing(end):
        def over(length):
            stretch = left[max(0, end - length):end]
            enough = np.isfinite(stretch).sum() >= 0.4 * len(stretch)
            return np.nanmean(stretch) if enough else np.nan
        day = over(DAY)
        short, hours, week = (np.nan_to_num(over(length) - day) for length in (2, 24, 7 * DAY))
        return [day, short, hours, week * np.exp(-0.5 * (week / 1.5) ** 2)]

    known = np.array([standing(row * DAY) for row in range(1, n + 1)])
    now, known = known[-1], known[:-1]
    good = np.isfinite(known).all(axis=1)
    known = np.where(good[:, None], known, 0.0)
    lead = np.arange(DAY)
    prior = np.stack([np.full(DAY, 0.85), 0.6 * np.exp(-lead / 12), 0.1 * np.exp(-lead / 40), np.full(DAY, 0.35)], 1)
    came = left.reshape(n, DAY)[1:]
    offsets, shares = kernel(6.0)
    near = np.clip(lead[:, None] + offsets, 0, DAY - 1)
    weight = (np.isfinite(came[:, near]) * shares).sum(2)
    smooth = (np.nan_to_num(came[:, near]) * shares).sum(2) / np.where(weight > 0, weight, np.nan)
    surprise = np.where((weight > 0.3 * shares.sum()) & good[:, None], smooth - known @ prior.T, np.nan)
    sizes = np.sort(np.abs(surprise[np.isfinite(surprise)]))
    usual = 1.4826 * sizes[len(sizes) // 2]
    rows = (0.5 ** (age[1:] / 30.0) * good)[:, None]
    normal = (known * rows).T @ known + 60.0 * usual**2 * np.eye(4)
    pull = (known * rows).T @ np.nan_to_num(np.clip(surprise, -4 * usual, 4 * usual))
    slopes = prior + np.linalg.solve(normal, pull).T

    # spread
    errors = np.where(good[:, None], came - known @ slopes.T, np.nan)
    coming = pd.date_range(issued_at, periods=DAY, freq="10min")
    slots, kinds = (coming.hour * 6 + coming.minute // 10).to_numpy(), coming.dayofweek.to_numpy() >= 5
    recent = 0.5 ** (age[1:] / 12.0)
    widening = 1.05 + 1.7 / n
    grid, quantiles = list(range(0, DAY, 3)) + [DAY], []
    for k in grid:
        k = min(k, DAY - 1)
        weights = recent[:, None] * shares * np.where(weekend[1:, near[k]] == kinds[k], 1.0, 0.4)
        low, median, high = weighted_percentiles(errors[:, near[k]].ravel(), weights.ravel(), (0.05, 0.5, 0.95))
        quantiles.append([median + widening * (low - median), median, median + widening * (high - median)])
    offset = np.stack([np.interp(lead, grid, column) for column in np.array(quantiles).T], 1)
    centre = base + by_kind(shape, slots, kinds) + slopes @ now
    return (centre[:, None] + offset).tolist()


rows = pd.read_csv(sys.argv[1], parse_dates=["time"])
groups = np.square(rows["volts"]).groupby(rows["time"].dt.floor("10min")).mean()
series = np.sqrt(groups)
print(json.dumps([table(series, pd.Timestamp(moment).tz_localize(None)) for moment in sys.argv[2:]]))
