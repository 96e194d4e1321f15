"""Sweeps as they are used: resistivities along a field, density or gate sweep, and the sample's shape.

A `TraceFamily` holds all sweeps of one sample in one cool-down. The functions that make one are in
`loading`; `symmetry` joins field directions; here are the records and the laws of conversion.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from math import log, pi
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from gapfit.columns import ColumnRule, Table
from gapfit.errors import InputError

__all__ = [
    "Alignment",
    "FromName",
    "FromTable",
    "GateStart",
    "Geometry",
    "GeometryKind",
    "Sweep",
    "SweepKind",
    "TraceFamily",
    "TraceSettings",
    "by_fixed_field",
    "conductivity",
    "conductivity_error",
    "corbino_conductivity",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
SweepKind = Literal["field", "density", "gate"]
Direction = Literal["up", "down"]
GeometryKind = Literal["hall-bar", "van-der-pauw", "corbino", "resistivity", "unknown"]
SAME_FIELD = 0.005
"""Fixed fields within this share are the same."""

GEOMETRIES = ("hall-bar", "van-der-pauw", "corbino", "resistivity", "unknown")


@dataclass(frozen=True)
class Geometry:
    """Shape of the sample: what turns a resistance into a resistivity.

    Attributes
    ----------
    kind : {"hall-bar", "van-der-pauw", "corbino", "resistivity", "unknown"}
        ``"resistivity"``: the columns are per square already.
    length_um, width_um : float, optional, um
        Distance of the voltage contacts and width of a Hall bar.
    inner_radius_um, outer_radius_um : float, optional, um
        Radii of a Corbino disc.
    lead_ohm : float, ohm
        Series resistance of the leads of a Corbino disc.
    relative_error : float
        Relative error of the factor; it moves the prefactor, never the gap.
    """

    kind: GeometryKind = "unknown"
    length_um: float | None = None
    width_um: float | None = None
    inner_radius_um: float | None = None
    outer_radius_um: float | None = None
    lead_ohm: float = 0.0
    relative_error: float = 0.0

    def __post_init__(self) -> None:
        if self.kind not in GEOMETRIES:
            raise InputError(f"geometry {self.kind!r} is unknown; allowed are {', '.join(GEOMETRIES)}")
        needed = {"hall-bar": ("length_um", "width_um"), "corbino": ("inner_radius_um", "outer_radius_um")}
        for name in needed.get(self.kind, ()):
            size = getattr(self, name)
            if size is None or not size > 0:
                raise InputError(f"a {self.kind} needs {name}, above zero; found {size}")
        if self.kind == "corbino" and not (self.outer_radius_um or 0.0) > (self.inner_radius_um or 0.0):
            raise InputError(
                f"a corbino disc needs outer_radius_um above inner_radius_um; found "
                f"{self.outer_radius_um} and {self.inner_radius_um}"
            )

    @property
    def known(self) -> bool:
        """Whether readings are truly per square."""
        return self.kind != "unknown"

    @property
    def factor(self) -> float:
        """Resistivity over resistance, along the current; for a Corbino disc conductivity over conductance.

        Hall bar: W / L. Van der Pauw: pi / ln 2, of the mean of the two contact pairs of a square sample
        (van der Pauw 1958). Corbino: ln(r_outer / r_inner) / 2 pi.
        """
        if self.kind == "hall-bar" and self.width_um and self.length_um:
            return self.width_um / self.length_um
        if self.kind == "corbino" and self.outer_radius_um and self.inner_radius_um:
            return log(self.outer_radius_um / self.inner_radius_um) / (2 * pi)
        return pi / log(2) if self.kind == "van-der-pauw" else 1.0


def corbino_conductivity(resistance_ohm: FloatArray, geometry: Geometry) -> FloatArray:
    """Conductivity ln(r_outer / r_inner) / (2 pi (R - R_lead)) of a Corbino disc.

    Parameters
    ----------
    resistance_ohm : ndarray[n_point], ohm
        Two-terminal resistance.
    geometry : Geometry
        Radii and lead resistance.

    Returns
    -------
    ndarray[n_point], S
        Not finite where the resistance equals that of the leads.
    """
    with np.errstate(divide="ignore"):
        return geometry.factor / (resistance_ohm - geometry.lead_ohm)


def conductivity(rho_xx: FloatArray | float, rho_xy: FloatArray | float) -> FloatArray:
    """Conductivity sigma_xx = rho_xx / (rho_xx^2 + rho_xy^2) of an isotropic sheet.

    Parameters
    ----------
    rho_xx, rho_xy : float or ndarray, ohm
        Resistivities.

    Returns
    -------
    ndarray, S
    """
    return np.asarray(rho_xx / (np.square(rho_xx) + np.square(rho_xy)), dtype=float)


def conductivity_error(
    rho_xx: FloatArray, rho_xy: FloatArray, rho_xx_error: FloatArray, rho_xy_error: FloatArray | float = 0.0
) -> FloatArray:
    """Standard error of `conductivity` by its derivatives, errors of the two resistivities independent.

    Parameters
    ----------
    rho_xx, rho_xy, rho_xx_error, rho_xy_error : ndarray, ohm
        Resistivities and their standard errors.

    Returns
    -------
    ndarray, S
    """
    square = rho_xx**2 + rho_xy**2
    along = np.abs(rho_xy**2 - rho_xx**2) * rho_xx_error
    across = np.abs(2 * rho_xx * rho_xy) * rho_xy_error
    return np.asarray(np.hypot(along, across) / square**2, dtype=float)


@dataclass(frozen=True)
class FromName:
    """A number that stands in the file name.

    Attributes
    ----------
    pattern : str
        Regular expression with a group ``(?P<value>...)``; a ``p`` in the value is a decimal point.
    unit : str
        Unit of the number.
    """

    pattern: str
    unit: str


@dataclass(frozen=True)
class FromTable:
    """A number of each file, listed in another file.

    Attributes
    ----------
    table : Table
        Has one column of file names and one of numbers.
    column : str or int, optional
        Column of the numbers; found by its name where not given.
    unit : str, optional
        Unit of the numbers; the file's, else the house unit.
    """

    table: Table
    column: str | int | None = None
    unit: str | None = None


@dataclass(frozen=True)
class GateStart:
    """Starting values of a gate's calibration.

    Attributes
    ----------
    density_per_volt : float, optional, m^-2/V
        Capacitance over elementary charge.
    neutrality_V : float, optional, V
        Gate voltage of zero density; found from the plateaus or minima where not given.
    """

    density_per_volt: float | None = None
    neutrality_V: float | None = None


@dataclass(frozen=True)
class TraceSettings:
    """How the columns of raw files become sweeps.

    Attributes
    ----------
    sweep : {"field", "density", "gate"}
        What is swept.
    temperature : ColumnRule, FromName, FromTable or float (K)
        Where the temperature comes from.
    rho_xx : ColumnRule
        Longitudinal signal, V or ohm (or S for a Corbino disc).
    field : ColumnRule, FromName, FromTable or float (T), optional
        The perpendicular field.
    gate, density : ColumnRule, optional
        What is swept, where it is not the field.
    rho_xy, quadrature : ColumnRule, optional
        Hall signal, and out-of-phase part of the longitudinal one.
    current_A : float or ColumnRule, optional
        Excitation current; needed for signals in volts.
    contacts : str or ColumnRule
        Name of the contacts, or a column of names.
    geometry : Geometry
        Shape of the sample.
    gate_start : GateStart
        Starting values of the gate's calibration.
    allow_magnitude : bool
        Take a lock-in magnitude although its noise has a bias.
    """

    sweep: SweepKind
    temperature: ColumnRule | FromName | FromTable | float
    rho_xx: ColumnRule
    field: ColumnRule | FromName | FromTable | float | None = None
    gate: ColumnRule | None = None
    density: ColumnRule | None = None
    rho_xy: ColumnRule | None = None
    quadrature: ColumnRule | None = None
    current_A: float | ColumnRule | None = None
    contacts: str | ColumnRule = ""
    geometry: Geometry = Geometry()
    gate_start: GateStart = GateStart()
    allow_magnitude: bool = False


@dataclass(frozen=True, eq=False)
class Sweep:
    """One monotone pass of one field direction, in order of rising abscissa.

    Attributes
    ----------
    file : str
        Source file; several, joined by `` + ``, after symmetrising.
    row : ndarray[n_point] of int
        Row in the (first) file.
    kind : {"field", "density", "gate"}
        What is swept.
    field_T : ndarray[n_point], T
        Field as recorded, signed; its absolute value, corrected for remanence and lag, after symmetrising.
    gate_V : ndarray[n_point], V
        Gate voltage, NaN where there is none.
    density_per_m2 : ndarray[n_point], m^-2
        Density as recorded, NaN where there is none.
    temperature_K : ndarray[n_point], K
        Temperature along the sweep.
    signal : ndarray[n_point], ohm or S
        rho_xx, or sigma_xx for a Corbino disc.
    quantity : {"rho_xx", "sigma_xx"}
        What the signal is.
    rho_xy_ohm : ndarray[n_point], ohm, or None
        Hall resistivity.
    quadrature : ndarray[n_point], ohm, or None
        Out-of-phase part of the longitudinal resistance.
    direction : {"up", "down"}
        Whether the recorded abscissa rose or fell.
    field_sign : int
        +1 or -1 for one field direction, 0 for both joined.
    group : int
        Sweeps of one number were taken together: same contacts, current and temperature.
    current_A : float
        Excitation current, A; NaN if unknown.
    contacts : str
        Name of the contacts.
    step : float
        Digit of the signal, in its unit.
    segment : ndarray[n_point] of int
        Numbers the pieces between gaps in the abscissa.
    one_sided : ndarray[n_point] of bool
        Points of a joined sweep for which only one field direction exists.
    """

    file: str
    row: IntArray
    kind: SweepKind
    field_T: FloatArray
    gate_V: FloatArray
    density_per_m2: FloatArray
    temperature_K: FloatArray
    signal: FloatArray
    quantity: Literal["rho_xx", "sigma_xx"]
    rho_xy_ohm: FloatArray | None
    quadrature: FloatArray | None
    direction: Direction
    field_sign: int
    group: int
    current_A: float
    contacts: str
    step: float
    segment: IntArray
    one_sided: BoolArray

    def __post_init__(self) -> None:
        for value in vars(self).values():
            if isinstance(value, np.ndarray):
                value.setflags(write=False)

    @property
    def n_point(self) -> int:
        """Number of points."""
        return int(self.signal.size)

    @property
    def abscissa(self) -> FloatArray:
        """What is swept, in T, V or m^-2."""
        return {"field": self.field_T, "gate": self.gate_V, "density": self.density_per_m2}[self.kind]

    @cached_property
    def mean_temperature(self) -> float:
        """Median temperature, K."""
        return float(np.median(self.temperature_K))

    @cached_property
    def mean_field(self) -> float:
        """Median absolute field, T: the fixed field of a gate or density sweep."""
        return float(np.median(np.abs(self.field_T)))

    @property
    def label(self) -> str:
        """File and rows, for messages."""
        return f"{self.file} (rows {int(self.row.min())} to {int(self.row.max())})"


@dataclass(frozen=True)
class Alignment:
    """What was found when the sweeps of one temperature were laid over each other.

    Attributes
    ----------
    group : int
        The sweeps in question.
    temperature_K : float, K
        Their temperature.
    remanence, remanence_error : float, in the unit of the abscissa
        True minus recorded field, common to rising and falling sweeps; NaN where the sweeps do not tell.
    lag, lag_error : float, in the unit of the abscissa
        The part of true minus recorded abscissa that turns with the sweep direction, for rising sweeps; NaN
        where the sweeps do not tell. Where only the sum of both is known it stands as `remanence`.
    hall_into_xx, hall_into_xx_error : float
        Share of rho_xy in the measured rho_xx; NaN without both field directions.
    xx_into_hall, xx_into_hall_error : float
        Share of rho_xx in the measured rho_xy; NaN without both field directions.
    remaining : float
        Root mean square difference of the two field directions after all corrections, over its noise.
    """

    group: int
    temperature_K: float
    remanence: float
    remanence_error: float
    lag: float
    lag_error: float
    hall_into_xx: float
    hall_into_xx_error: float
    xx_into_hall: float
    xx_into_hall_error: float
    remaining: float


@dataclass(frozen=True, eq=False)
class TraceFamily:
    """All sweeps of one sample in one cool-down.

    Attributes
    ----------
    sweeps : tuple of Sweep
        In order of rising temperature.
    kind : {"field", "density", "gate"}
        What is swept.
    geometry : Geometry
        Shape of the sample.
    gate_start : GateStart
        Starting values of the gate's calibration.
    notices : tuple of str
        What the user must know about the reading of the files.
    alignments : tuple of Alignment
        Filled by symmetrising.
    """

    sweeps: tuple[Sweep, ...]
    kind: SweepKind
    geometry: Geometry
    gate_start: GateStart = GateStart()
    notices: tuple[str, ...] = ()
    alignments: tuple[Alignment, ...] = ()

    @property
    def temperatures(self) -> FloatArray:
        """Median temperature of each sweep, K."""
        return np.array([sweep.mean_temperature for sweep in self.sweeps])

    @property
    def has_hall(self) -> bool:
        """Whether any sweep has a Hall signal."""
        return any(sweep.rho_xy_ohm is not None for sweep in self.sweeps)

    def noted(self, *notices: str) -> TraceFamily:
        """The same family with notices added (each at most once)."""
        return replace(self, notices=tuple(dict.fromkeys(self.notices + notices)))


def by_fixed_field(sweeps: Sequence[Sweep]) -> dict[float, list[Sweep]]:
    """Gate and density sweeps by the field at which they were taken.

    Parameters
    ----------
    sweeps : sequence of Sweep

    Returns
    -------
    dict of float (T) to list of Sweep
        Fields within half a percent are one. All field sweeps stand together under NaN.
    """
    if not sweeps or sweeps[0].kind == "field":
        return {float("nan"): list(sweeps)} if sweeps else {}
    found: dict[float, list[Sweep]] = {}
    for sweep in sorted(sweeps, key=lambda one: one.mean_field):
        last = next(reversed(found), None)
        if last is not None and sweep.mean_field <= last * (1 + SAME_FIELD):
            found[last].append(sweep)
        else:
            found[sweep.mean_field] = [sweep]
    return found
