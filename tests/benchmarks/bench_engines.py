"""Seconds per series of both engines on teasel-2, and the time to start.

python tests/benchmarks/bench_engines.py --write reports/engines.md
"""

from __future__ import annotations

import argparse
import statistics
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

from machine import ROOT, conditions, markdown, publish  # before numpy: sets the number of threads

from gapfit.fit import fit_temperature_series
from gapfit.measurement import fit_settings, measure
from gapfit.study import load_study

STARTS = {
    "`gapfit --help`": ["-m", "gapfit", "--help"],
    "`import gapfit`": ["-c", "import gapfit"],
    "bare Python": ["-c", "pass"],
}


def started(arguments: list[str], repeats: int) -> float:
    """Median seconds of a Python process, the first run left out."""
    times = []
    for _ in range(repeats + 1):
        start = time.perf_counter()
        subprocess.run([sys.executable, *arguments], cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
        times.append(time.perf_counter() - start)
    return statistics.median(times[1:])


def main() -> None:
    """Run the benchmark."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeats", type=int, default=5, help="starts of each kind")
    parser.add_argument("--write", type=Path, help="file for the report")
    options = parser.parse_args()
    where = conditions()
    study = load_study(ROOT / "datasets_synthetic" / "teasel-2")
    settings = fit_settings(study)
    rows, spent = [], {"fast": [], "mcmc": []}
    for series in measure(study).series:
        row = [str(series.filling), str(series.n_point)]
        for engine, times in spent.items():
            wall, start = time.perf_counter(), time.process_time()
            fit = fit_temperature_series(series, replace(settings, engine=engine))
            times.append(time.process_time() - start)
            row += [f"{time.perf_counter() - wall:.2f}", f"{times[-1]:.2f}"]
            row += ["yes" if fit.diagnostics.converged else "no", f"{fit.gap.median:.4g}"]
        rows.append([*row, fit.verdict])
    heads = ["filling", "points"]
    heads += [
        f"{name}, {what}" for name in spent for what in ("wall (s)", "processor (s)", "converged", "gap (K)")
    ]
    middle = ", ".join(f"{name} {statistics.median(times):.2f} s" for name, times in spent.items())
    starts = [[name, f"{started(arguments, options.repeats):.3f}"] for name, arguments in STARTS.items()]
    publish(
        "Engines: seconds per series of teasel-2, one process",
        [
            f"Median processor time per series: {middle}.\n",
            markdown([*heads, "verdict"], rows),
            f"Start of a process, median of {options.repeats}:\n",
            markdown(["what", "seconds"], starts),
            where + "\n",
        ],
        options.write,
    )


if __name__ == "__main__":
    main()
