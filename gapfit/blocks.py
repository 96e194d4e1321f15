"""The sections of a study file, one frozen class each, with everything that can be checked about them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction
from math import nan
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Discriminator, Field, Strict, Tag, model_validator

from gapfit.columns import ColumnRule, parse_unit
from gapfit.errors import FillingError, InputError
from gapfit.hall import HOSTS, Host, host, parse_filling
from gapfit.mechanisms import parse_combination
from gapfit.sources import (
    AnyColumn,
    Block,
    CurrentSource,
    DensityColumn,
    FieldColumn,
    FieldSource,
    Flag,
    GateColumn,
    NotNegative,
    Number,
    Positive,
    SignalColumn,
    TemperatureSource,
    Text,
    Whole,
    existing_file,
    matching_files,
    of_dimension,
)

__all__ = [
    "FillingsBlock",
    "FitBlock",
    "GeometryBlock",
    "SampleBlock",
    "SeriesBlock",
    "SeriesColumns",
    "ThermometryBlock",
    "TracesBlock",
    "WindowRange",
]


def _known_host(name: str) -> str:
    try:
        return host(name).name
    except InputError as error:
        raise ValueError(str(error)) from None


class SampleBlock(Block):
    """The sample.

    Attributes
    ----------
    name, cooldown : str
        Name the rows of every table.
    host : str, optional
        Key of the built-in table of host materials.
    permittivity, mass, g : float, optional
        Override the constants of the host.
    density_cm2 : float, optional, cm^-2
        Density, negative for holes; a start that is refined.
    mobility_cm2_per_Vs : float, optional
        Mobility.
    """

    name: Text
    cooldown: Annotated[str, Strict()] = ""
    host: Annotated[Text, AfterValidator(_known_host)] | None = None
    permittivity: Positive | None = None
    mass: Positive | None = None
    g: Number | None = None
    density_cm2: Number | None = None
    mobility_cm2_per_Vs: Positive | None = None

    @model_validator(mode="after")
    def _check_density(self) -> SampleBlock:
        if self.density_cm2 is not None and not 1e6 < abs(self.density_cm2) < 1e15:
            raise ValueError(
                f"density_cm2 is {self.density_cm2:g}; a density per cm^2 lies between 1e6 and 1e15 "
                "(negative for holes); leave it out to have it determined"
            )
        return self

    @property
    def density_per_m2(self) -> float | None:
        """Stated density, m^-2."""
        return None if self.density_cm2 is None else 1e4 * self.density_cm2

    @property
    def constants(self) -> Host:
        """Constants of the host after the overrides; NaN where unknown."""
        known = Host("", nan, nan, nan, source="study file") if self.host is None else HOSTS[self.host]
        return replace(
            known,
            permittivity=known.permittivity if self.permittivity is None else self.permittivity,
            mass=known.mass if self.mass is None else self.mass,
            g=known.g if self.g is None else self.g,
        )


class GeometryBlock(Block):
    """Shape of the sample, as `gapfit.traces.Geometry` has it."""

    kind: Literal["hall-bar", "van-der-pauw", "corbino", "resistivity", "unknown"] = "unknown"
    length_um: Positive | None = None
    width_um: Positive | None = None
    inner_radius_um: Positive | None = None
    outer_radius_um: Positive | None = None
    lead_ohm: NotNegative = 0.0
    relative_error: NotNegative = 0.0

    @model_validator(mode="after")
    def _check_sizes(self) -> GeometryBlock:
        needed = {"hall-bar": ("length_um", "width_um"), "corbino": ("inner_radius_um", "outer_radius_um")}
        wanted = needed.get(self.kind, ())
        absent = [name for name in wanted if getattr(self, name) is None]
        if absent:
            raise ValueError(
                f"kind {self.kind!r} needs {' and '.join(wanted)}; {' and '.join(absent)} missing "
                "(or write kind = 'unknown': the gaps need no geometry)"
            )
        sizes = {name for names in needed.values() for name in names} | {"lead_ohm"}
        allowed = {*wanted, "lead_ohm"} if self.kind == "corbino" else set(wanted)
        odd = sorted(name for name in self.model_fields_set & sizes if name not in allowed)
        if odd:
            raise ValueError(f"{' and '.join(odd)} cannot be used with kind {self.kind!r}")
        if self.kind == "corbino" and (self.outer_radius_um or 0) <= (self.inner_radius_um or 0):
            raise ValueError("outer_radius_um must be above inner_radius_um")
        return self


class TracesBlock(Block):
    """Raw sweeps.

    Attributes
    ----------
    files : tuple of Path
        The files, in natural order of their names.
    sweep : {"field", "density", "gate"}
    temperature : ColumnRule, NameSource, TableSource or float (K)
    field : ColumnRule, NameSource, TableSource or float (T), optional
    gate, density : ColumnRule, optional
    rho_xx, rho_xy, quadrature : ColumnRule
        Signals in V, ohm or (Corbino) S; the last two optional.
    current_A : float (A) or ColumnRule, optional
    symmetrise : "auto" or bool
    field_T : float, optional, T
        Fixed field of gate or density sweeps whose files have no field column.
    capacitance_F_per_m2, density_per_V_m2, neutrality_V : float, optional
        Start of the gate's calibration.
    contacts : str
        Name of the contacts.
    direction : {"both", "up", "down"}
        Which sweep directions to use.
    allow_magnitude : bool
        Take a lock-in magnitude although its noise has a bias.
    """

    files: Annotated[tuple[Path, ...], BeforeValidator(matching_files)]
    sweep: Literal["field", "density", "gate"] = "field"
    temperature: TemperatureSource
    field: FieldSource | None = None
    gate: GateColumn | None = None
    density: DensityColumn | None = None
    rho_xx: SignalColumn
    rho_xy: SignalColumn | None = None
    quadrature: SignalColumn | None = None
    current_A: CurrentSource | None = None
    symmetrise: Literal["auto"] | Flag = "auto"
    field_T: Number | None = None
    capacitance_F_per_m2: Positive | None = None
    density_per_V_m2: Positive | None = None
    neutrality_V: Number | None = None
    contacts: Annotated[str, Strict()] = ""
    direction: Literal["both", "up", "down"] = "both"
    allow_magnitude: Flag = False

    @model_validator(mode="after")
    def _check_together(self) -> TracesBlock:
        problems = [*self._sweep_problems(), *self._unit_problems()]
        if problems:
            raise ValueError("; ".join(problems))
        return self

    def _sweep_problems(self) -> list[str]:
        problems = []
        if self.sweep == "field" and (self.field is None or not isinstance(self.field, ColumnRule)):
            problems.append("sweep = 'field' needs field = { column = ... }")
        if self.sweep != "field" and getattr(self, self.sweep) is None:
            problems.append(f"sweep = {self.sweep!r} needs {self.sweep} = {{ column = ... }}")
        if self.sweep != "field" and (self.field is None) == (self.field_T is None):
            problems.append(f"sweep = {self.sweep!r} needs either field or field_T")
        if self.sweep == "field" and self.field_T is not None:
            problems.append("field_T is for gate and density sweeps only")
        if self.capacitance_F_per_m2 is not None and self.density_per_V_m2 is not None:
            problems.append("give capacitance_F_per_m2 or density_per_V_m2, not both")
        gate_only = {"capacitance_F_per_m2", "density_per_V_m2", "neutrality_V"} & self.model_fields_set
        if self.sweep != "gate" and gate_only:
            problems.append(f"{' and '.join(sorted(gate_only))} is for gate sweeps only")
        return problems

    def _unit_problems(self) -> list[str]:
        rules = {"rho_xx": self.rho_xx, "rho_xy": self.rho_xy}
        volts = [
            key
            for key, rule in rules.items()
            if rule is not None and rule.unit is not None and _dimension(rule.unit) == "voltage"
        ]
        if volts and self.current_A is None:
            return [f"{' and '.join(volts)} in volts needs current_A (the excitation current)"]
        return []


def _dimension(unit: str) -> str:
    known = parse_unit(unit)
    return "" if known is None else known.dimension


class SeriesColumns(Block):
    """Columns of a file of minima whose names differ from the usual ones; all optional."""

    filling: AnyColumn | None = None
    field_T: FieldColumn | None = None
    temperature_K: Annotated[AnyColumn, AfterValidator(of_dimension("temperature"))] | None = None
    temperature_error_K: Annotated[AnyColumn, AfterValidator(of_dimension("temperature"))] | None = None
    rho_xx_ohm: Annotated[AnyColumn, AfterValidator(of_dimension("resistance"))] | None = None
    rho_xx_ohm_error: Annotated[AnyColumn, AfterValidator(of_dimension("resistance"))] | None = None
    sigma_xx_S: Annotated[AnyColumn, AfterValidator(of_dimension("conductance"))] | None = None
    sigma_xx_S_error: Annotated[AnyColumn, AfterValidator(of_dimension("conductance"))] | None = None
    sample: AnyColumn | None = None
    cooldown: AnyColumn | None = None
    contacts: AnyColumn | None = None
    direction: AnyColumn | None = None


class SeriesBlock(Block):
    """Minima already read off: a file with a row per filling and temperature."""

    file: Annotated[Path, BeforeValidator(existing_file)]
    columns: SeriesColumns = SeriesColumns()


def _exact_fillings(value: Any) -> Any:
    if value == "auto":
        return value
    if not isinstance(value, (list, tuple)) or not value:
        raise ValueError(f"found {value!r}; write \"auto\", or a list such as ['1/3', '2/5']")
    fillings: list[Fraction] = []
    for text in value:
        if isinstance(text, (bool, float)) or not isinstance(text, (str, int, Fraction)):
            raise ValueError(f"{text!r} is not exact; write a fraction in quotes such as '1/3'")
        try:
            filling = parse_filling(text)
        except FillingError as error:
            raise ValueError(str(error)) from None
        if filling == 0 or filling in fillings:
            raise ValueError(
                f"{text!r} {'is no quantum Hall state' if filling == 0 else 'stands there twice'}"
            )
        fillings.append(filling)
    return tuple(fillings)


class FillingsBlock(Block):
    """Which fillings to read off, and how.

    Attributes
    ----------
    look_for : "auto" or tuple of Fraction
    max_denominator : int
        Largest denominator of names given automatically.
    reading : {"exact", "minimum", "mean"}
        At the exact filling, at the local minimum, or averaged over a window about the filling.
    reading_window : float
        Full width of that window relative to the filling.
    """

    look_for: Annotated[Literal["auto"] | tuple[Fraction, ...], BeforeValidator(_exact_fillings)] = "auto"
    max_denominator: Annotated[Whole, Field(ge=1, le=99)] = 11
    reading: Literal["exact", "minimum", "mean"] = "exact"
    reading_window: Annotated[Positive, Field(lt=0.5)] = 0.01


class ThermometryBlock(Block):
    """Errors of the temperatures, and whether electrons stay warmer than the bath."""

    relative_error: Annotated[NotNegative, Field(lt=1)] = 0.0
    scale_error: Annotated[NotNegative, Field(lt=1)] = 0.0
    electron_saturation: Flag = False
    saturation_exponent: Annotated[Number, Field(ge=2, le=6)] = 4.0


class WindowRange(Block):
    """A pinned range of temperatures, K."""

    low_K: NotNegative
    high_K: Positive

    @model_validator(mode="after")
    def _check_order(self) -> WindowRange:
        if self.low_K >= self.high_K:
            raise ValueError(f"low_K = {self.low_K:g} must be below high_K = {self.high_K:g}")
        return self


def _combinations(value: Any) -> Any:
    if value == "default":
        return value
    if not isinstance(value, (list, tuple)) or not value or not all(isinstance(text, str) for text in value):
        raise ValueError(f"found {value!r}; write \"default\", or a list such as ['activation + es']")
    try:
        return tuple(parse_combination(text).name for text in value)
    except InputError as error:
        raise ValueError(str(error)) from None


def _kind_of_window(value: Any) -> str:
    return "@range" if isinstance(value, (Mapping, WindowRange)) else "@word"


class FitBlock(Block):
    """What to fit and how.

    Attributes
    ----------
    quantity : {"auto", "rho_xx", "sigma_xx"}
    mechanisms : "default" or tuple of str
        Combinations, as `gapfit.mechanisms.parse_combination` reads them.
    window : "average" or WindowRange
    noise : {"student", "gaussian"}
    seed : int
    engine : {"mcmc", "fast"}
    """

    quantity: Literal["auto", "rho_xx", "sigma_xx"] = "auto"
    mechanisms: Annotated[Literal["default"] | tuple[str, ...], BeforeValidator(_combinations)] = "default"
    window: Annotated[
        Annotated[Literal["average"], Tag("@word")] | Annotated[WindowRange, Tag("@range")],
        Discriminator(_kind_of_window),
    ] = "average"
    noise: Literal["student", "gaussian"] = "student"
    seed: Annotated[Whole, Field(ge=0)] = 20260101
    engine: Literal["mcmc", "fast"] = "mcmc"
