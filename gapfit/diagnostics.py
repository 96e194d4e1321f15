"""Diagnostics of draws: Pareto k-hat of importance weights, R-hat and effective sample sizes of ensembles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri
from scipy.stats import rankdata

__all__ = [
    "Diagnostics",
    "bulk_ess",
    "effective_weights",
    "nested_rhat",
    "pareto_smooth",
    "tail_ess",
]

FloatArray = NDArray[np.float64]

LARGEST_RHAT = 1.01
SMALLEST_ESS = 2000.0
LARGEST_PARETO_K = 0.7


@dataclass(frozen=True)
class Diagnostics:
    """Whether a posterior may be trusted, with the numbers that say so.

    Attributes
    ----------
    converged : bool
    reasons : tuple of str
        Why not, in plain words; empty when converged.
    rhat : float
        Largest nested R-hat of ln gap and log posterior; NaN for the fast engine.
    ess : float
        Smallest effective sample size (bulk, tail, or of importance weights).
    pareto_k : float
        Largest shape of the tail of the importance weights.
    engines_agree : bool or None
        Whether both engines give the same gap within Monte-Carlo error; None if only one ran.
    disagreement : float
        Largest difference of the engines in units of its Monte-Carlo error; NaN if only one ran.
    """

    converged: bool
    reasons: tuple[str, ...]
    rhat: float
    ess: float
    pareto_k: float
    engines_agree: bool | None = None
    disagreement: float = float("nan")


# --------------------------------------------------------------------------------------- importance weights


def effective_weights(log_weight: FloatArray) -> float:
    """Effective sample size of importance weights, (sum w)^2 / sum w^2.

    Parameters
    ----------
    log_weight : ndarray[n_draw]

    Returns
    -------
    float
    """
    weight = np.exp(log_weight - log_weight.max())
    return float(weight.sum() ** 2 / (weight**2).sum())


def pareto_smooth(log_weight: FloatArray) -> tuple[FloatArray, float]:
    """Importance weights with their upper tail smoothed by a generalised Pareto distribution.

    Parameters
    ----------
    log_weight : ndarray[n_draw]

    Returns
    -------
    smoothed : ndarray[n_draw]
        Log-weights.
    shape : float
        Pareto k-hat; above 0.7 the weights are not to be trusted.

    Notes
    -----
    Vehtari, Simpson, Gelman, Yao & Gabry, J. Mach. Learn. Res. 25, 1 (2024).
    """
    n_draw = log_weight.size
    n_tail = int(min(n_draw / 5, 3 * np.sqrt(n_draw)))
    if n_tail < 5 or not np.isfinite(log_weight.max()):
        return log_weight, float("inf")
    largest = float(log_weight.max())
    order = np.argsort(log_weight, kind="stable")
    tail, edge = order[-n_tail:], log_weight[order[-n_tail - 1]]
    excess = np.exp(log_weight[tail] - largest) - np.exp(edge - largest)
    if excess.max() <= 1e-12:
        return log_weight, float("-inf")
    shape, scale = _fit_pareto(np.maximum(excess, 1e-300))
    probability = (np.arange(n_tail) + 0.5) / n_tail
    quantile = _pareto_quantile(probability, shape, scale) + np.exp(edge - largest)
    smoothed = log_weight.copy()
    smoothed[tail] = np.minimum(np.log(quantile), 0.0) + largest
    return smoothed, shape


def _fit_pareto(excess: FloatArray) -> tuple[float, float]:
    """Shape and scale of a generalised Pareto distribution.

    Zhang & Stephens, Technometrics 51, 316 (2009).
    """
    n = excess.size
    n_grid = 30 + int(np.sqrt(n))
    grid = 1 - np.sqrt(n_grid / (np.arange(1, n_grid + 1) - 0.5))
    grid = grid / (3 * excess[max(int(n / 4 + 0.5) - 1, 0)]) + 1 / excess[-1]
    shapes = np.log1p(-grid[:, None] * excess).mean(axis=1)
    profile = n * (np.log(-grid / shapes) - shapes - 1)
    weight = np.exp(profile - profile.max())
    theta = float((grid * weight).sum() / weight.sum())
    shape = float(np.log1p(-theta * excess).mean())
    scale = -shape / theta
    return (n * shape + 5) / (n + 10), scale


def _pareto_quantile(probability: FloatArray, shape: float, scale: float) -> FloatArray:
    if abs(shape) < 1e-12:
        return np.asarray(-scale * np.log1p(-probability))
    return np.asarray(scale * np.expm1(-shape * np.log1p(-probability)) / shape)


# ------------------------------------------------------------------------------------------------ ensembles


def _ranked(chains: FloatArray) -> FloatArray:
    """Rank-normalised values (Vehtari et al., Bayesian Anal. 16, 667 (2021))."""
    ranks = rankdata(chains, method="average").reshape(chains.shape)
    return np.asarray(ndtri((ranks - 0.375) / (chains.size + 0.25)))


def nested_rhat(ensembles: FloatArray) -> float:
    """Nested R-hat with independent ensembles as superchains, on ranks.

    Parameters
    ----------
    ensembles : ndarray[n_ensemble, n_step, n_walker]
        Draws of one quantity.

    Returns
    -------
    float
        sqrt(1 + between / within); NaN for fewer than two ensembles.

    Notes
    -----
    Margossian et al., Bayesian Anal. (2024), arXiv 2110.13017. Walkers of one ensemble move together, so
    only whole ensembles count as independent.
    """
    if ensembles.shape[0] < 2:
        return float("nan")
    if np.ptp(ensembles) == 0:
        return 1.0
    ranked = _ranked(ensembles)
    between = ranked.mean(axis=(1, 2)).var(ddof=1)
    within_walkers = ranked.var(axis=1, ddof=1).mean(axis=1)
    among_walkers = ranked.mean(axis=1).var(axis=1, ddof=1)
    return float(np.sqrt(1 + between / (within_walkers + among_walkers).mean()))


def _ess(chains: FloatArray) -> float:
    """Effective sample size of ndarray[n_step, n_chain] by Geyer's initial monotone sequence."""
    n_step, n_chain = chains.shape
    if n_step < 4 or np.ptp(chains) == 0:
        return float("nan")
    centred = chains - chains.mean(axis=0)
    size = 2 ** int(np.ceil(np.log2(2 * n_step)))
    spectrum = np.fft.rfft(centred, n=size, axis=0)
    covariance = np.fft.irfft(np.abs(spectrum) ** 2, n=size, axis=0)[:n_step].mean(axis=1) / n_step
    within = covariance[0] * n_step / (n_step - 1)
    total = covariance[0] + (chains.mean(axis=0).var(ddof=1) if n_chain > 1 else 0.0)
    correlation = 1 - (within - covariance) / total
    correlation[0] = 1.0
    pairs = correlation[: n_step // 2 * 2].reshape(-1, 2).sum(axis=1)
    negative = np.flatnonzero(pairs <= 0)
    pairs = pairs[: negative[0]] if negative.size else pairs
    time = -1 + 2 * np.minimum.accumulate(pairs).sum()
    return float(n_step * n_chain / max(time, 1 / np.log10(n_step * n_chain)))


def _split(ensembles: FloatArray) -> FloatArray:
    """Halves of every walker as chains, ndarray[n_step / 2, n_chain]."""
    half = ensembles.shape[1] // 2
    parts = np.concatenate([ensembles[:, :half], ensembles[:, -half:]], axis=2)
    return np.moveaxis(parts, 1, 0).reshape(half, -1)


def bulk_ess(ensembles: FloatArray) -> float:
    """Effective sample size of the bulk, from rank-normalised split walkers.

    Parameters
    ----------
    ensembles : ndarray[n_ensemble, n_step, n_walker]

    Returns
    -------
    float

    Notes
    -----
    Vehtari et al., Bayesian Anal. 16, 667 (2021).
    """
    return _ess(_ranked(_split(ensembles)))


def tail_ess(ensembles: FloatArray, level: float = 0.95) -> float:
    """Smaller effective sample size of the two ends of a central interval.

    Parameters
    ----------
    ensembles : ndarray[n_ensemble, n_step, n_walker]
    level : float
        Probability of the interval.

    Returns
    -------
    float
    """
    chains = _split(ensembles)
    ends = np.quantile(chains, [(1 - level) / 2, (1 + level) / 2])
    return min(_ess((chains <= end).astype(float)) for end in ends)
