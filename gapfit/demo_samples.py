"""The invented samples of the demo data: what is true of them, and the lines they are measured with.

Samples are named after wild flowers. Gaps of the harebells follow the composite-fermion ladder; those of
campion grow as the square root of the field at fractions and linearly at integers; teasel is a list of
single states, each with its own difficulty.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np

from gapfit.hall import effective_field, field_at_filling
from gapfit.instrument import Instrument
from gapfit.landscape import Background, StateTruth, background, ladder_gap
from gapfit.units import VON_KLITZING_OHM

__all__ = [
    "CAMPION_BACKGROUND",
    "CAMPION_FIELDS_T",
    "CAMPION_LINE",
    "CAMPION_TEMPERATURES_K",
    "HAREBELL_3",
    "HAREBELL_4",
    "TEASEL_TEMPERATURES_K",
    "HallBar",
    "campion_states",
    "harebell_states",
    "teasel_states",
]


@dataclass(frozen=True)
class HallBar:
    """A field-swept sample.

    Attributes
    ----------
    density_per_m2 : float, m^-2
        True density, which differs a little from the stated one.
    mass, broadening_K : float, electron masses and K
        Composite-fermion mass and level width of the ladder of gaps.
    integer_gap_K : float, K
        Gap at filling factor one.
    hopping_scale : float
        Factor on all hopping amplitudes.
    flanks : Background
        Resistivity between the states.
    line : Instrument
        How it is measured.
    temperatures_K : tuple of float, K
        Set points.
    field_limit_T : float, T
        Sweeps run between plus and minus this field.
    """

    density_per_m2: float
    mass: float
    broadening_K: float
    integer_gap_K: float
    hopping_scale: float
    flanks: Background
    line: Instrument
    temperatures_K: tuple[float, ...]
    field_limit_T: float = 14.0


# flanks are no straight line: a dip of composite fermions at 1/2, and peaks beside the strong states
_SWELLS = (
    (0.5, -0.08, 0.03),
    (0.368, 0.3, 0.014),
    (0.632, 0.2, 0.014),
    (0.86, 0.5, 0.07),
    (1.17, 0.4, 0.09),
    (1.5, -0.12, 0.12),
    (2.4, 0.3, 0.3),
)

HAREBELL_3 = HallBar(
    density_per_m2=1.12e15 * (1 - 0.004),
    mass=0.5,
    broadening_K=1.5,
    integer_gap_K=12.0,
    hopping_scale=1.0,
    flanks=Background(11.2, 36.0, 1.4, slope_per_K=-0.015, bumps=_SWELLS, dingle_K=0.45),
    line=Instrument(
        current_A=1e-8,
        aspect=4.0,
        hall_into_xx=1.1e-3,
        xx_into_hall=-4e-3,
        offset_V=2e-9,
        noise_V=5e-9,
        hall_noise_V=3e-8,
        relative_noise=4e-3,
        gain_spread=2e-3,
        correlation=1.5,
        step_V=2e-9,
        hall_step_V=1e-8,
        phase=0.012,
        remanence_T=1.5e-3,
        lag_T=2.5e-3,
        temperature_scale=3e-3,
        temperature_spread=2.5e-3,
        temperature_drift=4e-3,
    ),
    temperatures_K=(0.06, 0.1, 0.16, 0.25, 0.36, 0.48, 0.6, 0.74, 0.89, 1.05, 1.22, 1.4, 1.6),
)

HAREBELL_4 = HallBar(
    density_per_m2=1.08e15 * (1 + 0.003),
    mass=0.5,
    broadening_K=1.9,
    integer_gap_K=9.0,
    hopping_scale=2.5,
    flanks=Background(38.0, 46.0, 1.35, slope_per_K=-0.015, bumps=_SWELLS, dingle_K=0.8),
    line=replace(
        HAREBELL_3.line,
        hall_into_xx=-2.3e-3,
        xx_into_hall=6e-3,
        offset_V=-3e-9,
        noise_V=1e-8,
        relative_noise=5e-3,
        remanence_T=-1e-3,
        lag_T=3.5e-3,
        temperature_scale=-4e-3,
    ),
    temperatures_K=(0.08, 0.15, 0.26, 0.42, 0.6, 0.82, 1.05, 1.3, 1.6),
)

# filling: share of the prefactor (h/e^2)/p^2, hopping temperature (K), hopping amplitude (ohm K)
_HAREBELL_TABLE = {
    "1/3": (0.6, 20.0, 60.0),
    "2/5": (0.45, 10.0, 60.0),
    "3/7": (0.6, 6.0, 25.0),
    "4/9": (1.0, 4.0, 12.0),
    "5/11": (1.4, 2.5, 6.0),
    "6/11": (1.5, 2.5, 6.0),
    "5/9": (1.2, 3.0, 8.0),
    "4/7": (0.9, 4.0, 12.0),
    "3/5": (0.55, 6.0, 25.0),
    "2/3": (0.4, 11.0, 50.0),
    "5/7": (1.5, 2.0, 8.0),
    "4/5": (1.0, 3.0, 10.0),
    "1": (0.7, 30.0, 50.0),
    "4/3": (0.5, 4.0, 10.0),
    "5/3": (0.5, 3.0, 8.0),
    "2": (0.3, 60.0, 60.0),
    "3": (0.4, 12.0, 20.0),
    "4": (0.4, 30.0, 40.0),
    "5": (0.6, 5.0, 10.0),
}
# gaps off the ladder, K
_HAREBELL_GAPS = {"4/5": 0.8, "5/7": 0.35, "2": 40.0, "3": 3.2, "4": 16.0, "5": 1.0}


def _reach_limit(filling: Fraction) -> float:
    """Largest reach of a plateau: shorter for larger denominators, as along the ladder."""
    q = filling.denominator
    if q == 1:
        return 0.14 if abs(filling) == 1 else 0.4
    return min(0.035 if abs(filling) < 1 else 0.06, 1.2 / (q * (q - 2)))


def _reaches(fillings: list[Fraction]) -> dict[Fraction, tuple[float, float]]:
    """Reach below and above each filling: about half way to the neighbour, or the limit.

    Plateaus of the highest denominators overlap a little; none reaches a neighbour's exact filling, and
    none is much wider on one side than on the other.
    """
    walls = [Fraction(-99), *sorted(fillings), Fraction(99)]
    reaches = {}
    for below, here, above in zip(walls, walls[1:], walls[2:], strict=False):
        share = 0.5 if here.denominator < 9 else 0.62
        room = (share * float(here - below), share * float(above - here))
        limit = min(_reach_limit(here), 1.5 * min(room))
        reaches[here] = (min(room[0], limit), min(room[1], limit))
    return reaches


def _flank(filling: Fraction, field_T: float, shape: Background) -> float:
    """Background at an exact filling in the limit of zero temperature, ohm."""
    cold = np.array([1e-3])
    return float(background(np.array([float(filling)]), np.array([field_T]), cold, shape)[0])


def _harebell_gap(filling: Fraction, sample: HallBar) -> float:
    if filling == 1:
        return sample.integer_gap_K
    if str(filling) in _HAREBELL_GAPS:
        return _HAREBELL_GAPS[str(filling)]
    field_T = field_at_filling(filling, sample.density_per_m2)
    return ladder_gap(effective_field(filling, field_T), sample.mass, sample.broadening_K)


def harebell_states(sample: HallBar) -> tuple[StateTruth, ...]:
    """Landscape of a harebell: the two composite-fermion branches, integers, and a few weak states.

    Parameters
    ----------
    sample : HallBar
        The sample.

    Returns
    -------
    tuple of StateTruth
    """
    reaches = _reaches([Fraction(text) for text in _HAREBELL_TABLE])
    states = []
    for index, (text, (share, hopping_K, amplitude)) in enumerate(_HAREBELL_TABLE.items()):
        filling = Fraction(text)
        gap = _harebell_gap(filling, sample)
        if gap <= 0:
            continue
        states.append(
            StateTruth(
                filling=filling,
                gap_K=gap,
                prefactor_ohm=share * VON_KLITZING_OHM / filling.numerator**2,
                hopping="efros-shklovskii",
                hopping_amplitude_ohm_K=amplitude * sample.hopping_scale,
                hopping_T0_K=hopping_K,
                background_ohm=_flank(
                    filling, field_at_filling(filling, sample.density_per_m2), sample.flanks
                ),
                background_slope_per_K=sample.flanks.slope_per_K,
                electron_T0_K=0.028 + 0.004 * (index % 4),
                reach_low=reaches[filling][0],
                reach_high=reaches[filling][1],
            )
        )
    return tuple(states)


CAMPION_BACKGROUND = Background(
    zero_field_ohm=260.0,
    rise_ohm=95.0,
    rise_power=1.0,
    slope_per_K=0.004,
    bumps=((0.0, 0.9, 0.9), (0.5, -0.1, 0.05), (0.82, 0.3, 0.06), (1.17, 0.25, 0.06), (1.8, 0.4, 0.12)),
    insulating_ohm=4000.0,
    insulating_K=8.0,
    puddles=0.06,
)
CAMPION_FIELDS_T = (6.0, 9.0, 12.0, 14.0)
CAMPION_TEMPERATURES_K = (0.3, 0.55, 0.9, 1.4, 2.1, 3.1, 4.5, 6.5, 9.5, 14.0, 20.0)
CAMPION_LINE = Instrument(
    current_A=2e-8,
    aspect=2.0,
    hall_into_xx=4e-5,
    xx_into_hall=3e-3,
    offset_V=3e-9,
    noise_V=4e-8,
    hall_noise_V=1e-7,
    relative_noise=5e-3,
    gain_spread=3e-3,
    correlation=1.2,
    step_V=1e-8,
    hall_step_V=5e-8,
    phase=0.008,
    temperature_scale=-4e-3,
    temperature_spread=4e-3,
    temperature_drift=3e-3,
)

# abs(filling): gap at 14 T (K), power of the field, share of (h/e^2)/p^2, hopping temperature (K), amplitude
_CAMPION_TABLE = {
    "1/3": (12.7, 0.5, 0.10, 30.0, 400.0),
    "2/5": (5.2, 0.5, 0.35, 14.0, 120.0),
    "3/5": (4.4, 0.5, 0.7, 12.0, 100.0),
    "2/3": (15.0, 0.5, 0.35, 36.0, 400.0),
    "1": (44.0, 1.1, 0.15, 150.0, 2500.0),
    "4/3": (9.8, 0.5, 1.2, 25.0, 300.0),
    "5/3": (6.4, 0.5, 1.5, 18.0, 200.0),
    "2": (420.0, 0.5, 0.3, 320.0, 9000.0),
}


def campion_states(field_T: float) -> tuple[StateTruth, ...]:
    """Landscape of campion at one field, electrons and holes alike but for 10 % smaller gaps of holes.

    Parameters
    ----------
    field_T : float, T
        Perpendicular field.

    Returns
    -------
    tuple of StateTruth
    """
    fillings = [sign * Fraction(text) for sign in (-1, 1) for text in _CAMPION_TABLE]
    reaches = _reaches(fillings)
    states = []
    for filling in fillings:
        gap, power, share, hopping_K, amplitude = _CAMPION_TABLE[str(abs(filling))]
        states.append(
            StateTruth(
                filling=filling,
                gap_K=gap * (field_T / 14) ** power * (1.0 if filling > 0 else 0.9),
                prefactor_ohm=share * VON_KLITZING_OHM / filling.numerator**2,
                hopping="efros-shklovskii",
                hopping_amplitude_ohm_K=amplitude,
                hopping_T0_K=hopping_K * np.sqrt(field_T / 14),
                background_ohm=_flank(filling, field_T, CAMPION_BACKGROUND),
                background_slope_per_K=CAMPION_BACKGROUND.slope_per_K,
                electron_T0_K=0.12,
                reach_low=reaches[filling][0],
                reach_high=reaches[filling][1],
            )
        )
    return tuple(states)


TEASEL_TEMPERATURES_K = (0.1, 0.15, 0.22, 0.31, 0.42, 0.55, 0.7, 0.86, 1.04, 1.25, 1.5, 1.75, 2.0)


def teasel_states() -> tuple[tuple[float, StateTruth], ...]:
    """Single states read off at their minima, each with its own difficulty.

    Returns
    -------
    tuple of (field in T, StateTruth)
    """
    one = VON_KLITZING_OHM
    es = "efros-shklovskii"
    return (
        (12.9, StateTruth(Fraction(1, 3), 6.2, 0.4 * one)),
        (6.45, StateTruth(Fraction(2, 3), 4.5, 0.5 * one / 4, es, 300.0, 10.0)),
        (10.75, StateTruth(Fraction(2, 5), 0.0, 0.0, es, 800.0, 12.0)),
        (7.17, StateTruth(Fraction(3, 5), 3.2, 0.7 * one / 9, leak_ohm=14.0)),
        (10.03, StateTruth(Fraction(3, 7), 2.7, 1.1 * one / 9, background_ohm=900.0, rollover="tanh")),
        (8.06, StateTruth(Fraction(4, 7), 0.0, 0.0, leak_ohm=620.0)),
        (4.3, StateTruth(Fraction(1), 8.5, 0.5 * one, "mott", 1500.0, 60.0, electron_T0_K=0.16)),
        (3.225, StateTruth(Fraction(4, 3), 1.3, 0.8 * one / 16)),
    )
