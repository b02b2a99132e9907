"""Reads exports back with libraries of others and prints what they found, as JSON.

usage: read_back.py csv FILE | xlsx FILE | blocks DATABASE CHANNEL
"""

import csv
import json
import math
import sqlite3
import sys


def read_csv(path):
    import pandas

    frame = pandas.read_csv(path)
    with open(path, newline="", encoding="utf-8") as file:
        rows = list(csv.reader(file, strict=True))
    assert len(rows) - 1 == len(frame), "the two readers disagree on the number of rows"
    times = pandas.to_datetime(frame["time"], utc=True)
    return {
        "columns": rows[0],
        "rows": len(frame),
        "sum_v": float(frame["value_v"].sum()),
        "first_ms": int(times.iloc[0].value // 1_000_000),
        "last_ms": int(times.iloc[-1].value // 1_000_000),
        "first_row": rows[1],
    }


def read_xlsx(path):
    import openpyxl

    book = openpyxl.load_workbook(path)
    found = {}
    for sheet in book.worksheets:
        rows = list(sheet.iter_rows(values_only=True))
        found[sheet.title] = {
            "columns": list(rows[0]),
            "rows": len(rows) - 1,
            "types": [type(cell).__name__ for cell in rows[1]] if len(rows) > 1 else [],
            "first": [str(cell) for cell in rows[1]] if len(rows) > 1 else [],
        }
    return found


def read_blocks(path, channel):
    import numpy
    from pcodec import standalone

    conn = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
    rows = conn.execute(
        "SELECT b.t_ms, b.count, b.min_mv, b.max_mv, b.mean_square_v2, b.times, b.millivolts "
        "FROM block b JOIN channel c ON c.id = b.channel WHERE c.name = ? ORDER BY b.t_ms",
        (channel,),
    )
    times, values = [], []
    for hour, count, low, high, mean_square, packed_times, packed_values in rows:
        t = standalone.simple_decompress(packed_times).astype(numpy.int64) + hour
        v = standalone.simple_decompress(packed_values)
        assert len(t) == len(v) == count, "a block's count is not what is in it"
        assert low == v.min() and high == v.max(), "a block's extremes are not those in it"
        assert math.isclose(mean_square, float(((v / 1000.0) ** 2).mean()), rel_tol=1e-12)
        times.append(t)
        values.append(v)
    t, v = numpy.concatenate(times), numpy.concatenate(values)
    assert (numpy.diff(t) > 0).all(), "times do not rise"
    tenth = t // 600_000 * 600_000
    starts = numpy.unique(tenth)
    rms = [float(numpy.sqrt(((v[tenth == start] / 1000.0) ** 2).mean())) for start in starts]
    volts = v / 1000.0
    return {
        "rows": len(t),
        "sum_mv": int(v.sum()),
        "starts_ms": [int(s) for s in starts],
        "rms_v": rms,
        # numpy's "linear" method is type 7 of Hyndman and Fan (1996).
        "percentiles_v": [float(numpy.percentile(volts, p, method="linear")) for p in (1, 5, 50, 95, 99)],
    }


if __name__ == "__main__":
    kind, arguments = sys.argv[1], sys.argv[2:]
    readers = {"csv": read_csv, "xlsx": read_xlsx, "blocks": read_blocks}
    json.dump(readers[kind](*arguments), sys.stdout)
