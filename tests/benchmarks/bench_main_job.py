"""Wall time and memory of the main job: `gapfit fit` on a demo study, in a process of its own.

python tests/benchmarks/bench_main_job.py --repeats 3 --write reports/main_job.md
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

from machine import ROOT, conditions, markdown, publish

MEGABYTE = 1e6
SAMPLING_S = 0.1


@dataclass(frozen=True)
class Run:
    """One run: seconds, and bytes of the largest process and of all processes together (NaN if unknown)."""

    wall_s: float
    processor_s: float
    largest_bytes: float
    together_bytes: float
    exit_code: int


def family(root: int) -> list[int]:
    """A process and all its descendants."""
    parents: dict[int, list[int]] = {}
    for entry in Path("/proc").glob("[0-9]*/stat"):
        try:
            fields = entry.read_text().rpartition(")")[2].split()
        except OSError:
            continue
        parents.setdefault(int(fields[1]), []).append(int(entry.parent.name))
    found, todo = [], [root]
    while todo:
        one = todo.pop()
        found.append(one)
        todo += parents.get(one, [])
    return found


def memory(process: int) -> float:
    """Bytes of a process, shared pages in proportion; 0 where it is gone."""
    try:
        lines = Path(f"/proc/{process}/smaps_rollup").read_text().splitlines()
    except OSError:
        return 0.0
    return sum(1024.0 * float(line.split()[1]) for line in lines if line.startswith("Pss:"))


def measure(command: list[str]) -> Run:
    """Run a command, watching its memory (Linux) and what it used in the end."""
    together = 0.0 if Path("/proc").is_dir() else float("nan")
    start = time.monotonic()
    running = subprocess.Popen(command, stdout=subprocess.DEVNULL, cwd=ROOT)
    while True:
        gone, status, usage = os.wait4(running.pid, os.WNOHANG)
        if gone:
            break
        together = max(together, sum(map(memory, family(running.pid))))
        time.sleep(SAMPLING_S)
    wall = time.monotonic() - start
    unit = 1 if sys.platform == "darwin" else 1024
    code = os.waitstatus_to_exitcode(status)
    running.returncode = code
    return Run(wall, usage.ru_utime + usage.ru_stime, usage.ru_maxrss * unit, together, code)


def main() -> None:
    """Run the benchmark."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--study", type=Path, default=ROOT / "datasets_synthetic" / "harebell-3")
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--jobs", type=int, default=0, help="0 takes one per processor")
    parser.add_argument("--engine", default="mcmc", choices=("mcmc", "fast"))
    parser.add_argument("--no-figures", action="store_true")
    parser.add_argument("--write", type=Path, help="file for the report")
    options = parser.parse_args()
    where = conditions()
    study = options.study.resolve()
    runs = []
    for _ in range(options.repeats):
        with tempfile.TemporaryDirectory() as folder:
            command = [sys.executable, "-m", "gapfit", "fit", str(study), "--out", f"{folder}/out"]
            command += ["--quiet", "--engine", options.engine, "--jobs", str(options.jobs)]
            runs.append(measure(command + ["--no-figures"] * options.no_figures))
    rows = [
        [
            str(index + 1),
            f"{run.wall_s:.1f}",
            f"{run.processor_s:.1f}",
            f"{run.largest_bytes / MEGABYTE:.0f}",
            f"{run.together_bytes / MEGABYTE:.0f}",
            str(run.exit_code),
        ]
        for index, run in enumerate(runs)
    ]
    middle = statistics.median(run.wall_s for run in runs)
    kind = f"engine {options.engine}, jobs {options.jobs or 'one per processor'}"
    kind += ", no figures" if options.no_figures else ", with figures"
    publish(
        f"Main job: gapfit fit on {study.name}",
        [
            f"{kind}. Median wall time of {len(runs)} runs: {middle:.1f} s.\n",
            markdown(
                [
                    "run",
                    "wall (s)",
                    "processor (s)",
                    "largest process (MB)",
                    "all together (MB)",
                    "exit code",
                ],
                rows,
            ),
            where + "\n",
        ],
        options.write,
    )


if __name__ == "__main__":
    main()
