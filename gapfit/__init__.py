"""gapfit: activation gaps of quantum Hall states from raw sweeps, with intervals that hold.

The functions of the Python interface are loaded on first use, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from gapfit.fit import GapFit, fit_series
    from gapfit.series import TemperatureSeries, make_series
    from gapfit.study import Study, load_study
    from gapfit.workflow import StudyResult, find_minima, fit_study, simulate_study

__version__ = "0.1.0"

_HOME = {
    "GapFit": "fit",
    "fit_series": "fit",
    "TemperatureSeries": "series",
    "make_series": "series",
    "Study": "study",
    "load_study": "study",
    "StudyResult": "workflow",
    "find_minima": "workflow",
    "fit_study": "workflow",
    "simulate_study": "workflow",
}

__all__ = [
    "GapFit",
    "Study",
    "StudyResult",
    "TemperatureSeries",
    "find_minima",
    "fit_series",
    "fit_study",
    "load_study",
    "make_series",
    "simulate_study",
]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'gapfit' has no attribute {name!r}")
    return getattr(import_module(f"gapfit.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
