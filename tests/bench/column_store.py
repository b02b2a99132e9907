"""10-minute statistics and exact percentiles of a year in DuckDB on Parquet with one thread: prints the median of five
runs in seconds. usage: column_store.py CSV"""

import statistics
import sys
import time
from pathlib import Path

import duckdb

csv = Path(sys.argv[1])
parquet = csv.with_suffix(".parquet")
db = duckdb.connect()
db.execute("SET threads = 1")
db.execute(f"COPY (SELECT t, CAST(mv AS INTEGER) AS mv FROM read_csv('{csv}')) TO '{parquet}' (FORMAT parquet)")


def work():
    db.execute(
        f"SELECT t // 600000, sqrt(avg((mv / 1000.0) ** 2)), min(mv), max(mv), count(*) FROM '{parquet}' GROUP BY 1 ORDER BY 1"
    ).fetchall()
    db.execute(f"SELECT quantile_cont(mv, [0.01, 0.05, 0.5, 0.95, 0.99]) FROM '{parquet}'").fetchall()


times = []
for _ in range(5):
    begun = time.perf_counter()
    work()
    times.append(time.perf_counter() - begun)
print(statistics.median(times))
