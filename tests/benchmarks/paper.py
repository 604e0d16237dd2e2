"""How long a printed sheet takes: ``python -m tests.benchmarks.paper [--json]``.

A test of 600 s at ten samples and forty written tags a second, a commissioning folder of ten such sheets, and the
workbook of their archive; the median of three runs each, in this process, after one run for the typefaces.
Exits with 1 where the sheet of 6000 samples takes longer than 3 s.
"""

import argparse
import json
import sys
from collections.abc import Callable
from datetime import timedelta
from math import sin
from pathlib import Path
from statistics import median
from tempfile import TemporaryDirectory
from time import perf_counter

from autotune.paper.pdf import to_pdf
from autotune.paper.workbook import to_workbook
from autotune.sheet.schema import Samples, Sheet, WatchColumn, WriteLine
from autotune.sheet.sqlite_store import SqliteStore
from tests.sheet.sheets import change, sheet

SAMPLES = 6000
SECONDS_AT_MOST = 3.0
_RUNS = 3


def long_sheet(minutes: int = 0) -> Sheet:
    """A sheet as ten minutes of a test leave it: invented readings, a switch every five seconds."""
    one = sheet(minutes=minutes)
    times = tuple(0.1 * n for n in range(SAMPLES))
    levels = tuple(47.0 if int(t_s / 5.0) % 2 == 0 else 37.0 for t_s in times)
    samples = Samples(
        t_s=times, taken_earliest_s=times, taken_latest_s=times, sp_pct=(60.0,) * SAMPLES, op_pct=levels,
        pv_pct=tuple(60.0 + 2.0 * sin(0.63 * t_s) + 0.05 * sin(97.0 * t_s) for t_s in times),
        mode=("MAN",) * SAMPLES, pv_quality=("good",) * SAMPLES, op_quality=("good",) * SAMPLES,
        watch=(WatchColumn(name="divert valve", reading_eu=(1.0,) * SAMPLES),),
    )  # fmt: skip
    writes = tuple(
        WriteLine(t_s=t_s, utc=one.started_utc + timedelta(seconds=t_s), tag=tag, raw=raw, outcome="APPLIED",
                  sent_earliest_s=t_s, sent_latest_s=t_s + 0.002, why="DriveOutput")
        for t_s, level in zip(times, levels, strict=True)
        for tag, raw in (("holder_request", 7), ("heartbeat", int(10.0 * t_s)), ("op_request", level),
                         ("sequence", int(10.0 * t_s)))
    )  # fmt: skip
    ended = one.started_utc + timedelta(seconds=600)
    return Sheet.model_validate(dict(one) | {"samples": samples, "writes": writes, "ended_utc": ended})


def main() -> int:
    """Measure, print, and say whether the bar is held."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")
    is_json = parser.parse_args().json
    with TemporaryDirectory() as folder:
        store = SqliteStore.create(Path(folder) / "sheets.sqlite")
        for minutes in range(0, 200, 20):
            one = long_sheet(minutes)
            store.append(one)
            store.append_addendum(change(one))
        kept, head_hash = [store.get(line.sheet_id) for line in store.list()], store.head_hash()
        acts: dict[str, Callable[[], bytes]] = {
            "sheet": lambda: to_pdf(kept[:1], head_hash),
            "folder_of_ten": lambda: to_pdf(kept, head_hash),
            "workbook": lambda: to_workbook(store, ()),
        }
        measured = {name: _measured(act) for name, act in acts.items()}
    is_held = measured["sheet"]["median_s"] <= SECONDS_AT_MOST
    if is_json:
        print(json.dumps({"samples": SAMPLES, "sheet_within_s": SECONDS_AT_MOST, "is_held": is_held, **measured}))
    else:
        for name, row in measured.items():
            print(f"{name:14} {row['median_s']:7.2f} s (at most {row['max_s']:.2f} s), {row['bytes']:9.0f} bytes")
        print(f"bar: a sheet of {SAMPLES} samples within {SECONDS_AT_MOST:g} s: {'held' if is_held else 'MISSED'}")
    return 0 if is_held else 1


def _measured(act: Callable[[], bytes]) -> dict[str, float]:
    file, spent_s = act(), []
    for _ in range(_RUNS):
        began_s = perf_counter()
        file = act()
        spent_s.append(perf_counter() - began_s)
    return {"median_s": median(spent_s), "max_s": max(spent_s), "bytes": len(file)}


if __name__ == "__main__":
    sys.exit(main())
