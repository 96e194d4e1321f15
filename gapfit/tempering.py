"""Particles carried from the prior to the posterior by tempering, so that modes and arms are seen."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from gapfit.diagnostics import effective_weights
from gapfit.posterior import LogPosterior, log_standard_normal, systematic_resample

__all__ = ["tempered_particles"]

FloatArray = NDArray[np.float64]

STRETCHES = (1.0, 0.5, 0.25, 0.1) * 8
"""Sizes of the moves of a stage in turn, relative to the size that suits a normal distribution."""


def tempered_particles(
    posterior: LogPosterior, n_particle: int, moves: float, rng: np.random.Generator
) -> FloatArray:
    """Particles near the posterior, from the prior by raising the likelihood from power zero to one.

    Parameters
    ----------
    posterior : LogPosterior
    n_particle : int
    moves : float
        Accepted moves that a particle makes at each power, on average.
    rng : numpy.random.Generator

    Returns
    -------
    ndarray[n_particle, n_fitted]
        Nearly posterior draws; what is made of them must not rely on that.

    Notes
    -----
    Resampling and local moves of Del Moral, Doucet & Jasra, J. R. Stat. Soc. B 68, 411 (2006), the moves by
    differential evolution (ter Braak, Stat. Comput. 16, 239 (2006)). Each power keeps half of the particles
    effective.
    """
    points = rng.standard_normal((n_particle, posterior.n_fitted))
    log_posterior = posterior(points)
    power = 0.0
    while power < 1:
        log_likelihood = log_posterior - log_standard_normal(points)
        following = _next_power(log_likelihood, power)
        weight = np.exp((following - power) * (log_likelihood - log_likelihood.max()))
        chosen = systematic_resample(weight, n_particle, rng)
        points, log_posterior, power = points[chosen], log_posterior[chosen], following
        moved = 0.0
        for stretch in STRETCHES:
            before = log_posterior
            points, log_posterior = _local_step(posterior, points, log_posterior, power, stretch, rng)
            moved += float(np.mean(log_posterior != before))
            if moved > moves:
                break
    return points


def _next_power(log_likelihood: FloatArray, power: float) -> float:
    """Largest power at which the reweighted particles are still half effective."""
    low, high = power, 1.0
    if effective_weights((high - power) * log_likelihood) >= 0.5 * log_likelihood.size:
        return 1.0
    for _ in range(30):
        middle = (low + high) / 2
        if effective_weights((middle - power) * log_likelihood) >= 0.5 * log_likelihood.size:
            low = middle
        else:
            high = middle
    return max(low, power + 1e-6)


def _local_step(
    posterior: LogPosterior,
    points: FloatArray,
    log_posterior: FloatArray,
    power: float,
    stretch: float,
    rng: np.random.Generator,
) -> tuple[FloatArray, FloatArray]:
    """One differential-evolution Metropolis step of all particles at a power of the likelihood."""
    n_draw, n_dim = points.shape
    first, second = rng.integers(n_draw, size=(2, n_draw))
    size = stretch * 2.38 / np.sqrt(2 * n_dim)
    offered = points + size * (points[first] - points[second]) + 1e-4 * rng.standard_normal(points.shape)
    log_offered = posterior(offered)
    change = power * (log_offered - log_posterior) + (1 - power) * (
        log_standard_normal(offered) - log_standard_normal(points)
    )
    taken = np.log(rng.uniform(size=n_draw)) < change
    return np.where(taken[:, None], offered, points), np.where(taken, log_offered, log_posterior)
