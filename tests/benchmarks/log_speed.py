"""Time to open a log of many checks, filter it and plot the trend, against the same query and plot without this project.

    python tests/benchmarks/log_speed.py [--checks 100000] [--repeats 5] [--seed 1]

The rival is the plain sqlite3 module with the same SELECT and matplotlib with the same number of points and panels, in the
same process, in turns. Printed are the medians and their ratio; the aim is 2 or less.
"""

from __future__ import annotations

import argparse
import io
import sqlite3
import statistics
import tempfile
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from fringespan.export.figure import figure_bytes
from fringespan.export.trend_figure import trend_figure
from fringespan.magnification.conditions import Conditions
from fringespan.magnification.log import CheckLog, LogEntry, LogFilter


def filled_log(path: Path, checks: int, seed: int) -> None:
    """Write a log of three instruments with four magnifications each."""
    rng = np.random.default_rng(seed)
    start = datetime(2015, 1, 1, tzinfo=UTC)
    off = rng.normal(0, 0.003, (checks, 2))
    entries = []
    for k in range(checks):
        instrument, magnification = k % 3, (k // 3) % 4
        nominal = 0.08 / 2**magnification
        entries.append(
            LogEntry(
                checked_at=(start + timedelta(minutes=50 * k)).isoformat(),
                conditions=Conditions(
                    instrument=f"TEM {instrument}",
                    voltage_kv=200.0,
                    mode="TEM",
                    indicated_magnification=1e5 * 2**magnification,
                    camera="bottom",
                    binning=1,
                ),
                pictures="gold.tif",
                sha256=f"{k:064x}",
                reference="Gold",
                temperature_c=22.0,
                nominal_pixel_size_nm=(nominal, nominal),
                pixel_size_nm=(nominal * (1 + off[k, 0]), nominal * (1 + off[k, 1])),
                relative_uncertainty=(0.001, 0.001),
                shared_error=True,
                shear=0.0,
                shear_uncertainty=1e-4,
                coverage_factor=2.0,
                tolerance=0.01,
                verdict="within tolerance",
                program_version="0.1.0",
                details='{"made": "for a benchmark"}',
            )
        )
    with CheckLog(path) as log:
        log.add_all(entries)


def ours(path: Path, wanted: LogFilter) -> int:
    """Open, filter, plot."""
    with CheckLog(path) as log:
        trend = log.trend(wanted)
    figure_bytes(trend_figure(trend), "png")
    return len(trend.checked_at)


def plain(path: Path, wanted: LogFilter) -> int:
    """Do the same with sqlite3 and matplotlib alone."""
    connection = sqlite3.connect(path)
    where, values = wanted.where()
    rows = connection.execute(
        "SELECT checked_at, pixel_row_nm, pixel_column_nm, relative_uncertainty_row, relative_uncertainty_column, "
        "nominal_row_nm, nominal_column_nm, tolerance, instrument, mode, voltage_kv, indicated_magnification, "
        f"camera_length_mm, camera, binning FROM checks WHERE {where} ORDER BY checked_at, number",
        values,
    ).fetchall()
    connection.close()
    panels: dict[tuple[object, ...], list[tuple[object, ...]]] = {}
    for row in rows:
        panels.setdefault(row[8:], []).append(row)
    figure = Figure(figsize=(180 / 25.4, (58 * len(panels) + 8) / 25.4), layout="constrained")
    for axes, (key, own) in zip(figure.subplots(len(panels), 1, squeeze=False)[:, 0], panels.items(), strict=True):
        when = np.array([row[0][:19] for row in own], dtype="datetime64[s]")
        for axis, marker in ((1, "o"), (2, "s")):
            value = [100 * (row[axis] / row[axis + 4] - 1) for row in own]
            axes.plot(when, value, marker=marker, markersize=1.5, linestyle="none", markeredgewidth=0)
        axes.axhline(0)
        axes.axhline(1)
        axes.axhline(-1)
        axes.set_title(str(key))
    figure.savefig(io.BytesIO(), format="png", dpi=300)
    return len(rows)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--checks", type=int, default=100_000)
    parser.add_argument("--repeats", type=int, default=5)
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "log.sqlite"
        start = time.perf_counter()
        filled_log(path, arguments.checks, arguments.seed)
        print(f"{arguments.checks} checks written in {time.perf_counter() - start:.1f} s")
        for name, wanted in (
            ("all", LogFilter()),
            ("one instrument", LogFilter(instrument="TEM 1")),
            ("one magnification", LogFilter(instrument="TEM 1", indicated_magnification=4e5)),
        ):
            times: dict[str, list[float]] = {"ours": [], "plain": []}
            for _ in range(arguments.repeats):
                for who, work in (("plain", plain), ("ours", ours)):
                    start = time.perf_counter()
                    count = work(path, wanted)
                    times[who].append(time.perf_counter() - start)
            mine, other = (statistics.median(times[who]) for who in ("ours", "plain"))
            print(
                f"{name:18s} {count:6d} checks: {mine:.2f} s, plain {other:.2f} s, ratio {mine / other:.2f}", flush=True
            )


if __name__ == "__main__":
    main()
