"""Settings and small fixtures that the tests share."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import settings
from numpy.typing import NDArray

from gapfit.series import TemperatureSeries, make_series

FloatArray = NDArray[np.float64]
Truth = Callable[[FloatArray], FloatArray]
Simulate = Callable[..., TemperatureSeries]

# The same examples in every run, and no test by the clock.
settings.register_profile("fixed", derandomize=True, deadline=None, max_examples=60)
settings.load_profile("fixed")


@pytest.fixture(scope="session")
def simulate_readings() -> Simulate:
    """Factory of series: readings of a true curve with normal noise of 1 % and 0.3 ohm."""

    def simulate(
        truth: Truth,
        seed: int,
        *,
        low: float = 0.2,
        high: float = 2.0,
        n_point: int = 14,
        relative: float = 0.01,
        floor: float = 0.3,
        filling: Fraction = Fraction(1, 3),
        **record: object,
    ) -> TemperatureSeries:
        temperature = np.geomspace(low, high, n_point)
        error = np.hypot(relative * truth(temperature), floor)
        value = truth(temperature) + error * np.random.default_rng(seed).standard_normal(n_point)
        return make_series(temperature, value, error, filling=filling, field_T=12.0, **record)

    return simulate
