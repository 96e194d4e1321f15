"""Records of the carrier density: along the sweeps, by which routes, and resting on what.

The density along a sweep is offset + slope * abscissa: a constant for a field sweep, the gate's calibration
for a gate sweep.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.constants import e, h

from gapfit.hall import density_from_filling, filling_factor
from gapfit.traces import Sweep

__all__ = ["Anchor", "DensityEstimate", "DensityRoute"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Anchor:
    """A place on a sweep whose filling factor is known.

    Attributes
    ----------
    filling : Fraction
    kind : {"plateau", "minimum"}
        What was recognised.
    temperature_K, field_T : float
        Temperature and absolute field there.
    abscissa : float, T, V or m^-2
        Where it lies on the sweep.
    density, error : float, m^-2
        nu e B / h and its standard error; for gate sweeps the error of the place, as density.
    """

    filling: Fraction
    kind: str
    temperature_K: float
    field_T: float
    abscissa: float
    density: float
    error: float


@dataclass(frozen=True)
class DensityRoute:
    """One way to the density (or, for gate sweeps, to the density per volt).

    Attributes
    ----------
    name : str
        ``"Hall slope"``, ``"plateau centres"``, ``"minima"``, ``"stated"``.
    value, error : float, m^-2 or m^-2 per volt
    n_used : int
        Sweeps or anchors that it rests on.
    """

    name: str
    value: float
    error: float
    n_used: int


@dataclass(frozen=True)
class DensityEstimate:
    """Density along the sweeps of a family: offset + slope * abscissa.

    Attributes
    ----------
    kind : {"field", "density", "gate"}
        What is swept.
    offset, slope : float, m^-2 and m^-2 per unit of the abscissa
        A field sweep has slope zero.
    covariance : tuple of float
        Variance of the offset, covariance, variance of the slope.
    routes : tuple of DensityRoute
        All ways side by side.
    anchors : tuple of Anchor
        What the refined value rests on.
    stated : float, m^-2 (or per volt)
        The value given by the user, NaN if none.
    notices : tuple of str
        What the user must know.
    """

    kind: str
    offset: float
    slope: float
    covariance: tuple[float, float, float] = (0.0, 0.0, 0.0)
    routes: tuple[DensityRoute, ...] = ()
    anchors: tuple[Anchor, ...] = ()
    stated: float = float("nan")
    notices: tuple[str, ...] = ()

    @property
    def density_per_m2(self) -> float:
        """Density of a field sweep; NaN for other sweeps."""
        return self.offset if self.kind == "field" else float("nan")

    @property
    def error_per_m2(self) -> float:
        """Standard error of the density of a field sweep; NaN for other sweeps."""
        return float(np.sqrt(self.covariance[0])) if self.kind == "field" else float("nan")

    @property
    def neutrality(self) -> float:
        """Abscissa of zero density; NaN for field sweeps."""
        return -self.offset / self.slope if self.slope else float("nan")

    @property
    def spread(self) -> float:
        """Largest relative difference between two measured routes; NaN for fewer than two."""
        values = [route.value for route in self.routes if route.name != "stated"]
        return float(np.ptp(values) / abs(np.mean(values))) if len(values) > 1 else float("nan")

    def density(self, sweep: Sweep) -> FloatArray:
        """Density along a sweep, m^-2."""
        if self.kind == "field":
            return np.full(sweep.n_point, self.offset)
        return self.offset + self.slope * sweep.abscissa

    def filling(self, sweep: Sweep) -> FloatArray:
        """Filling factor along a sweep."""
        return filling_factor(self.density(sweep), np.abs(sweep.field_T))

    def filling_error(self, filling: float, field_T: float) -> float:
        """Standard error of the filling factor from the density's, at a place of a given filling."""
        density = density_from_filling(filling, field_T)
        if self.kind == "field":
            return abs(filling) * self.error_per_m2 / abs(self.offset)
        place = (density - self.offset) / self.slope
        variance = self.covariance[0] + 2 * place * self.covariance[1] + place**2 * self.covariance[2]
        return float(np.sqrt(max(variance, 0.0))) * h / (e * field_T)
