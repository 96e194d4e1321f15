"""Credible intervals that carry their probability and kind, and marginal posteriors that answer on demand."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gapfit.errors import InputError

__all__ = ["CredibleInterval", "Marginal"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class CredibleInterval:
    """An interval of a posterior.

    Attributes
    ----------
    low, high : float
        Ends, in the unit of the quantity.
    probability : float
        Posterior probability between the ends.
    kind : str
        How the ends were chosen; always ``"equal-tailed"`` here.
    """

    low: float
    high: float
    probability: float
    kind: str = "equal-tailed"

    @property
    def half_width(self) -> float:
        """Half of the distance between the ends."""
        return (self.high - self.low) / 2

    def __contains__(self, value: float) -> bool:
        return self.low <= value <= self.high


@dataclass(frozen=True)
class Marginal:
    """Posterior of one quantity as draws of equal weight.

    Attributes
    ----------
    name : str
    unit : str
    draws : ndarray[n_draw]
        May be empty, in which case every answer is NaN.
    """

    name: str
    unit: str
    draws: FloatArray

    @property
    def median(self) -> float:
        """Posterior median."""
        return self.quantile(0.5)

    def quantile(self, probability: float) -> float:
        """Posterior quantile, NaN without draws."""
        return float(np.quantile(self.draws, probability)) if self.draws.size else float("nan")

    def interval(self, probability: float = 0.95) -> CredibleInterval:
        """Equal-tailed credible interval.

        Parameters
        ----------
        probability : float
            Between zero and one.

        Returns
        -------
        CredibleInterval

        Raises
        ------
        InputError
            If the probability is not between zero and one.
        """
        if not 0 < probability < 1:
            raise InputError(f"the probability of an interval is {probability}; it must lie between 0 and 1")
        low, high = self.quantile((1 - probability) / 2), self.quantile((1 + probability) / 2)
        return CredibleInterval(low, high, probability)
