"""Numbers for the eye: values with errors, intervals and limits, rounded by one rule, as text, HTML or LaTeX.

The rule is that of the Particle Data Group (Review of Particle Physics, introduction, 5.3 "Rounding"): if the
three highest-order digits of the error lie between 100 and 354, two digits of it are kept; between 355 and
949, one; between 950 and 999 it is rounded up to 1000 and two are kept. The value is given to the same place.
Files keep raw numbers.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal
from math import inf, isfinite, isnan

from gapfit.errors import InputError

__all__ = [
    "Rounded",
    "RoundedInterval",
    "RoundedLimit",
    "error_place",
    "round_interval",
    "round_limit",
    "round_number",
    "round_value",
]

MISSING = "–"
LARGEST_PLAIN = 1e5
SMALLEST_PLAIN = 1e-3


def error_place(error: float) -> int:
    """Decimal place to which an error and its value are rounded.

    Parameters
    ----------
    error : float
        Standard error or half-width, finite and above zero.

    Returns
    -------
    int
        Power of ten of the last digit kept: -2 for hundredths, 1 for tens.

    Raises
    ------
    InputError
        If the error is not finite and above zero.

    Notes
    -----
    Review of Particle Physics, introduction, section 5.3.
    """
    if not (isfinite(error) and error > 0):
        raise InputError(f"an error of {error} cannot set a rounding; it must be finite and above zero")
    exact = Decimal(repr(float(error)))
    order = exact.adjusted()
    leading = int(exact.scaleb(2 - order))
    if leading <= 354:
        return order - 1
    return order


def _rounded(value: float, place: int, mode: str = ROUND_HALF_EVEN) -> Decimal:
    number = Decimal(repr(float(value))).quantize(Decimal(1).scaleb(place), rounding=mode)
    return number if number else abs(number)


def _plain(number: Decimal, power: int) -> str:
    """Decimal text of a rounded number over a power of ten."""
    return format(number.scaleb(-power), "f")


def _power_of_ten(*numbers: float) -> int:
    """Common power of ten to print numbers with, zero where they read well as they are."""
    largest = max(abs(number) for number in numbers)
    if largest == 0 or SMALLEST_PLAIN <= largest < LARGEST_PLAIN:
        return 0
    return Decimal(repr(float(largest))).adjusted()


def _minus(text: str) -> str:
    return text.replace("-", "−")


def _times_ten(power: int, form: str) -> str:
    if power == 0:
        return ""
    if form == "latex":
        return rf" \times 10^{{{power}}}"
    if form == "html":
        return f" × 10<sup>{_minus(str(power))}</sup>"
    digits = str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
    return f" × 10{digits}"


@dataclass(frozen=True)
class Rounded:
    """A value with its errors, rounded and ready to be printed.

    Attributes
    ----------
    value, above, below : str
        Plain decimals, to be multiplied by ``10**power``; `above` and `below` are the errors without sign.
    power : int
        Common power of ten.
    """

    value: str
    above: str
    below: str
    power: int = 0

    @property
    def symmetric(self) -> bool:
        """Whether both errors read the same."""
        return self.above == self.below

    @property
    def text(self) -> str:
        """Plain text, ``"5.93 ± 0.15"`` or ``"5.93 +0.22 −0.20"``."""
        if not self.value:
            return MISSING
        errors = f"± {self.above}" if self.symmetric else f"+{self.above} −{self.below}"
        body = f"{_minus(self.value)} {errors}"
        return f"({body}){_times_ten(self.power, 'text')}" if self.power else body

    @property
    def html(self) -> str:
        """HTML with the errors of an asymmetric value stacked; contains nothing to be escaped."""
        if not self.value or self.symmetric:
            body = self.text if not self.power else f"({_minus(self.value)} ± {self.above})"
        else:
            body = (
                f'{_minus(self.value)}<span class="errors"><sup>+{self.above}</sup>'
                f"<sub>−{self.below}</sub></span>"
            )
        return f"{body}{_times_ten(self.power, 'html')}"

    @property
    def latex(self) -> str:
        """LaTeX in math mode, ``$5.93^{+0.22}_{-0.20}$``."""
        if not self.value:
            return "--"
        if self.symmetric:
            body = rf"{self.value} \pm {self.above}"
            body = f"({body})" if self.power else body
        else:
            body = f"{self.value}^{{+{self.above}}}_{{-{self.below}}}"
        return f"${body}{_times_ten(self.power, 'latex')}$"


@dataclass(frozen=True)
class RoundedInterval:
    """A closed interval, rounded and ready to be printed.

    Attributes
    ----------
    low, high : str
        Plain decimals, to be multiplied by ``10**power``; empty where missing.
    power : int
    """

    low: str
    high: str
    power: int = 0

    @property
    def text(self) -> str:
        """Plain text, ``"5.7 to 6.2"``."""
        if not self.low:
            return MISSING
        body = f"{_minus(self.low)} to {_minus(self.high)}"
        return f"({body}){_times_ten(self.power, 'text')}" if self.power else body

    @property
    def html(self) -> str:
        """HTML; contains nothing to be escaped."""
        if not self.low:
            return MISSING
        body = f"{_minus(self.low)} to {_minus(self.high)}"
        return f"({body}){_times_ten(self.power, 'html')}" if self.power else body

    @property
    def latex(self) -> str:
        """LaTeX, ``$[5.7, 6.2]$``."""
        return f"$[{self.low}, {self.high}]{_times_ten(self.power, 'latex')}$" if self.low else "--"


@dataclass(frozen=True)
class RoundedLimit:
    """A one-sided limit, rounded away from what it claims.

    Attributes
    ----------
    sign : str
        ``">"`` for a lower, ``"<"`` for an upper limit.
    value : str
        Plain decimal, to be multiplied by ``10**power``; empty where missing.
    power : int
    """

    sign: str
    value: str
    power: int = 0

    @property
    def text(self) -> str:
        """Plain text, ``"> 2.1"``."""
        return f"{self.sign} {_minus(self.value)}{_times_ten(self.power, 'text')}" if self.value else MISSING

    @property
    def html(self) -> str:
        """HTML, with the sign as an entity."""
        sign = "&gt;" if self.sign == ">" else "&lt;"
        return f"{sign} {_minus(self.value)}{_times_ten(self.power, 'html')}" if self.value else MISSING

    @property
    def latex(self) -> str:
        """LaTeX in math mode."""
        return f"${self.sign} {self.value}{_times_ten(self.power, 'latex')}$" if self.value else "--"


def round_value(value: float, above: float, below: float | None = None) -> Rounded:
    """Value with symmetric or asymmetric errors by the PDG rule.

    Parameters
    ----------
    value : float
    above : float
        Error, or the upper one of two.
    below : float, optional
        Lower error, without sign; as `above` if not given.

    Returns
    -------
    Rounded
        Empty if the value is NaN. The smaller error sets the place, so that neither is rounded away (common
        practice, no source); an error of zero sets none, a value with two of them is printed to six digits.

    Raises
    ------
    InputError
        If an error is negative or not finite, or the value is infinite.
    """
    if isnan(value):
        return Rounded("", "", "")
    below = above if below is None else below
    for error in (above, below):
        if not (0 <= error < inf):
            raise InputError(f"an error of {error} cannot be printed; it must be finite and not negative")
    place = min((error_place(error) for error in (above, below) if error > 0), default=None)
    if place is None:
        return Rounded(f"{value:.6g}", "0", "0")
    power = _power_of_ten(value, above, below)
    middle, upper, lower = (_plain(_rounded(number, place), power) for number in (value, above, below))
    return Rounded(middle, upper, lower, power)


def round_interval(low: float, high: float) -> RoundedInterval:
    """Ends of an interval, to the place that the PDG rule gives for its half-width.

    Parameters
    ----------
    low, high : float

    Returns
    -------
    RoundedInterval
        Empty if an end is NaN.

    Raises
    ------
    InputError
        If the interval is empty, upside down or infinite.
    """
    if isnan(low) or isnan(high):
        return RoundedInterval("", "")
    place, power = error_place((high - low) / 2), _power_of_ten(low, high)
    first, last = (_plain(_rounded(number, place), power) for number in (low, high))
    return RoundedInterval(first, last, power)


def round_limit(sign: str, value: float) -> RoundedLimit:
    """One-sided limit to two digits, rounded so that it never claims more than the number.

    Parameters
    ----------
    sign : {">", "<"}
        A lower limit is rounded down, an upper one up.
    value : float

    Returns
    -------
    RoundedLimit
        Empty if the value is NaN.

    Raises
    ------
    InputError
        If the sign is neither of the two or the value is infinite.
    """
    if sign not in (">", "<"):
        raise InputError(f"a limit is '>' or '<', not {sign!r}")
    if isnan(value):
        return RoundedLimit(sign, "")
    mode = ROUND_FLOOR if sign == ">" else ROUND_CEILING
    text, power = _significant(value, 2, mode)
    return RoundedLimit(sign, text, power)


def round_number(value: float, digits: int = 3) -> str:
    """Number without an error, to some significant digits, as plain text.

    Parameters
    ----------
    value : float
    digits : int

    Returns
    -------
    str
        An en dash for NaN.
    """
    if isnan(value):
        return MISSING
    text, power = _significant(value, digits, ROUND_HALF_EVEN)
    return f"{_minus(text)}{_times_ten(power, 'text')}"


def _significant(value: float, digits: int, mode: str) -> tuple[str, int]:
    if not isfinite(value):
        raise InputError(f"{value} cannot be rounded; it must be finite")
    if value == 0:
        return "0", 0
    place = Decimal(repr(float(value))).adjusted() - digits + 1
    number = _rounded(value, place, mode)
    power = _power_of_ten(float(number))
    return _plain(number, power), power
