"""The chains of an evidence: an ensemble cooled from the prior to the posterior, burnt in, and run for production."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partial

import numpy as np
from scipy.special import logsumexp, ndtri

from transit import sampling
from transit.budget import Budget
from transit.mixtures import (
    Mixture,
    choose_mixture,
    combine_mixtures,
    effective_size,
    standard_normal_mixture,
)
from transit.pool import (
    CHAIN_THIN,
    FIT_DRAWS,
    EvidenceError,
    Pool,
    Target,
    ln_standard_normal,
    relative_weights,
    resample_walkers,
    truncate,
)

ChainHook = Callable[[str, np.ndarray], np.ndarray | None]

# Number of equal-probability strata of the stratum coordinate.
STRATA = 5
# The umbrella lifts strata by up to e^4. Tried 0, 3 and 8: without it a thin region with a quarter of the mass
# was lost unnoticed in three of three seeds; with 8 a small budget was spread too thinly.
_LN_UMBRELLA = 4.0
# Temperatures between prior and posterior; a peak of ln L = 10 000 takes about 20.
_MAX_STAGES = 40
_BURN_SEGMENTS = 5


class _Strata:
    """Umbrella over strata of one coordinate: a bias that keeps walkers in each of them.

    A region such as a clear deck can hold a tenth of the mass in a thin corner, which a hundred walkers lose by
    chance and never find again. The bias lifts each stratum to about equal occupation, up to a limit, while the
    ensemble explores (umbrella sampling: Torrie & Valleau 1977, J. Comput. Phys. 23, 187). The evidence never
    uses it.
    """

    def __init__(self, dim: int | None):
        self._dim = dim
        count = 1 if dim is None else STRATA
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


def explore(
    pool: Pool,
    stratum_dim: int | None,
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

    Parameters
    ----------
    pool : Pool
        Gains the draws from the prior.
    stratum_dim : int or None
        Coordinate whose prior is cut into strata.
    budget : Budget
    sequence : np.random.SeedSequence
        Seed of the chains.
    rng : np.random.Generator
        For everything else.
    hook : callable or None
        See `transit.evidence.estimate_evidence`.

    Returns
    -------
    points : np.ndarray
        Shape (N, D), later half of the last chain, at power 1.
    ln_post : np.ndarray
        Shape (N,), without the bias.

    Raises
    ------
    EvidenceError
        If the likelihood is zero at every draw from the prior.
    """
    target = pool.target
    strata = _Strata(stratum_dim)
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
        walkers = resample_walkers(points, shares, budget.walkers, rng)
        if guide is None:
            guide = _fit_guide(points, shares, rng)
        if power == 1.0:
            break
        chain = _segment(target, strata, power, walkers, guide, budget.stage_steps, sequence, (0, stage), rng)
        later = chain.positions[budget.stage_steps // 2 :].reshape(-1, target.n_dim)
        guide = _fit_guide(later, np.ones(len(later)), rng)
        points, goal = chain.positions[-1], budget.walkers // 2
        ln_like = (chain.ln_prob[-1] - strata.ln_bias(points) - ln_standard_normal(points)) / power
    return _burn_in(target, strata, walkers, guide, budget, sequence, rng, hook)


def _burn_in(
    target: Target,
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
    target: Target,
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


def _tempered(target: Target, strata: _Strata, power: float, z: np.ndarray) -> np.ndarray:
    """Log of prior times L^power times the umbrella's bias (N,) at points (N, D)."""
    ln_prior = ln_standard_normal(z)
    return ln_prior + power * (target.ln_posterior(z) - ln_prior) + strata.ln_bias(z)


def _fit_guide(draws: np.ndarray, shares: np.ndarray, rng: np.random.Generator) -> Mixture:
    """Mixture that guides the moves of a chain, fitted to draws (N, D) with weights (N,)."""
    used = np.flatnonzero(shares > 1e-4 * shares.max())
    used = rng.permutation(used)[: FIT_DRAWS // 2]
    core = choose_mixture(draws[used], shares[used], rng, sizes=(1, 2, 4, 8), dof=5.0, thin=CHAIN_THIN)
    return combine_mixtures([(0.1, standard_normal_mixture(core.n_dim)), (0.9, core.widened(1.2))])


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


def produce(
    pool: Pool,
    wide: Mixture,
    budget: Budget,
    sequence: np.random.SeedSequence,
    rng: np.random.Generator,
    hook: ChainHook | None,
) -> sampling.EnsembleChain:
    """Production chain, started from the weighted draws.

    Parameters
    ----------
    pool : Pool
    wide : Mixture
        Guides the moves.
    budget, sequence, rng, hook
        As for `explore`.

    Returns
    -------
    sampling.EnsembleChain
    """
    start = resample_walkers(pool.draws, relative_weights(truncate(pool.ln_weights())), budget.walkers, rng)
    chain = sampling.run_ensemble(
        pool.target.ln_posterior,
        start,
        budget.production_steps,
        sequence,
        sampling.guided_moves(wide, budget.walkers, budget.production_steps, rng),
    )
    positions, ln_prob = _hooked(hook, "production", chain, pool.target)
    return replace(chain, positions=positions, ln_prob=ln_prob)


def _hooked(
    hook: ChainHook | None, stage: str, chain: sampling.EnsembleChain, target: Target
) -> tuple[np.ndarray, np.ndarray]:
    """Positions (S, W, D) and log posterior (S, W) of a chain after the caller's hook has seen it."""
    replaced = None if hook is None else hook(stage, chain.positions)
    if replaced is None:
        return chain.positions, chain.ln_prob
    ln_prob = target.ln_posterior(replaced.reshape(-1, target.n_dim))
    return replaced, ln_prob.reshape(replaced.shape[:2])
