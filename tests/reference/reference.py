"""Recomputes the reference: `reference.py` all of it into reference.json, `--check` all against what is kept there,
`--cases 3 --check` three of them spread over the list, `--time NAME` the steady state of one, with its time.
The method is in supply.py; the pinned libraries are those of tests/peers/requirements.txt."""

import argparse
import json
import multiprocessing
import pathlib
import sys
import time

from cases import cases
from supply import RTOL, Supply

KEPT = pathlib.Path(__file__).with_name("reference.json")
# What two runs on different machines and library builds may differ by.
AGREE = 1e-5


def solve(case):
    start = time.perf_counter()
    try:
        result = Supply(case).measure()
    except Exception as why:  # one failing case must not hide which one it was
        return case, None, repr(why), time.perf_counter() - start
    return case, result, None, time.perf_counter() - start


def figures(result, path=""):
    if isinstance(result, dict):
        for key, value in result.items():
            yield from figures(value, f"{path}.{key}")
    elif isinstance(result, list):
        for k, value in enumerate(result):
            yield from figures(value, f"{path}[{k}]")
    elif result is not None:
        yield path, result


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--cases", type=int, help="only so many, spread over the list")
    parser.add_argument("--check", action="store_true", help="compare with reference.json instead of writing it")
    parser.add_argument("--time", help="solve the case of that name and print its seconds and its first mean")
    parser.add_argument("--rtol", type=float, default=RTOL, help="the integrator's relative tolerance, with --time")
    parser.add_argument("--jobs", type=int, default=1)
    options = parser.parse_args()
    todo = cases()
    assert len({case["name"] for case in todo}) == len(todo), "two cases of one name"
    if options.time:
        supply = Supply(next(case for case in todo if case["name"] == options.time), options.rtol)
        start = time.perf_counter()
        supply.steady()
        seconds = time.perf_counter() - start
        mean_v = supply.measure()["nodes"][0]["mean_v"]
        print(json.dumps({"seconds": seconds, "mean_v": mean_v}))
        return 0
    if options.cases:
        todo = [todo[k * (len(todo) - 1) // max(options.cases - 1, 1)] for k in range(options.cases)]
    with multiprocessing.Pool(options.jobs) as pool:
        done = []
        for case, result, why, seconds in pool.imap(solve, todo):
            print(f"{seconds:7.1f} s  {case['name']}{': ' + why if why else ''}", file=sys.stderr, flush=True)
            done.append((case, result, why))
    failed = [case["name"] for case, _, why in done if why]
    if options.check:
        kept = {row["case"]["name"]: row for row in json.loads(KEPT.read_text())}
        for case, result, why in done:
            row = kept.get(case["name"])
            if why or row is None:
                continue
            if row["case"] != case:
                failed.append(f"{case['name']}: the kept case is another one")
            old = dict(figures(row["result"]))
            for path, value in figures(result):
                if abs(value - old[path]) > AGREE * abs(old[path]) + 1e-7:
                    failed.append(f"{case['name']}{path}: {value} and kept {old[path]}")
        missing = [case["name"] for case, _, _ in done if case["name"] not in kept]
        failed += [f"{name}: not kept" for name in missing]
    else:
        rows = [{"case": case, "result": result} for case, result, why in done if not why]
        KEPT.write_text("[\n" + ",\n".join(json.dumps(row) for row in rows) + "\n]\n")
    for line in failed:
        print("FAILED", line, file=sys.stderr)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
