"""Bayesian evidence of one model, from an ensemble chain and importance sampling with a frozen mixture.

All of it works in probit space, where the prior is N(0, I): no hard edges, and a parameter that the data do
not constrain is exactly Gaussian. The steps:

1. an ensemble is cooled from the prior to the posterior, under a bias that keeps walkers in every stratum of a
   named coordinate, and burnt in;
2. local optima, one per stratum, give Gaussian approximations;
3. a wide mixture of t distributions is fitted to the chain and improved by rounds of weighted draws, and the
   heaviest draws of each round get a local approximation of their own;
4. a production chain runs with proposals from that mixture;
5. a final mixture is fitted to the first half of that chain and to the weighted draws, then frozen; fresh draws
   from it give ln Z by importance sampling, and with the second half of the chain by bridge sampling as a check.

No draw that helped to fit the final mixture enters an estimate: pooling the adaptation rounds, or bridging with
the draws that were fitted, biases ln Z low.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import partial

import numpy as np
from scipy.special import logsumexp, ndtri

from transit import sampling
from transit.errors import TransitError
from transit.mixtures import (
    Mixture,
    choose_mixture,
    combine_mixtures,
    effective_size,
    fit_mixture,
    pareto_shape,
    standard_normal_mixture,
    systematic_resample,
)

LnLikelihood = Callable[[np.ndarray], np.ndarray]
ChainHook = Callable[[str, np.ndarray], np.ndarray | None]

# Likelihood calls are fastest between 32 and 512 rows.
_BATCH_ROWS = 512
# Number of equally weighted posterior draws handed on.
_POSTERIOR_DRAWS = 2000
# Number of equal-probability strata of the stratum coordinate.
_STRATA = 5
# The umbrella lifts strata by up to e^4. Tried 0, 3 and 8: without it a thin region with a quarter of the mass
# was lost unnoticed in three of three seeds; with 8 a small budget was spread too thinly.
_LN_UMBRELLA = 4.0
# Temperatures between prior and posterior; a peak of ln L = 10 000 takes about 20.
_MAX_STAGES = 40
_BURN_SEGMENTS = 5
# Largest number of chain draws in a fit.
_FIT_DRAWS = 2500
# Numbers of components to try.
_SIZES = (1, 2, 4, 7, 11)
# Chain draws are correlated: the criterion that chooses the number of components counts one in this many.
CHAIN_THIN = 5.0
# An evidence rests on at least this effective number of weighted draws.
MIN_EFFECTIVE_SIZE = 300.0
# One draw that carries more than this share of the weight is a sign of a region that the mixture misses.
_MAX_WEIGHT_SHARE = 0.02
_PARETO_LIMIT = 0.7


class EvidenceError(TransitError, RuntimeError):
    """The evidence of a model cannot be computed at all."""


@dataclass(frozen=True)
class Budget:
    """Numbers of draws and steps for one seed and one number of dimensions.

    Parameters
    ----------
    pool : int
        Prior draws for the start.
    walkers : int
        Walkers of both chains.
    stage_steps : int
        Steps at each temperature between prior and posterior.
    burn_steps, production_steps : int
        Steps of the chains.
    climb_steps : int
        Steps of the local optimisations; 0 leaves them out.
    outliers : int
        Heavy draws that get a local approximation after each adaptation round.
    rounds, round_draws : int
        Largest number of adaptation rounds, and weighted draws of each.
    final_draws, final_batches : int
        Draws of each batch from the frozen mixture, and the largest number of batches.
    target_err : float
        Own error of ln Z at which no further batch is drawn.
    """

    pool: int
    stage_steps: int
    walkers: int
    burn_steps: int
    climb_steps: int
    outliers: int
    rounds: int
    round_draws: int
    production_steps: int
    final_draws: int
    final_batches: int
    target_err: float


@dataclass(frozen=True)
class SamplerSettings:
    """How much work an evidence may cost.

    Parameters
    ----------
    few : Budget
        For four dimensions or fewer.
    many : Budget
        For ten dimensions or more; between four and ten the numbers are interpolated geometrically.
    """

    few: Budget
    many: Budget

    @classmethod
    def standard(cls) -> SamplerSettings:
        """For results: up to 35 000 likelihood calls per seed for D <= 4, up to 120 000 for D >= 10."""
        return cls(
            few=Budget(1000, 10, 48, 60, 12, 8, 3, 1500, 120, 4000, 4, 0.015),
            many=Budget(2000, 12, 100, 120, 20, 8, 6, 4000, 150, 10000, 3, 0.04),
        )

    @classmethod
    def quick(cls) -> SamplerSettings:
        """For a first look: up to 8 000 likelihood calls per seed for D <= 4, about 20 000 for D >= 10."""
        return cls(
            few=Budget(500, 8, 24, 40, 6, 4, 2, 500, 40, 1200, 2, 0.05),
            many=Budget(1500, 12, 40, 75, 6, 0, 3, 1000, 40, 3000, 1, 0.1),
        )

    def budget(self, n_dim: int) -> Budget:
        """Budget for a number of dimensions D."""
        position = float(np.clip((n_dim - 4) / 6, 0, 1))
        values = {}
        for name, low in vars(self.few).items():
            high = getattr(self.many, name)
            between = low if low == high else float(low) ** (1 - position) * float(high) ** position
            values[name] = between if name == "target_err" else round(between)
        # emcee splits the walkers into two halves and needs two per dimension.
        values["walkers"] = max(2 * ((values["walkers"] + 1) // 2), 2 * n_dim + 2)
        return Budget(**values)


@dataclass(frozen=True, eq=False)
class EvidenceRun:
    """Evidence and posterior from one seed.

    Parameters
    ----------
    ln_evidence, ln_evidence_err : float
        Importance sampling estimate of ln Z, and its own error sqrt(1/ess - 1/n_importance).
    ln_evidence_bridge, bridge_err : float
        Bridge sampling cross-check, and its own error (too small where the chain missed a mode).
    ess : float
        Effective number of weighted draws.
    n_importance : int
        Number of weighted draws.
    max_weight : float
        Largest share of the total weight carried by one draw.
    pareto_k : float
        Shape of the tail of the weights.
    draws_z : np.ndarray
        Shape (S, D), equally weighted posterior draws in probit space.
    best_z : np.ndarray
        Shape (D,), point of the highest likelihood met anywhere in the run.
    best_ln_likelihood : float
        ln L there.
    autocorr_steps : float
        Longest integrated autocorrelation time of the production chain, in steps.
    walkers, steps : int
        Size of the production chain.
    likelihood_calls : int
        Points at which the likelihood was evaluated.
    flags : tuple of str
        Sentences about what went wrong; empty when nothing did.
    """

    ln_evidence: float
    ln_evidence_err: float
    ln_evidence_bridge: float
    bridge_err: float
    ess: float
    n_importance: int
    max_weight: float
    pareto_k: float
    draws_z: np.ndarray
    best_z: np.ndarray
    best_ln_likelihood: float
    autocorr_steps: float
    walkers: int
    steps: int
    likelihood_calls: int
    flags: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class CombinedEvidence:
    """Evidence and posterior from several independent seeds.

    Parameters
    ----------
    ln_evidence, ln_evidence_err : float
        Combined estimate of ln Z and its honest error (see `combine_runs`).
    draws_z : np.ndarray
        Shape (S, D), equally weighted posterior draws.
    best_z : np.ndarray
        Shape (D,), point of the highest likelihood.
    best_ln_likelihood : float
        ln L there.
    sampling : dict
        `steps`, `walkers`, `autocorr_steps`, `ess` (the smallest), `likelihood_calls` (the sum), `flags`
        (list of str), `converged` (bool).
    """

    ln_evidence: float
    ln_evidence_err: float
    draws_z: np.ndarray
    best_z: np.ndarray
    best_ln_likelihood: float
    sampling: dict = field(default_factory=dict)


class _Target:
    """The likelihood with its calls counted, its best point kept, and the posterior built from it."""

    def __init__(self, ln_likelihood: LnLikelihood, n_dim: int):
        self._ln_likelihood = ln_likelihood
        self.n_dim = n_dim
        self.calls = 0
        self.best_z = np.zeros(n_dim)
        self.best_ln_likelihood = -np.inf

    def ln_posterior(self, z: np.ndarray) -> np.ndarray:
        """Unnormalised log posterior density ln L + ln N(z; 0, I) at points (N, D); shape (N,)."""
        ln_like = np.empty(len(z))
        for first in range(0, len(z), _BATCH_ROWS):
            # A copy: a likelihood may scribble on its input.
            block = z[first : first + _BATCH_ROWS].copy()
            ln_like[first : first + _BATCH_ROWS] = self._ln_likelihood(block)
        self.calls += len(z)
        if np.isnan(ln_like).any() or np.isposinf(ln_like).any():
            row = int(np.flatnonzero(np.isnan(ln_like) | np.isposinf(ln_like))[0])
            raise EvidenceError(
                f"The log likelihood is {ln_like[row]} at probit coordinates {np.round(z[row], 4).tolist()}, "
                "expected a finite number or -inf: a fault of the model."
            )
        top = int(np.argmax(ln_like))
        if ln_like[top] > self.best_ln_likelihood:
            self.best_ln_likelihood = float(ln_like[top])
            self.best_z = z[top].copy()
        return ln_like - 0.5 * np.einsum("nd,nd->n", z, z) - 0.5 * self.n_dim * np.log(2 * np.pi)


def estimate_evidence(
    ln_likelihood: LnLikelihood,
    n_dim: int,
    seed_sequence: np.random.SeedSequence,
    settings: SamplerSettings,
    *,
    stratum_dim: int | None = None,
    starts_z: np.ndarray | None = None,
    chain_hook: ChainHook | None = None,
) -> EvidenceRun:
    """Evidence of one model from one seed.

    Parameters
    ----------
    ln_likelihood : callable
        Maps points in probit space, shape (W, D), to log likelihoods, shape (W,), finite or -inf.
    n_dim : int
        Number of dimensions D, at least one.
    seed_sequence : np.random.SeedSequence
        Seed; used by value, so the same sequence gives the same numbers each time.
    settings : SamplerSettings
        How much work to spend.
    stratum_dim : int, optional
        Coordinate whose prior is cut into five strata, each of which gets a local optimisation of its own.
    starts_z : np.ndarray, optional
        Shape (K, D), further starts of local optimisations, e.g. the optimum of a nested model.
    chain_hook : callable, optional
        Called as `chain_hook(stage, positions)` with stage "burn-in" and "production" and positions
        (S, W, D). For figures and fault injection: an array that it returns replaces the positions.

    Returns
    -------
    EvidenceRun

    Raises
    ------
    EvidenceError
        If the likelihood is NaN or +inf somewhere, or zero at every draw from the prior.
    """
    budget = settings.budget(n_dim)
    seeds = [sampling.child_sequence(seed_sequence, i) for i in range(3)]
    rng = np.random.default_rng(seeds[0])
    target = _Target(ln_likelihood, n_dim)

    pool = _Pool(target)
    strata = _Strata(stratum_dim)
    explored, ln_explored = _explore(pool, strata, budget, seeds[1], rng, chain_hook)
    peaks = _find_peaks(target, explored, ln_explored, stratum_dim, starts_z, budget.climb_steps)
    wide, peaks = _adapt(pool, explored, ln_explored, peaks, budget, rng)
    chain = _produce(pool, wide, budget, seeds[2], rng, chain_hook)
    half = len(chain.positions) // 2
    frozen = _final_mixture(pool, chain.positions[:half], peaks, rng)
    draws, ln_weights = _importance_draws(target, frozen, budget, rng)

    ln_evidence, own_err, ess = importance_estimate(ln_weights)
    bridge, bridge_err = _bridge_with_chain(frozen, ln_weights, chain, half)
    share = np.exp(ln_weights - logsumexp(ln_weights))
    run = EvidenceRun(
        ln_evidence=ln_evidence,
        ln_evidence_err=own_err,
        ln_evidence_bridge=bridge,
        bridge_err=bridge_err,
        ess=ess,
        n_importance=len(draws),
        max_weight=float(share.max()),
        pareto_k=pareto_shape(ln_weights),
        draws_z=draws[rng.permutation(systematic_resample(share, _POSTERIOR_DRAWS, rng))],
        best_z=target.best_z,
        best_ln_likelihood=target.best_ln_likelihood,
        autocorr_steps=sampling.autocorrelation_steps(chain.positions),
        walkers=chain.positions.shape[1],
        steps=len(chain.positions),
        likelihood_calls=target.calls,
        flags=(),
    )
    return replace(run, flags=_run_flags(run, n_dim))


# ---------------------------------------------------------------------------------------------------------
# Stage 1: exploration


class _Pool:
    """Draws from a growing list of proposals, weighted against their mean density. For fitting only."""

    def __init__(self, target: _Target):
        self.target = target
        self.draws = np.empty((0, target.n_dim))
        self.ln_post = np.empty(0)
        self.ln_prior = np.empty(0)
        self._proposals: list[tuple[float, Mixture]] = []
        self._ln_proposed = np.empty(0)

    def add(self, proposal: Mixture, n_draws: int, rng: np.random.Generator) -> np.ndarray:
        """Draw from one more proposal; returns its own log weights (n_draws,)."""
        fresh = proposal.draw(n_draws, rng)
        ln_post = self.target.ln_posterior(fresh)
        ln_own = proposal.ln_density(fresh)
        ln_count = float(np.log(n_draws))
        ln_fresh = [ln_own + ln_count]
        ln_fresh += [earlier.ln_density(fresh) + ln_size for ln_size, earlier in self._proposals]
        if self._proposals:
            self._ln_proposed = np.logaddexp(self._ln_proposed, proposal.ln_density(self.draws) + ln_count)
        self._ln_proposed = np.concatenate([self._ln_proposed, logsumexp(ln_fresh, axis=0)])
        self._proposals.append((ln_count, proposal))
        self.draws = np.vstack([self.draws, fresh])
        self.ln_post = np.concatenate([self.ln_post, ln_post])
        self.ln_prior = np.concatenate([self.ln_prior, _ln_standard_normal(fresh)])
        return ln_post - ln_own

    @property
    def ln_like(self) -> np.ndarray:
        """Log likelihoods (N,)."""
        return self.ln_post - self.ln_prior

    def ln_weights(self) -> np.ndarray:
        """Log weights (N,) against the mean proposal (Cornuet et al. 2012)."""
        return self.ln_post - self._ln_proposed


def _ln_standard_normal(z: np.ndarray) -> np.ndarray:
    """Log density (N,) of the prior N(0, I) at points (N, D)."""
    return -0.5 * np.einsum("nd,nd->n", z, z) - 0.5 * z.shape[1] * np.log(2 * np.pi)


def _relative(ln_weights: np.ndarray) -> np.ndarray:
    """Weights (N,) scaled to a largest one of 1."""
    return np.exp(ln_weights - ln_weights.max())


def _resample_walkers(
    points: np.ndarray, weights: np.ndarray, n_walkers: int, rng: np.random.Generator
) -> np.ndarray:
    """Positions (W, D) resampled from weighted points; a hair's breadth parts repeated ones.

    The moves step along differences of walkers and fail on two at the same place.
    """
    starts = points[systematic_resample(weights, n_walkers, rng)]
    return starts + 1e-6 * rng.standard_normal(starts.shape)


class _Strata:
    """Umbrella over strata of one coordinate: a bias that keeps walkers in each of them.

    A region such as a clear deck can hold a tenth of the mass in a thin corner, which a hundred walkers lose by
    chance and never find again. The bias lifts each stratum to about equal occupation, up to a limit, while the
    ensemble explores (umbrella sampling: Torrie & Valleau 1977, J. Comput. Phys. 23, 187). The evidence never
    uses it.
    """

    def __init__(self, dim: int | None):
        self._dim = dim
        count = 1 if dim is None else _STRATA
        self._edges = ndtri(np.arange(1, count) / count)
        self.ln_mass = np.zeros(count)

    def index(self, z: np.ndarray) -> np.ndarray:
        """Stratum (N,) of points (N, D)."""
        if self._dim is None:
            return np.zeros(len(z), dtype=int)
        return np.searchsorted(self._edges, z[:, self._dim])

    def ln_bias(self, z: np.ndarray) -> np.ndarray:
        """Log bias (N,) of points (N, D)."""
        return -np.maximum(self.ln_mass, self.ln_mass.max() - _LN_UMBRELLA)[self.index(z)]

    def shares(self, z: np.ndarray, ln_weights: np.ndarray) -> np.ndarray:
        """Weights (N,) of points, each stratum's scaled to the same total, up to the limit of the bias."""
        index = self.index(z)
        shares = np.zeros(len(z))
        for s in np.unique(index):
            inside = index == s
            lifted = self.ln_mass[s] - max(self.ln_mass[s], self.ln_mass.max() - _LN_UMBRELLA)
            top = ln_weights[inside].max()
            if np.isfinite(top):
                weights = np.exp(ln_weights[inside] - top)
                shares[inside] = weights / weights.sum() * np.exp(lifted)
        return shares

    def reweigh(self, z: np.ndarray, ln_weights: np.ndarray) -> None:
        """Update the masses by the mean weight of the points in each stratum."""
        index = self.index(z)
        change = np.full(len(self.ln_mass), -np.inf)
        for s in np.unique(index):
            inside = index == s
            change[s] = logsumexp(ln_weights[inside]) - np.log(inside.sum())
        # A stratum without points, or with no likelihood at all, falls as fast as the slowest of the others.
        change[np.isneginf(change)] = change[np.isfinite(change)].min()
        self.ln_mass += change - change.max()
        self.ln_mass -= self.ln_mass.max()

    def rebalance(self, z: np.ndarray) -> None:
        """Update the masses by the occupation that the bias led to."""
        count = len(self.ln_mass)
        occupation = np.bincount(self.index(z), minlength=count) / len(z)
        # The offset keeps an empty stratum from a runaway bias.
        self.ln_mass += np.log((occupation + 0.02) / (1 / count + 0.02))
        self.ln_mass -= self.ln_mass.max()


def _explore(
    pool: _Pool,
    strata: _Strata,
    budget: Budget,
    sequence: np.random.SeedSequence,
    rng: np.random.Generator,
    hook: ChainHook | None,
) -> tuple[np.ndarray, np.ndarray]:
    """Cool an ensemble from the prior to the posterior, then burn it in, all under the umbrella of the strata.

    The power of the likelihood rises by steps that keep half of the walkers effective; each step resamples
    them and runs a short chain, whose moves come from a mixture fitted to the step before (sequential Monte
    Carlo: Del Moral, Doucet & Jasra 2006, J. R. Stat. Soc. B 68, 411). Walkers sent straight to power 1 would
    keep each region in proportion to its basin, not to its mass.

    Returns
    -------
    points : np.ndarray
        Shape (N, D), later half of the last chain, at power 1.
    ln_post : np.ndarray
        Shape (N,), without the bias.
    """
    target = pool.target
    pool.add(standard_normal_mixture(target.n_dim), budget.pool, rng)
    if not np.any(np.isfinite(pool.ln_like)):
        raise EvidenceError(
            f"The likelihood is zero at all {budget.pool} draws from the prior: "
            "check the priors and the model."
        )
    points, ln_like, power, goal = pool.draws, pool.ln_like, 0.0, min(budget.walkers, budget.pool // 4)
    guide = None
    for stage in range(_MAX_STAGES):
        rise = tempering_step(partial(strata.shares, points), ln_like, 1 - power, goal)
        # The last stage goes all the way: importance weights correct what it misses.
        rise = 1 - power if power + rise > 0.999 or stage == _MAX_STAGES - 1 else rise
        power = 1.0 if rise == 1 - power else power + rise
        strata.reweigh(points, rise * ln_like)
        shares = strata.shares(points, rise * ln_like)
        walkers = _resample_walkers(points, shares, budget.walkers, rng)
        if guide is None:
            guide = _fit_guide(points, shares, rng)
        if power == 1.0:
            break
        chain = _segment(target, strata, power, walkers, guide, budget.stage_steps, sequence, (0, stage), rng)
        later = chain.positions[budget.stage_steps // 2 :].reshape(-1, target.n_dim)
        guide = _fit_guide(later, np.ones(len(later)), rng)
        points, goal = chain.positions[-1], budget.walkers // 2
        ln_like = (chain.ln_prob[-1] - strata.ln_bias(points) - _ln_standard_normal(points)) / power
    return _burn_in(target, strata, walkers, guide, budget, sequence, rng, hook)


def _burn_in(
    target: _Target,
    strata: _Strata,
    walkers: np.ndarray,
    guide: Mixture,
    budget: Budget,
    sequence: np.random.SeedSequence,
    rng: np.random.Generator,
    hook: ChainHook | None,
) -> tuple[np.ndarray, np.ndarray]:
    """Chain at power 1 in segments, each guided by a fit to the ones before; its later half and ln posterior."""
    positions, ln_prob = [], []
    for part in range(_BURN_SEGMENTS):
        n_steps = max(2, budget.burn_steps // _BURN_SEGMENTS)
        chain = _segment(target, strata, 1.0, walkers, guide, n_steps, sequence, (1, part), rng)
        flat = chain.positions.reshape(-1, target.n_dim)
        positions.append(chain.positions)
        ln_prob.append(chain.ln_prob - strata.ln_bias(flat).reshape(chain.ln_prob.shape))
        walkers = chain.positions[-1]
        if part < _BURN_SEGMENTS - 1:
            strata.rebalance(flat)
            recent = np.concatenate(positions[part // 2 :]).reshape(-1, target.n_dim)
            guide = _fit_guide(recent, np.ones(len(recent)), rng)
    chain = sampling.EnsembleChain(np.concatenate(positions), np.concatenate(ln_prob), chain.acceptance)
    seen, ln_seen = _hooked(hook, "burn-in", chain, target)
    later = slice(len(seen) // 2, None)
    return seen[later].reshape(-1, target.n_dim), ln_seen[later].reshape(-1)


def _segment(
    target: _Target,
    strata: _Strata,
    power: float,
    walkers: np.ndarray,
    guide: Mixture,
    n_steps: int,
    sequence: np.random.SeedSequence,
    path: tuple[int, ...],
    rng: np.random.Generator,
) -> sampling.EnsembleChain:
    """One short chain at one power, with moves from a mixture."""
    moves = sampling.guided_moves(guide, len(walkers), n_steps, rng)
    child = sampling.child_sequence(sequence, *path)
    return sampling.run_ensemble(partial(_tempered, target, strata, power), walkers, n_steps, child, moves)


def _tempered(target: _Target, strata: _Strata, power: float, z: np.ndarray) -> np.ndarray:
    """Log of prior times L^power times the umbrella's bias (N,) at points (N, D)."""
    ln_prior = _ln_standard_normal(z)
    return ln_prior + power * (target.ln_posterior(z) - ln_prior) + strata.ln_bias(z)


def _fit_guide(draws: np.ndarray, shares: np.ndarray, rng: np.random.Generator) -> Mixture:
    """Mixture that guides the moves of a chain, fitted to draws (N, D) with weights (N,)."""
    used = np.flatnonzero(shares > 1e-4 * shares.max())
    used = rng.permutation(used)[: _FIT_DRAWS // 2]
    core = choose_mixture(draws[used], shares[used], rng, sizes=(1, 2, 4, 8), dof=5.0, thin=CHAIN_THIN)
    return _with_safety(core.widened(1.2), None, prior_share=0.1, peak_share=0.0)


def tempering_step(
    shares: Callable[[np.ndarray], np.ndarray], ln_like: np.ndarray, limit: float, size: float
) -> float:
    """Largest rise of the power of the likelihood that keeps a given effective number of points.

    Parameters
    ----------
    shares : callable
        Maps log weights (N,) to weights (N,).
    ln_like : np.ndarray
        Shape (N,), log likelihoods, some finite.
    limit : float
        Largest rise allowed.
    size : float
        Wanted effective number of points.

    Returns
    -------
    float
        In (0, limit].
    """

    def reached(rise: float) -> bool:
        return effective_size(shares(rise * ln_like)) >= size

    if reached(limit):
        return limit
    low, high = 0.0, limit
    # Forty halvings resolve 1e-12, enough for |ln L| of 1e6 and more.
    for _ in range(40):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if reached(middle) else (low, middle)
    return high


def _hooked(
    hook: ChainHook | None, stage: str, chain: sampling.EnsembleChain, target: _Target
) -> tuple[np.ndarray, np.ndarray]:
    """Positions (S, W, D) and log posterior (S, W) of a chain after the caller's hook has seen it."""
    replaced = None if hook is None else hook(stage, chain.positions)
    if replaced is None:
        return chain.positions, chain.ln_prob
    ln_prob = target.ln_posterior(replaced.reshape(-1, target.n_dim))
    return replaced, ln_prob.reshape(replaced.shape[:2])


# ---------------------------------------------------------------------------------------------------------
# Stage 2: local optima


def _find_peaks(
    target: _Target,
    explored: np.ndarray,
    ln_explored: np.ndarray,
    stratum_dim: int | None,
    starts_z: np.ndarray | None,
    n_steps: int,
) -> Mixture | None:
    """Mixture of Gaussian approximations at local optima, or None when no optimisation is asked for."""
    if n_steps == 0:
        return None
    dim = target.n_dim
    lower, upper = np.full((1, dim), -np.inf), np.full((1, dim), np.inf)
    starts = explored[np.argmax(ln_explored)][None]
    if stratum_dim is not None:
        edges = ndtri(np.linspace(0, 1, _STRATA + 1))
        stratum = np.searchsorted(edges[1:-1], explored[:, stratum_dim])
        for s in range(_STRATA):
            inside = np.flatnonzero(stratum == s)
            if len(inside):
                start = explored[inside[np.argmax(ln_explored[inside])]]
            else:
                # Nobody survived there: move the best point over, and let the climb find out why.
                start = starts[0].copy()
                start[stratum_dim] = ndtri((s + 0.5) / _STRATA)
            starts = np.vstack([starts, start])
            lower, upper = np.vstack([lower, lower[0]]), np.vstack([upper, upper[0]])
            lower[-1, stratum_dim], upper[-1, stratum_dim] = edges[s], edges[s + 1]
    if starts_z is not None and len(starts_z):
        extra = np.asarray(starts_z, dtype=float).reshape(-1, dim)
        starts = np.vstack([starts, extra])
        lower = np.vstack([lower, np.full_like(extra, -np.inf)])
        upper = np.vstack([upper, np.full_like(extra, np.inf)])
    near = ln_explored > ln_explored.max() - 3 * dim - 10
    scale = _local_scale(explored[near])
    tops, ln_tops = climb(target.ln_posterior, starts, scale, lower, upper, n_steps)
    covariances = local_covariances(target.ln_posterior, tops, ln_tops, scale)
    return _peak_mixture(tops, ln_tops, covariances)


def climb(
    ln_prob: Callable[[np.ndarray], np.ndarray],
    starts: np.ndarray,
    scale: np.ndarray,
    lower: np.ndarray,
    upper: np.ndarray,
    n_steps: int,
) -> tuple[np.ndarray, np.ndarray]:
    """Quasi-Newton ascent from several starts in step, so that the likelihood sees large batches.

    Parameters
    ----------
    ln_prob : callable
        Maps (N, D) to (N,).
    starts : np.ndarray
        Shape (K, D).
    scale : np.ndarray
        Shape (D, D), lower triangular; x = scale y makes the target about isotropic with unit width in y.
    lower, upper : np.ndarray
        Shape (K, D), limits that a point is pushed back to.
    n_steps : int
        Number of steps.

    Returns
    -------
    points : np.ndarray
        Shape (K, D).
    ln_top : np.ndarray
        Shape (K,).

    Notes
    -----
    BFGS update (Nocedal & Wright 2006, *Numerical Optimization*, eq. 6.17) with central differences of a
    twentieth of the posterior width: wide enough for likelihoods computed in single precision.
    """
    count, dim = starts.shape
    points = np.clip(starts, lower, upper)
    ln_top = ln_prob(points)
    inverse = np.broadcast_to(np.eye(dim), (count, dim, dim)).copy()
    gradient = _gradient(ln_prob, points, scale)
    lengths = np.array([1.0, 0.4, 0.15, 0.04, 2.5])
    for _ in range(n_steps):
        direction = np.einsum("kij,kj->ki", inverse, gradient)
        # Nobody needs steps of many widths, and a wild first gradient would propose them.
        direction /= np.maximum(1.0, np.linalg.norm(direction, axis=1) / 5.0)[:, None]
        moves = (direction @ scale.T)[:, None, :] * lengths[:, None]
        trials = np.clip(points[:, None, :] + moves, lower[:, None, :], upper[:, None, :])
        ln_trials = ln_prob(trials.reshape(-1, dim)).reshape(count, -1)
        choice = np.argmax(ln_trials, axis=1)
        ln_new = ln_trials[np.arange(count), choice]
        better = ln_new > ln_top
        if not np.any(better):
            if np.all(inverse == np.eye(dim)):
                break
            inverse[:] = np.eye(dim)
            continue
        new_points = np.where(better[:, None], trials[np.arange(count), choice], points)
        new_gradient = _gradient(ln_prob, new_points, scale)
        step = np.linalg.solve(scale, (new_points - points).T).T
        _update_inverse(inverse, step, gradient - new_gradient, better)
        finished = np.max(np.where(better, ln_new - ln_top, 0.0)) < 1e-3
        points, gradient = new_points, new_gradient
        ln_top = np.where(better, ln_new, ln_top)
        if finished:
            break
    return points, ln_top


def _gradient(
    ln_prob: Callable[[np.ndarray], np.ndarray], points: np.ndarray, scale: np.ndarray
) -> np.ndarray:
    """Central-difference gradient (K, D) in the coordinates y of x = scale y."""
    count, dim = points.shape
    step = 0.05
    shifts = step * np.vstack([scale.T, -scale.T])
    values = ln_prob((points[:, None, :] + shifts).reshape(-1, dim)).reshape(count, 2, dim)
    with np.errstate(invalid="ignore"):
        slope = (values[:, 0] - values[:, 1]) / (2 * step)
    return np.where(np.isfinite(slope), slope, 0.0)


def _update_inverse(inverse: np.ndarray, step: np.ndarray, change: np.ndarray, better: np.ndarray) -> None:
    """BFGS update of inverse curvatures (K, D, D) in place; starts that did not move begin afresh."""
    identity = np.eye(step.shape[1])
    for k in range(len(step)):
        curvature = float(step[k] @ change[k])
        if not better[k]:
            inverse[k] = identity
        elif curvature > 1e-10:
            left = identity - np.outer(step[k], change[k]) / curvature
            inverse[k] = left @ inverse[k] @ left.T + np.outer(step[k], step[k]) / curvature


def local_covariances(
    ln_prob: Callable[[np.ndarray], np.ndarray], points: np.ndarray, ln_points: np.ndarray, scale: np.ndarray
) -> np.ndarray:
    """Covariances of Gaussian approximations from second differences.

    Parameters
    ----------
    ln_prob : callable
        Maps (N, D) to (N,).
    points : np.ndarray
        Shape (K, D), local optima.
    ln_points : np.ndarray
        Shape (K,), log posterior there.
    scale : np.ndarray
        Shape (D, D), lower triangular; differences are 0.3 of its columns.

    Returns
    -------
    np.ndarray
        Shape (K, D, D). No direction is wider than the prior: eigenvalues of the precision are at least 1.
    """
    count, dim = points.shape
    step = 0.3
    first, second = np.triu_indices(dim)
    sides = step * scale.T
    plus, minus = sides[first] + sides[second], sides[first] - sides[second]
    shifts = np.concatenate([plus, -plus, minus, -minus])
    values = ln_prob((points[:, None, :] + shifts).reshape(-1, dim)).reshape(count, 4, -1)
    # A point beyond the support counts as far below: it makes the peak narrow there, as it should.
    values = np.maximum(values, ln_points[:, None, None] - 50.0)
    mixed = (values[:, 0] + values[:, 1] - values[:, 2] - values[:, 3]) / (4 * step**2)
    precision_y = np.empty((count, dim, dim))
    precision_y[:, first, second] = -mixed
    precision_y[:, second, first] = -mixed
    unscale = np.linalg.inv(scale)
    precision = np.einsum("ai,kab,bj->kij", unscale, precision_y, unscale)
    eigenvalues, vectors = np.linalg.eigh(precision)
    return np.einsum("kij,kj,klj->kil", vectors, 1 / np.maximum(eigenvalues, 1.0), vectors)


def _peak_mixture(tops: np.ndarray, ln_tops: np.ndarray, covariances: np.ndarray) -> Mixture | None:
    """Mixture of the peaks, weighted by the square root of their Laplace evidence, hopeless ones left out."""
    ln_mass = ln_tops + 0.5 * np.linalg.slogdet(covariances)[1]
    kept = ln_mass > ln_mass.max() - 8
    weights = np.exp(0.5 * (ln_mass - ln_mass.max()))
    return Mixture(weights[kept], tops[kept], covariances[kept], np.full(int(kept.sum()), 5.0))


# ---------------------------------------------------------------------------------------------------------
# Stage 3: adaptation


def _adapt(
    pool: _Pool,
    explored: np.ndarray,
    ln_explored: np.ndarray,
    peaks: Mixture | None,
    budget: Budget,
    rng: np.random.Generator,
) -> tuple[Mixture, Mixture | None]:
    """Population Monte Carlo (Cappe et al. 2008): refit the proposal to weighted draws, and draw again.

    The pool keeps the draws; the last proposal and the local approximations are returned. Weights are
    truncated for the fits.
    """
    # Walkers stuck far below the rest would only waste components.
    near = np.flatnonzero(ln_explored > ln_explored.max() - 3 * pool.target.n_dim - 10)
    near = rng.permutation(near)[:_FIT_DRAWS]
    chain_draws = explored[near]
    scale = _local_scale(chain_draws)
    core = None
    for number in range(budget.rounds):
        draws, shares = _fit_set(pool, chain_draws, rng)
        # The number of components is looked for at first and once more, when the pool has matured.
        if core is None or number == budget.rounds // 2:
            core = choose_mixture(draws, shares, rng, sizes=_SIZES, dof=3.0, thin=CHAIN_THIN)
        else:
            core, _ = fit_mixture(draws, shares, core, max_iterations=10)
        # Early proposals are wide: a draw too many costs little, a region without draws is lost.
        proposal = _with_safety(core.widened(1.5), peaks, prior_share=0.1, peak_share=0.2)
        own = importance_estimate(pool.add(proposal, budget.round_draws, rng))
        if own[2] > 0.3 * budget.round_draws or number == budget.rounds - 1:
            break
        if budget.outliers:
            found = _cover_outliers(pool, scale, budget.outliers)
            peaks = found if peaks is None else combine_mixtures([(1.0, peaks), (1.0, found)])
    return proposal, peaks


def _cover_outliers(pool: _Pool, scale: np.ndarray, count: int) -> Mixture:
    """Local approximations at the heaviest draws of the pool: regions that the proposals so far miss.

    The idea of incremental mixture importance sampling (Raftery & Bao 2010, Biometrics 66, 1162), with curvature
    in place of neighbours.
    """
    heavy = np.argsort(-pool.ln_weights(), kind="stable")
    white = np.linalg.solve(scale, pool.draws[heavy[:200]].T).T
    chosen: list[int] = []
    for i in range(len(white)):
        # One representative of each group of draws within one width or so.
        if all(np.sum((white[i] - white[j]) ** 2) > len(scale) for j in chosen):
            chosen.append(i)
        if len(chosen) == count:
            break
    starts = pool.draws[heavy[chosen]]
    covariances = local_covariances(pool.target.ln_posterior, starts, pool.ln_post[heavy[chosen]], scale)
    return Mixture(np.ones(len(starts)), starts, covariances, np.full(len(starts), 5.0))


def _local_scale(draws: np.ndarray) -> np.ndarray:
    """Lower triangular factor (D, D) of the covariance of draws (N, D), or the prior's if they are too few."""
    dim = draws.shape[1]
    spread = np.cov(draws.T).reshape(dim, dim) if len(draws) > 5 * dim else np.eye(dim)
    return np.linalg.cholesky(spread + 1e-8 * np.eye(dim))


def _fit_set(pool: _Pool, chain_draws: np.ndarray, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Draws (N, D) and shares (N,) for a fit: a chain, and the pool with the say of its effective size."""
    weights = _relative(truncate(pool.ln_weights()))
    trust = min(effective_size(weights) * CHAIN_THIN, float(_FIT_DRAWS))
    # Thinned in proportion to the root of the weight: light draws still mark the flanks, heavy ones are not lost.
    root = np.sqrt(weights)
    kept, copies = np.unique(systematic_resample(root, _FIT_DRAWS, rng), return_counts=True)
    shares = root[kept] * copies
    shares *= trust / shares.sum()
    return np.vstack([chain_draws, pool.draws[kept]]), np.concatenate([np.ones(len(chain_draws)), shares])


def _with_safety(core: Mixture, peaks: Mixture | None, prior_share: float, peak_share: float) -> Mixture:
    """Mixture with a share of the prior (defensive, Hesterberg 1995) and of the local approximations."""
    parts = [(prior_share, standard_normal_mixture(core.n_dim))]
    if peaks is not None:
        parts.append((peak_share, peaks.widened(1.5)))
    parts.append((1 - sum(share for share, _ in parts), core))
    return combine_mixtures(parts)


def truncate(ln_weights: np.ndarray) -> np.ndarray:
    """Log weights cut at the mean weight times sqrt(N) (Ionides 2008, J. Comput. Graph. Stat. 17, 295)."""
    limit = logsumexp(ln_weights) - 0.5 * np.log(len(ln_weights))
    return np.minimum(ln_weights, limit)


# ---------------------------------------------------------------------------------------------------------
# Stages 4 and 5: production chain, frozen mixture, estimates


def _produce(
    pool: _Pool,
    wide: Mixture,
    budget: Budget,
    sequence: np.random.SeedSequence,
    rng: np.random.Generator,
    hook: ChainHook | None,
) -> sampling.EnsembleChain:
    """Production chain, started from the weighted draws."""
    start = _resample_walkers(pool.draws, _relative(truncate(pool.ln_weights())), budget.walkers, rng)
    chain = sampling.run_ensemble(
        pool.target.ln_posterior,
        start,
        budget.production_steps,
        sequence,
        sampling.guided_moves(wide, budget.walkers, budget.production_steps, rng),
    )
    positions, ln_prob = _hooked(hook, "production", chain, pool.target)
    return replace(chain, positions=positions, ln_prob=ln_prob)


def _final_mixture(
    pool: _Pool, first_half: np.ndarray, peaks: Mixture | None, rng: np.random.Generator
) -> Mixture:
    """Proposal of the estimates, from the first half of the chain (S, W, D) and the weighted draws."""
    chain_draws = rng.permutation(first_half.reshape(-1, pool.target.n_dim))[:_FIT_DRAWS]
    draws, shares = _fit_set(pool, chain_draws, rng)
    core = choose_mixture(draws, shares, rng, sizes=(*_SIZES, 16), dof=5.0, thin=CHAIN_THIN)
    return _with_safety(core, peaks, prior_share=0.05, peak_share=0.05)


def _importance_draws(
    target: _Target, frozen: Mixture, budget: Budget, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Draws (N, D) from the frozen mixture and log weights (N,), in batches until the error is reached."""
    draws, ln_weights = [], []
    for _ in range(budget.final_batches):
        batch = frozen.draw(budget.final_draws, rng)
        draws.append(batch)
        ln_weights.append(target.ln_posterior(batch) - frozen.ln_density(batch))
        _, own_err, ess = importance_estimate(np.concatenate(ln_weights))
        if own_err <= budget.target_err and ess >= MIN_EFFECTIVE_SIZE:
            break
    return np.concatenate(draws), np.concatenate(ln_weights)


def importance_estimate(ln_weights: np.ndarray) -> tuple[float, float, float]:
    """Evidence from log importance weights.

    Parameters
    ----------
    ln_weights : np.ndarray
        Shape (N,), ln L + ln prior - ln q of draws from q.

    Returns
    -------
    ln_evidence : float
        Log of the mean weight.
    ln_evidence_err : float
        sqrt(1/ess - 1/N).
    ess : float
        Effective number of draws (Kong, Liu & Wong 1994).
    """
    size = len(ln_weights)
    total = float(logsumexp(ln_weights))
    if not np.isfinite(total):
        return -np.inf, np.inf, 0.0
    ess = effective_size(np.exp(ln_weights - ln_weights.max()))
    return total - float(np.log(size)), float(np.sqrt(max(1 / ess - 1 / size, 0.0))), ess


def bridge_estimate(ln_ratio_proposal: np.ndarray, ln_ratio_chain: np.ndarray) -> tuple[float, float]:
    """Evidence by the optimal bridge between proposal draws and a chain.

    Parameters
    ----------
    ln_ratio_proposal : np.ndarray
        Shape (N,), ln posterior (not normalised) minus ln q at draws from q.
    ln_ratio_chain : np.ndarray
        Shape (S, W), the same at steps of an ensemble chain that q was not fitted to.

    Returns
    -------
    ln_evidence : float
    ln_evidence_err : float
        With the autocorrelation of the chain; blind to what the chain missed.

    Notes
    -----
    Meng & Wong 1996, Stat. Sinica 6, 831, eq. 4.1, iterated with s = 1/2; error: Fruehwirth-Schnatter 2004,
    Econom. J. 7, 143.
    """
    n_proposal, n_chain = ln_ratio_proposal.size, ln_ratio_chain.size
    # Equal say for both sets. Weights by size would be a little more precise, but where the proposal draws
    # outnumber the chain's effective ones they turn the bridge into importance sampling, and a check no more.
    ln_s_chain = ln_s_proposal = np.log(0.5)
    ln_z = float(np.median(ln_ratio_chain))
    for _ in range(500):
        ln_top = ln_ratio_proposal - np.logaddexp(ln_s_chain + ln_ratio_proposal, ln_s_proposal + ln_z)
        ln_bottom = -np.logaddexp(ln_s_chain + ln_ratio_chain, ln_s_proposal + ln_z)
        new = float(logsumexp(ln_top) - np.log(n_proposal) - logsumexp(ln_bottom) + np.log(n_chain))
        done = abs(new - ln_z) < 1e-7
        ln_z = new
        if done:
            break
    top = np.exp(ln_top - ln_top.max())
    bottom = np.exp(ln_bottom - ln_bottom.max())
    variance = np.var(top) / np.mean(top) ** 2 / n_proposal
    variance += np.var(bottom) / np.mean(bottom) ** 2 / n_chain * sampling.autocorrelation_steps(bottom)
    return ln_z, float(np.sqrt(variance))


def _bridge_with_chain(
    frozen: Mixture, ln_weights: np.ndarray, chain: sampling.EnsembleChain, half: int
) -> tuple[float, float]:
    """Bridge between the frozen mixture and the second half of the chain, with a gap between the halves."""
    gap = max(1, (len(chain.positions) - half) // 10)
    later = chain.positions[half + gap :]
    ln_q = frozen.ln_density(later.reshape(-1, frozen.n_dim)).reshape(later.shape[:2])
    return bridge_estimate(ln_weights, chain.ln_prob[half + gap :] - ln_q)


# ---------------------------------------------------------------------------------------------------------
# Judgement


def error_floor(n_dim: int) -> float:
    """Smallest error of ln Z that is believed, from measured deficits: 0.02 for D <= 4, 0.1 for D >= 8."""
    return float(np.interp(n_dim, [4, 8], [0.02, 0.1]))


def _run_flags(run: EvidenceRun, n_dim: int) -> tuple[str, ...]:
    """Sentences on what is doubtful about a run."""
    flags = []
    if run.ess < MIN_EFFECTIVE_SIZE:
        flags.append(f"importance weights: effective size {run.ess:.0f}, below {MIN_EFFECTIVE_SIZE:.0f}")
    if run.max_weight > _MAX_WEIGHT_SHARE:
        flags.append(
            f"importance weights: one draw carries {100 * run.max_weight:.1f} % of the weight, "
            f"more than {100 * _MAX_WEIGHT_SHARE:.0f} %"
        )
    if run.pareto_k > _PARETO_LIMIT and run.ess < 3 * MIN_EFFECTIVE_SIZE:
        flags.append(
            f"importance weights: tail shape {run.pareto_k:.2f}, above {_PARETO_LIMIT}, "
            f"with an effective size of only {run.ess:.0f}"
        )
    limit = 3 * np.hypot(run.ln_evidence_err, run.bridge_err) + 0.02 + error_floor(n_dim)
    difference = abs(run.ln_evidence - run.ln_evidence_bridge)
    # "not <=" so that a NaN or infinite estimate is flagged too.
    if not difference <= limit:
        flags.append(
            f"importance sampling ({run.ln_evidence:.2f}) and bridge sampling ({run.ln_evidence_bridge:.2f}) "
            f"differ by {difference:.2f} in ln Z, more than {limit:.2f}"
        )
    return tuple(flags)


def combine_runs(runs: Sequence[EvidenceRun], n_dim: int) -> CombinedEvidence:
    """Evidence and posterior from independent seeds of one model.

    Parameters
    ----------
    runs : sequence of EvidenceRun
        One or more, normally two.
    n_dim : int
        Number of dimensions D.

    Returns
    -------
    CombinedEvidence
        ln Z is the mean with weights 1/(own error^2 + floor^2): of two good runs almost the plain mean, while
        a run with exploded weights hardly counts. Its error is the largest of the combined own errors, half
        the range of the seeds and the floor (`error_floor`), which stays as seeds share their blind spots.

    Raises
    ------
    ValueError
        If there is no run.
    """
    if not runs:
        raise ValueError("No runs to combine, expected at least one.")
    floor = error_floor(n_dim)
    ln_z = np.array([run.ln_evidence for run in runs])
    own = np.array([run.ln_evidence_err for run in runs])
    weights = 1 / (own**2 + floor**2)
    weights = weights / weights.sum() if weights.sum() > 0 else np.full(len(runs), 1 / len(runs))
    usable = weights > 0
    mean = float(weights[usable] @ ln_z[usable])
    own_combined = float(np.sqrt(np.sum((weights[usable] * own[usable]) ** 2)))
    half_range = 0.5 * float(np.ptp(ln_z)) if np.all(np.isfinite(ln_z)) else np.inf
    error = max(own_combined, half_range, floor)

    flags = [f"seed {i + 1}: {flag}" for i, run in enumerate(runs) for flag in run.flags]
    if len(runs) == 1:
        flags.append("one seed only: the scatter between seeds is unknown")
    limit = 3 * float(np.sqrt(np.sum(own**2))) + 2 * floor
    if not 2 * half_range <= limit:
        flags.append(f"seeds differ by {2 * half_range:.2f} in ln Z, more than {limit:.2f}")
    serious = [flag for flag in flags if not flag.startswith("one seed only")]
    best = max(runs, key=lambda run: run.best_ln_likelihood)
    return CombinedEvidence(
        ln_evidence=mean,
        ln_evidence_err=error,
        draws_z=_pool_draws(runs),
        best_z=best.best_z,
        best_ln_likelihood=best.best_ln_likelihood,
        sampling={
            "steps": runs[0].steps,
            "walkers": runs[0].walkers,
            "autocorr_steps": max(run.autocorr_steps for run in runs),
            "ess": min(run.ess for run in runs),
            "likelihood_calls": sum(run.likelihood_calls for run in runs),
            "flags": flags,
            "converged": not serious,
        },
    )


def _pool_draws(runs: Sequence[EvidenceRun]) -> np.ndarray:
    """Draws of all runs (S, D), each run's share in proportion to its effective size, S that of one run."""
    sizes = np.array([max(run.ess, 1e-3) for run in runs])
    total = len(runs[0].draws_z)
    counts = np.floor(sizes / sizes.sum() * total).astype(int)
    counts[int(np.argmax(sizes))] += total - counts.sum()
    # The draws of a run are in random order, so its first ones are a fair sample.
    return np.vstack([run.draws_z[:count] for run, count in zip(runs, counts, strict=True)])
