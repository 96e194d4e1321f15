"""Where a benchmark ran, and its result as a Markdown table."""

from __future__ import annotations

import os
import platform
import subprocess
from collections.abc import Sequence
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(variable, "1")  # as the command line does; read when numpy is first imported

PACKAGES = ("numpy", "scipy", "emcee", "matplotlib", "pandas")


def processor() -> str:
    """Name of the processor."""
    info = Path("/proc/cpuinfo")
    lines = info.read_text().splitlines() if info.is_file() else []
    models = [line.split(":", 1)[1].strip() for line in lines if line.startswith("model name")]
    return models[0] if models else platform.processor() or platform.machine()


def commit() -> str:
    """Commit of the clone, as far as it is known."""
    asked = subprocess.run(
        ["git", "-C", str(ROOT), "rev-parse", "--short", "HEAD"], capture_output=True, text=True, check=False
    )
    return asked.stdout.strip() or "unknown"


def conditions() -> str:
    """One paragraph: date, commit, machine, load, versions."""
    from gapfit import __version__

    load = f", load {os.getloadavg()[0]:.1f} at the start" if hasattr(os, "getloadavg") else ""
    packages = ", ".join(f"{package} {version(package)}" for package in PACKAGES)
    return (
        f"{datetime.now(UTC):%Y-%m-%d}, commit {commit()}. {processor()}, {os.cpu_count()} processors{load}. "
        f"{platform.system()}, Python {platform.python_version()}, gapfit {__version__}, {packages}."
    )


def markdown(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Markdown table."""
    lines = [heads, ["---"] * len(heads), *rows]
    return "".join(f"| {' | '.join(line)} |\n" for line in lines)


def publish(title: str, paragraphs: Sequence[str], target: Path | None) -> None:
    """Print a report, and write it where asked."""
    text = f"# {title}\n\n" + "\n".join(paragraphs)
    print(text)
    if target is not None:
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_text(text, encoding="utf-8")
