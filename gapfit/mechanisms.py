"""Transport mechanisms: the laws, the table that names their parameters, and their combinations.

A reading is a sum of contributions; mechanisms add in sigma_xx, and in rho_xx as long as rho_xx <<
rho_xy. `gapfit.curve` puts the sum together.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gapfit.errors import InputError

__all__ = [
    "COMBINATIONS",
    "MECHANISMS",
    "OFF",
    "PARAMETERS",
    "Combination",
    "Parameter",
    "activation",
    "efros_shklovskii",
    "electron_temperature",
    "fermi",
    "mott",
    "nearest_neighbour",
    "parse_combination",
    "power_mean",
    "roll_over",
]

FloatArray = NDArray[np.float64]
LARGEST_EXPONENT = 600.0
FAR = 1000.0


# ------------------------------------------------------------------------------------------------- the laws


def activation(temperature: ArrayLike, gap: ArrayLike, prefactor: ArrayLike) -> FloatArray:
    """Thermal activation, rho_0 exp(-Delta / 2 k_B T).

    Parameters
    ----------
    temperature : array_like, K
        Electron temperature.
    gap : array_like, K
        Gap Delta; the activation energy is half of it.
    prefactor : array_like, ohm or S
        Value at 1/T = 0.

    Returns
    -------
    ndarray, ohm or S
    """
    temperature, gap = np.asarray(temperature, float), np.asarray(gap, float)
    return np.asarray(np.asarray(prefactor) * np.exp(-gap / (2 * temperature)))


def fermi(temperature: ArrayLike, gap: ArrayLike, amplitude: ArrayLike) -> FloatArray:
    """Fermi form, 2 A / (1 + exp(Delta / 2 k_B T)).

    It is the power mean of sharpness 1 of an activation with prefactor 2 A and a background 2 A.

    Parameters
    ----------
    temperature : array_like, K
        Electron temperature.
    gap : array_like, K
        Gap Delta.
    amplitude : array_like, ohm or S
        Value A approached at high temperature.

    Returns
    -------
    ndarray, ohm or S
    """
    argument = np.asarray(gap, float) / (2 * np.asarray(temperature, float))
    return np.asarray(2 * np.asarray(amplitude) / (1 + np.exp(np.minimum(argument, LARGEST_EXPONENT))))


def power_mean(activated: ArrayLike, background: ArrayLike, sharpness: ArrayLike) -> FloatArray:
    """Closure at high temperature, 1/y^k = 1/activated^k + 1/background^k.

    Sharpness k = 1 is the series limit. The power mean follows tanh, 1 - exp and arctan roll-overs
    closely, but none of them is exact for a real sample.

    Parameters
    ----------
    activated : array_like, ohm or S
        Activated contribution, above zero.
    background : array_like, ohm or S
        Level that the flanks of the minimum approach, above zero.
    sharpness : array_like
        Exponent k > 0.

    Returns
    -------
    ndarray, ohm or S
    """
    k = np.asarray(sharpness, float)
    return np.asarray(np.exp(-np.logaddexp(-k * np.log(activated), -k * np.log(background)) / k))


def roll_over(
    activated: ArrayLike, background: ArrayLike, sharpness: ArrayLike, saturation: ArrayLike
) -> FloatArray:
    """Closure at high temperature between a power mean and an exponential saturation.

    With x = activated / background: background [1 - (1 + q x^k)^(-1/q)]^(1/k). Saturation q = 1 is the
    power mean of sharpness k, q = 0 with k = 1 is 1 - exp(-x); tanh and arctan lie close to members in
    between. No closure is exact for a real sample, hence both shapes are fitted.

    Parameters
    ----------
    activated : array_like, ohm or S
        Activated contribution, above zero.
    background : array_like, ohm or S
        Level that the flanks of the minimum approach, above zero.
    sharpness : array_like
        Exponent k > 0.
    saturation : array_like
        Shape q, above zero and at most one.

    Returns
    -------
    ndarray, ohm or S
    """
    k, q = np.asarray(sharpness, float), np.asarray(saturation, float)
    ratio = (np.asarray(activated, float) / np.asarray(background, float)) ** k
    return np.asarray(background * (-np.expm1(-np.log1p(q * ratio) / q)) ** (1 / k))


def efros_shklovskii(
    temperature: ArrayLike, hopping_temperature: ArrayLike, amplitude: ArrayLike, power: float = 1.0
) -> FloatArray:
    """Efros-Shklovskii hopping, (s / T^m) exp[-(T_0/T)^(1/2)].

    Efros & Shklovskii, J. Phys. C 8, L49 (1975).

    Parameters
    ----------
    temperature : array_like, K
        Electron temperature.
    hopping_temperature : array_like, K
        T_0.
    amplitude : array_like, ohm K^m or S K^m
        s.
    power : float
        Power m of the prefactor, 1 by custom in the quantum Hall literature, 0 also used.

    Returns
    -------
    ndarray, ohm or S
    """
    return _hopping(temperature, hopping_temperature, amplitude, power, 1 / 2)


def mott(
    temperature: ArrayLike, hopping_temperature: ArrayLike, amplitude: ArrayLike, power: float = 1.0
) -> FloatArray:
    """Mott hopping in two dimensions, (s / T^m) exp[-(T_M/T)^(1/3)].

    Mott, Philos. Mag. 19, 835 (1969).

    Parameters
    ----------
    temperature : array_like, K
        Electron temperature.
    hopping_temperature : array_like, K
        T_M.
    amplitude : array_like, ohm K^m or S K^m
        s.
    power : float
        Power m of the prefactor.

    Returns
    -------
    ndarray, ohm or S
    """
    return _hopping(temperature, hopping_temperature, amplitude, power, 1 / 3)


def _hopping(
    temperature: ArrayLike, scale: ArrayLike, amplitude: ArrayLike, power: float, exponent: float
) -> FloatArray:
    temperature = np.asarray(temperature, float)
    decay = np.exp(-((np.asarray(scale) / temperature) ** exponent))
    return np.asarray(np.asarray(amplitude) / temperature**power * decay)


def nearest_neighbour(temperature: ArrayLike, energy: ArrayLike, prefactor: ArrayLike) -> FloatArray:
    """Nearest-neighbour hopping, s exp(-E_3 / k_B T).

    Parameters
    ----------
    temperature : array_like, K
        Electron temperature.
    energy : array_like, K
        E_3, well below half the gap.
    prefactor : array_like, ohm or S
        Value at 1/T = 0.

    Returns
    -------
    ndarray, ohm or S
    """
    decay = np.exp(-np.asarray(energy, float) / np.asarray(temperature, float))
    return np.asarray(np.asarray(prefactor) * decay)


def electron_temperature(temperature: ArrayLike, saturation: ArrayLike, exponent: float = 4.0) -> FloatArray:
    """Electron temperature, (T^n + T_0^n)^(1/n).

    Parameters
    ----------
    temperature : array_like, K
        Bath temperature.
    saturation : array_like, K
        T_0, at which the electrons stop cooling.
    exponent : float
        n, from 2 (cooling through the leads) over 4 (T_e ~ I^0.5: Chow et al., Phys. Rev. Lett. 77, 1143
        (1996)) to 6.

    Returns
    -------
    ndarray, K
    """
    n = exponent
    return np.asarray((np.asarray(temperature, float) ** n + np.asarray(saturation, float) ** n) ** (1 / n))


# ------------------------------------------------------------------------------------------------ the table


@dataclass(frozen=True)
class Parameter:
    """One row of the parameter table.

    Attributes
    ----------
    name : str
        Column name, with the unit where it has a fixed one.
    symbol : str
        Symbol as mathtext.
    unit : str
        Unit of the natural value; ``"reading"`` means ohm or S.
    meaning : str
        One line for reports.
    scale : {"log", "linear", "unit", "quarter"}
        How the coordinate x becomes the natural value: exp(x), x, 1/(1 + exp(-x)), or a quarter of that.
    off : float
        Coordinate at which the contribution vanishes.
    """

    name: str
    symbol: str
    unit: str
    meaning: str
    scale: str
    off: float

    def natural(self, coordinate: FloatArray) -> FloatArray:
        """Natural value of a coordinate."""
        if self.scale == "log":
            return np.exp(np.clip(coordinate, -LARGEST_EXPONENT, LARGEST_EXPONENT))
        if self.scale in ("unit", "quarter"):
            logistic = 1 / (1 + np.exp(-np.clip(coordinate, -LARGEST_EXPONENT, LARGEST_EXPONENT)))
            return logistic if self.scale == "unit" else logistic / 4
        return coordinate


PARAMETERS: tuple[Parameter, ...] = (
    Parameter("gap_K", r"$\Delta$", "K", "gap, in exp(-gap / 2T)", "log", -FAR),
    Parameter(
        "activated", r"$y_a(T_h)$", "reading", "activated contribution at the high reference", "log", -FAR
    ),
    Parameter("background", r"$y_{bg}$", "reading", "level that the minimum fills up to", "log", FAR),
    Parameter("sharpness", r"$k$", "", "sharpness of the roll-over", "log", 0.0),
    Parameter("saturation", r"$q$", "", "shape of the roll-over, 1 power mean to 0 exponential", "unit", FAR),
    Parameter(
        "background_slope", r"$s_{bg}$", "", "relative rise of the background by T over T_h", "linear", 0.0
    ),
    Parameter("hopping", r"$y_h(T_l)$", "reading", "hopping contribution at the low reference", "log", -FAR),
    Parameter("hopping_T0_K", r"$T_{hop}$", "K", "hopping temperature", "log", 0.0),
    Parameter("hopping_exponent", r"$\alpha$", "", "1/2 Efros-Shklovskii, 1/3 Mott (fixed)", "linear", 0.5),
    Parameter(
        "nearest", r"$y_3(T_l)$", "reading", "nearest-neighbour hopping at the low reference", "log", -FAR
    ),
    Parameter("nearest_ratio", r"$E_3/\Delta$", "", "nearest-neighbour energy over gap", "quarter", 0.0),
    Parameter("leak", r"$y_{leak}$", "reading", "leak, a constant above zero", "log", -FAR),
    Parameter("offset", r"$y_{off}$", "reading", "instrument offset, signed", "linear", 0.0),
    Parameter("electron_T0_K", r"$T_0$", "K", "temperature at which electrons stop cooling", "log", -FAR),
    Parameter("level", r"$y_{flat}$", "reading", "gapless level at the low reference", "log", -FAR),
    Parameter("power", r"$p$", "", "power of temperature of the gapless level", "linear", 0.0),
    Parameter("spread", r"$s/\Delta$", "", "relative spread of local gaps", "log", -FAR),
    Parameter("inflation", r"$f$", "", "standard errors are multiplied by this", "log", 0.0),
)
"""Every parameter that a model can have, in the order of the coordinate vector."""

SLOT: dict[str, int] = {parameter.name: index for index, parameter in enumerate(PARAMETERS)}
OFF: FloatArray = np.array([parameter.off for parameter in PARAMETERS])
"""Coordinate vector of a model in which every mechanism is off."""

MECHANISMS: dict[str, tuple[str, ...]] = {
    "activation": ("gap_K", "activated"),
    "roll-over": ("background", "sharpness", "saturation", "background_slope"),
    "power mean": ("background", "sharpness"),
    "fermi": (),
    "spread": ("spread",),
    "es": ("hopping", "hopping_T0_K"),
    "mott": ("hopping", "hopping_T0_K"),
    "nearest": ("nearest", "nearest_ratio"),
    "leak": ("leak",),
    "offset": ("offset",),
    "heating": ("electron_T0_K",),
    "constant": ("level",),
    "power law": ("level", "power"),
}
"""Parameters of each mechanism, by the key that study files use."""

_WORDS = {
    "activation": "activation",
    "roll-over": "roll-over",
    "power mean": "power-mean roll-over",
    "fermi": "Fermi form",
    "spread": "spread of gaps",
    "es": "ES hopping",
    "mott": "Mott hopping",
    "nearest": "nearest-neighbour hopping",
    "leak": "leak",
    "offset": "offset",
    "heating": "electron heating",
    "constant": "constant",
    "power law": "power law",
}
_NEEDS_ACTIVATION = {"roll-over", "power mean", "fermi", "spread", "nearest"}
_CARRIERS = {"activation", "es", "mott", "constant", "power law"}
_EXCLUSIVE = (
    {"roll-over", "power mean", "fermi"},
    {"es", "mott"},
    {"leak", "offset"},
    {"constant", "power law", "activation"},
)


@dataclass(frozen=True)
class Combination:
    """A set of mechanisms that together make a curve.

    Attributes
    ----------
    mechanisms : tuple of str
        Keys of `MECHANISMS`, in the order of that table.

    Raises
    ------
    InputError
        If a mechanism is unknown, if two exclude each other, or if nothing carries the curve.
    """

    mechanisms: tuple[str, ...]

    def __post_init__(self) -> None:
        unknown = [name for name in self.mechanisms if name not in MECHANISMS]
        if unknown:
            raise InputError(f"unknown mechanism {unknown[0]!r}; allowed are {', '.join(MECHANISMS)}")
        ordered = tuple(name for name in MECHANISMS if name in self.mechanisms)
        object.__setattr__(self, "mechanisms", ordered)
        present = set(ordered)
        for group in _EXCLUSIVE:
            if len(group & present) > 1:
                raise InputError(f"mechanisms {' and '.join(sorted(group & present))} exclude each other")
        if not present & _CARRIERS:
            raise InputError(f"a combination needs one of {', '.join(sorted(_CARRIERS))}")
        if "activation" not in present and present & _NEEDS_ACTIVATION:
            raise InputError(f"{sorted(present & _NEEDS_ACTIVATION)[0]} makes sense with activation only")

    @cached_property
    def name(self) -> str:
        """Key such as ``"activation + es + leak"``, as `parse_combination` reads it."""
        return " + ".join(self.mechanisms)

    @property
    def label(self) -> str:
        """Words for figures and reports."""
        return " + ".join(_WORDS[name] for name in self.mechanisms)

    @cached_property
    def activated(self) -> bool:
        """Whether the combination has a gap."""
        return "activation" in self.mechanisms

    @cached_property
    def tied(self) -> bool:
        """Whether the background is tied to the prefactor (Fermi form)."""
        return "fermi" in self.mechanisms

    @cached_property
    def hopping(self) -> str:
        """``"es"``, ``"mott"`` or the empty string."""
        return next((name for name in ("es", "mott") if name in self.mechanisms), "")

    @property
    def n_nuisance(self) -> int:
        """Number of mechanisms beyond the one that carries the curve."""
        return len(self.mechanisms) - 1

    @cached_property
    def slots(self) -> NDArray[np.intp]:
        """Positions of the fitted parameters in the coordinate vector, noise inflation last."""
        names = [name for key in self.mechanisms for name in MECHANISMS[key]]
        return np.array([SLOT[name] for name in names] + [SLOT["inflation"]], dtype=np.intp)

    @cached_property
    def base(self) -> FloatArray:
        """Coordinate vector with every mechanism off and the hopping exponent of this combination."""
        coordinates = OFF.copy()
        if self.tied:
            coordinates[SLOT["background"]] = np.nan
        if self.hopping == "mott":
            coordinates[SLOT["hopping_exponent"]] = 1 / 3
        return coordinates


def parse_combination(text: str) -> Combination:
    """Combination of a text such as ``"activation + roll-over + es"``.

    Raises
    ------
    InputError
        As `Combination`.
    """
    return Combination(tuple(part.strip() for part in text.lower().split("+")))


def combinations_for(background_known: bool, saturating: bool = False) -> tuple[Combination, ...]:
    """Combinations that are averaged by default.

    Parameters
    ----------
    background_known : bool
        Whether the sweeps show the flanks of the minimum. The minimum must then fill in towards a known
        level, so activation without a roll-over is no candidate.
    saturating : bool
        Whether the electrons are known to stop cooling, so that activation without heating is no
        candidate. How much they are heated remains a parameter.

    Returns
    -------
    tuple of Combination
    """
    needed = {"roll-over"} if background_known else set()
    needed |= {"heating"} if saturating else set()
    return tuple(
        combination
        for combination in COMBINATIONS
        if not combination.activated or needed <= set(combination.mechanisms)
    )


def _default_combinations() -> tuple[Combination, ...]:
    activated = [
        ("activation", *closure, *tail, *extra, *heat)
        for closure, tail, extra, heat in product(
            ((), ("roll-over",)),
            ((), ("es",), ("mott",)),
            ((), ("leak",), ("offset",)),
            ((), ("heating",)),
        )
    ]
    gapless = [
        (carrier, *extra)
        for carrier, extra in product(("es", "mott"), ((), ("leak",), ("offset",), ("heating",)))
    ]
    gapless += [("constant",), ("power law",), ("power law", "leak"), ("power law", "offset")]
    return tuple(Combination(names) for names in (*activated, *gapless))


COMBINATIONS: tuple[Combination, ...] = _default_combinations()
"""The combinations that are averaged by default where the flanks are not known."""
