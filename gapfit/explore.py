"""The fast engine: every combination at once by optimiser, then importance sampling from a fitted mixture.

All combinations descend together from several starts. A quick importance sample about the modes tells
which of them matter. For those a mixture of Student-t distributions is fitted to tempered particles and
modes together, sampled, and fitted again to the weighted draws; the last mixture gives draws, evidence
and its own alarm (Pareto k-hat). Modes alone would miss the wide arms of contributions that the data do
not need, and with them a factor of two to three in evidence; particles alone can miss a narrow mode in
many dimensions.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from gapfit.diagnostics import effective_weights, pareto_smooth
from gapfit.mechanisms import PARAMETERS, SLOT, Combination
from gapfit.optimise import minimise
from gapfit.posterior import LogPosterior, Problem, log_mean_exp, pooled_objective
from gapfit.tempering import tempered_particles

__all__ = ["Explored", "Mixture", "explore"]

FloatArray = NDArray[np.float64]

DEGREES = 6.0
N_START = 6
N_MODE = 3
NEGLIGIBLE = 9.0
QUICK_DRAWS = 600
MATTERS = 0.02
"""Share of the average from which a combination is looked at thoroughly."""

N_PARTICLE = 400
N_COMPONENT, N_FIT_STEP = 5, 8
FIRST_DRAWS, FINAL_DRAWS = 1200, 2500
EXTRA_ROUNDS = 2
GOOD_PARETO_K = 0.6


@dataclass(frozen=True)
class Mixture:
    """Mixture of multivariate Student-t distributions with 6 degrees of freedom.

    Attributes
    ----------
    weight : ndarray[n_component]
    mean : ndarray[n_component, n_dim]
    root : ndarray[n_component, n_dim, n_dim]
        Lower Cholesky factors of the scale matrices.
    """

    weight: FloatArray
    mean: FloatArray
    root: FloatArray

    @property
    def n_dim(self) -> int:
        """Number of dimensions."""
        return int(self.mean.shape[1])

    def sample(self, n_draw: int, rng: np.random.Generator) -> FloatArray:
        """Draws, ndarray[n_draw, n_dim], the components in proportion with as little chance as possible."""
        edges = np.cumsum(self.weight)
        which = np.searchsorted(edges / edges[-1], (np.arange(n_draw) + rng.uniform()) / n_draw)
        which = np.minimum(which, self.weight.size - 1)
        normal = rng.standard_normal((n_draw, self.n_dim))
        stretch = np.sqrt(DEGREES / rng.chisquare(DEGREES, n_draw))
        moved = (self.root[which] @ normal[:, :, None])[:, :, 0] * stretch[:, None]
        return np.asarray(self.mean[which] + moved)

    def component_terms(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Log of weight times density, and squared distance, of every component.

        Parameters
        ----------
        points : ndarray[n_draw, n_dim]

        Returns
        -------
        terms, distance : ndarray[n_draw, n_component]
        """
        inverse, height = self._whitener
        scaled = (points - self.mean[:, None, :]) @ inverse
        distance = np.square(scaled, out=scaled).sum(axis=2).T
        return height - (DEGREES + self.n_dim) / 2 * np.log1p(distance / DEGREES), distance

    @cached_property
    def _whitener(self) -> tuple[FloatArray, FloatArray]:
        """Transposed inverse roots, and log of weight times density at the centre of every component."""
        d = self.n_dim
        log_volume = np.log(np.einsum("kii->ki", self.root)).sum(axis=1)
        constant = gammaln((DEGREES + d) / 2) - gammaln(DEGREES / 2) - d / 2 * np.log(DEGREES * np.pi)
        inverse = np.swapaxes(np.linalg.inv(self.root), 1, 2)
        return np.ascontiguousarray(inverse), np.log(self.weight) + constant - log_volume

    def log_density(self, points: FloatArray) -> FloatArray:
        """Log density, ndarray[n_draw]."""
        terms, _ = self.component_terms(points)
        largest = terms.max(axis=1)
        return np.asarray(largest + np.log(np.exp(terms - largest[:, None]).sum(axis=1)))

    def refitted(self, points: FloatArray, weight: FloatArray) -> Mixture:
        """One step of weighted expectation maximisation.

        Parameters
        ----------
        points : ndarray[n_draw, n_dim]
        weight : ndarray[n_draw]
            Importance weights, summing to one.

        Returns
        -------
        Mixture
            The last component, the broad one, stays as it is.
        """
        terms, distance = self.component_terms(points)
        share = np.exp(terms - terms.max(axis=1, keepdims=True))
        share *= (weight / share.sum(axis=1))[:, None]
        mass = share.sum(axis=0) + 1e-12
        pull = share * (DEGREES + self.n_dim) / (DEGREES + distance)
        mean = (pull.T @ points) / (pull.sum(axis=0)[:, None] + 1e-300)
        offset = (points - mean[:, None, :]) * np.sqrt(pull.T)[:, :, None]
        scatter = np.swapaxes(offset, 1, 2) @ offset / mass[:, None, None]
        count = mass * effective_weights(np.log(weight + 1e-300))
        keep = count / (count + 2 * self.n_dim)
        old = np.einsum("kij,klj->kil", self.root, self.root)
        scatter = keep[:, None, None] * scatter + (1 - keep[:, None, None]) * old
        mean = keep[:, None] * mean + (1 - keep[:, None]) * self.mean
        root = np.linalg.cholesky(scatter + 1e-9 * np.eye(self.n_dim))
        mean[-1], root[-1] = self.mean[-1], self.root[-1]
        new_weight = np.maximum(0.9 * mass / mass.sum() + 0.1 * self.weight, 1e-4)
        new_weight[-1] = max(new_weight[-1], BROAD_SHARE)
        return Mixture(new_weight / new_weight.sum(), mean, root)

    def widened(self) -> Mixture:
        """The same components with twice wider copies of small weight, the broad one last."""
        core = self.weight[:-1]
        weight = np.concatenate([(1 - WIDE_SHARE) * core, WIDE_SHARE * core, self.weight[-1:]])
        mean = np.concatenate([self.mean[:-1], self.mean])
        return Mixture(weight, mean, np.concatenate([self.root[:-1], 2.0 * self.root[:-1], self.root[-1:]]))


BROAD_SHARE = 0.05
WIDE_SHARE = 0.2


def fit_mixture(
    points: FloatArray, weight: FloatArray, n_component: int, n_step: int, rng: np.random.Generator
) -> Mixture:
    """Mixture fitted to weighted draws by expectation maximisation, with the prior as broad component.

    Parameters
    ----------
    points : ndarray[n_draw, n_dim]
    weight : ndarray[n_draw]
        Summing to one.
    n_component : int
        Components beside the broad one; they start at draws taken at random.
    n_step : int
        Steps of expectation maximisation.
    rng : numpy.random.Generator

    Returns
    -------
    Mixture
    """
    n_dim = points.shape[1]
    centre = weight @ points
    scatter = np.einsum("n,ni,nj->ij", weight, points - centre, points - centre) + 1e-9 * np.eye(n_dim)
    root = np.linalg.cholesky(scatter)
    first = points[rng.choice(len(points), n_component, p=weight)]
    mixture = Mixture(
        np.concatenate([np.full(n_component, (1 - BROAD_SHARE) / n_component), [BROAD_SHARE]]),
        np.concatenate([first, np.zeros((1, n_dim))]),
        np.concatenate([np.repeat(0.6 * root[None], n_component, axis=0), np.eye(n_dim)[None]]),
    )
    for _ in range(n_step):
        mixture = mixture.refitted(points, weight)
    return mixture


@dataclass(frozen=True)
class Explored:
    """Posterior of one combination as the fast engine knows it.

    Attributes
    ----------
    combination : Combination
    log_evidence : float
        Logarithm of the integral of prior times window-summed likelihood.
    log_evidence_error : float
        Its Monte-Carlo standard error.
    whitened : ndarray[n_draw, n_fitted]
        Draws of the proposal.
    log_weight : ndarray[n_draw]
        Their smoothed importance weights, normalised to sum to one.
    pareto_k : float
    ess : float
    proposal : Mixture
        What the draws come from; also the independence proposal of the sampler.
    modes : ndarray[n_mode, n_fitted]
    """

    combination: Combination
    log_evidence: float
    log_evidence_error: float
    whitened: FloatArray
    log_weight: FloatArray
    pareto_k: float
    ess: float
    proposal: Mixture
    modes: FloatArray


def explore(
    problem: Problem,
    combinations: Sequence[Combination],
    log_prior: FloatArray,
    rng: np.random.Generator,
    thorough: bool = True,
) -> tuple[Explored, ...]:
    """Posteriors and evidences of the combinations that matter.

    Parameters
    ----------
    problem : Problem
    combinations : sequence of Combination
    log_prior : ndarray[n_combination]
        Log prior weights of the combinations.
    rng : numpy.random.Generator
    thorough : bool
        Whether to look again at those that carry weight; without, medians are good and tails rough.

    Returns
    -------
    tuple of Explored
        Combinations whose Laplace weight is within e^-9 of the best of their family, with and without a
        gap.
    """
    modes = _descend(problem, combinations, rng)
    laplace = np.array([_laplace(found) for found in modes]) + log_prior
    gapped = np.array([combination.activated for combination in combinations])
    chosen = np.zeros(len(combinations), bool)
    for family in (gapped, ~gapped):
        if family.any():
            chosen |= family & (laplace > laplace[family].max() - NEGLIGIBLE)
    quick = [
        (index, _quick(LogPosterior(problem, combinations[index]), modes[index], rng))
        for index in map(int, np.flatnonzero(chosen))
    ]
    weight = np.array([item.log_evidence for _, item in quick]) + log_prior[[index for index, _ in quick]]
    share = np.exp(weight - np.logaddexp.reduce(weight))
    return tuple(
        _thorough(LogPosterior(problem, combinations[index]), modes[index], rng)
        if thorough and part > MATTERS
        else item
        for part, (index, item) in zip(share, quick, strict=True)
    )


@dataclass(frozen=True)
class _Modes:
    position: FloatArray
    cost: FloatArray
    curvature: FloatArray


def _descend(problem: Problem, combinations: Sequence[Combination], rng: np.random.Generator) -> list[_Modes]:
    """Distinct modes of every combination, best first."""
    rows = [combination for combination in combinations for _ in range(N_START)]
    start = np.zeros((len(rows), len(PARAMETERS)))
    for row, combination in enumerate(rows):
        start[row, combination.slots] = _start(row % N_START, combination, problem, rng)
    ended = minimise(pooled_objective(problem, rows), start, tolerance=1e-4, max_iterations=60)
    found = []
    for index, combination in enumerate(combinations):
        block = slice(index * N_START, (index + 1) * N_START)
        slots = combination.slots
        position, cost = ended.position[block][:, slots], ended.cost[block]
        curvature = ended.curvature[block][:, slots[:, None], slots]
        kept = _distinct(position, cost, curvature)
        found.append(_Modes(position[kept], cost[kept], curvature[kept]))
    return found


def _start(number: int, combination: Combination, problem: Problem, rng: np.random.Generator) -> FloatArray:
    """Start: a ladder of gaps with all else near its prior centre, then plain prior draws."""
    slots = combination.slots
    start = rng.standard_normal(slots.size)
    if number < N_START // 2:
        start *= 0.3
        if combination.activated:
            low, high = problem.series.temperature[[0, -1]]
            gap = np.log(2 * low) + (np.log(12 * high) - np.log(2 * low)) * (number + 0.5) / (N_START // 2)
            first = int(np.flatnonzero(slots == SLOT["gap_K"])[0])
            start[first] = (gap - problem.prior.centre[SLOT["gap_K"]]) / problem.prior.width[SLOT["gap_K"]]
    return start


def _distinct(position: FloatArray, cost: FloatArray, curvature: FloatArray) -> NDArray[np.intp]:
    """Indices of up to three modes, each 1.5 standard deviations or more from the better ones."""
    kept: list[int] = []
    for index in np.argsort(cost, kind="stable"):
        if len(kept) == N_MODE or (kept and cost[index] > cost[kept[0]] + NEGLIGIBLE):
            break
        away = position[index] - position[kept]
        if all(step @ curvature[other] @ step > 2.25 for step, other in zip(away, kept, strict=True)):
            kept.append(int(index))
    return np.array(kept, dtype=np.intp)


def _laplace(modes: _Modes) -> float:
    """Laplace evidence, summed over modes; the prior's 2 pi cancel those of the integral."""
    _, log_determinant = np.linalg.slogdet(modes.curvature)
    return float(np.logaddexp.reduce(-modes.cost - 0.5 * log_determinant))


def _first_mixture(modes: _Modes) -> Mixture:
    """Two Student-t components a mode, one of them wide, and the prior as the broad one."""
    n_dim = modes.position.shape[1]
    root = np.linalg.cholesky(np.linalg.inv(modes.curvature))
    _, log_determinant = np.linalg.slogdet(modes.curvature)
    height = -modes.cost - 0.5 * log_determinant
    share = np.exp(0.5 * (height - height.max()))
    share /= share.sum()
    weight = np.concatenate([0.55 * share, 0.4 * share, [BROAD_SHARE]])
    mean = np.concatenate([modes.position, modes.position, np.zeros((1, n_dim))])
    return Mixture(weight, mean, np.concatenate([root, 2 * root, np.eye(n_dim)[None]]))


def _blend(one: Mixture, two: Mixture) -> Mixture:
    """Components of two mixtures in equal parts, the broad one of the first last."""
    core = np.concatenate([two.weight[:-1], one.weight[:-1]])
    weight = np.concatenate([(1 - BROAD_SHARE) * core / core.sum(), [BROAD_SHARE]])
    mean = np.concatenate([two.mean[:-1], one.mean])
    return Mixture(weight, mean, np.concatenate([two.root[:-1], one.root]))


@dataclass(frozen=True)
class _Weighted:
    """Draws of a mixture with their smoothed importance weights."""

    mixture: Mixture
    points: FloatArray
    log_weight: FloatArray
    shape: float

    @classmethod
    def drawn(
        cls, posterior: LogPosterior, mixture: Mixture, n_draw: int, rng: np.random.Generator
    ) -> _Weighted:
        points = mixture.sample(n_draw, rng)
        return cls(mixture, points, *pareto_smooth(posterior(points) - mixture.log_density(points)))

    def refitted(self) -> Mixture:
        """The mixture moved towards the weighted draws, with wider copies of its components."""
        weight = np.exp(self.log_weight - self.log_weight.max())
        weight /= weight.sum()
        mixture = self.mixture
        for _ in range(3):
            mixture = mixture.refitted(self.points, weight)
        return mixture

    def explored(self, posterior: LogPosterior, modes: _Modes) -> Explored:
        log_evidence = log_mean_exp(self.log_weight)
        n_draw, ess = self.log_weight.size, effective_weights(self.log_weight)
        return Explored(
            posterior.combination,
            log_evidence,
            float(np.sqrt(max(1 / ess - 1 / n_draw, 0.0))),
            self.points,
            self.log_weight - log_evidence - np.log(n_draw),
            self.shape,
            ess,
            self.mixture,
            modes.position,
        )


def _quick(posterior: LogPosterior, modes: _Modes, rng: np.random.Generator) -> Explored:
    """Importance sampling about the modes."""
    first = _Weighted.drawn(posterior, _first_mixture(modes), QUICK_DRAWS, rng)
    return _Weighted.drawn(posterior, first.refitted().widened(), QUICK_DRAWS, rng).explored(posterior, modes)


def _thorough(posterior: LogPosterior, modes: _Modes, rng: np.random.Generator) -> Explored:
    """Importance sampling from a mixture of particles and modes; poor weights earn further rounds."""
    particles = tempered_particles(posterior, N_PARTICLE, 0.5 * posterior.n_fitted, rng)
    equal = np.full(N_PARTICLE, 1 / N_PARTICLE)
    seen = fit_mixture(particles, equal, N_COMPONENT, N_FIT_STEP, rng)
    mixture = _Weighted.drawn(posterior, _blend(seen, _first_mixture(modes)), FIRST_DRAWS, rng).refitted()
    draws = _Weighted.drawn(posterior, mixture.widened(), FINAL_DRAWS, rng)
    for _ in range(EXTRA_ROUNDS):
        if draws.shape < GOOD_PARETO_K:
            break
        redrawn = _Weighted.drawn(posterior, draws.refitted(), FINAL_DRAWS, rng)
        if redrawn.shape < draws.shape:
            draws = redrawn
    return draws.explored(posterior, modes)
