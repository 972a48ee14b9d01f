"""Bayesian evidence of one model, from an ensemble chain and importance sampling with a frozen mixture.

All of it works in probit space, where the prior is N(0, I): no hard edges, and a parameter that the data do
not constrain is exactly Gaussian. The steps, of which `exploration` holds the chains and `peaks` the optima:

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

from dataclasses import replace

import numpy as np
from scipy.special import logsumexp

from transit import sampling
from transit.budget import Budget, SamplerSettings
from transit.combination import (
    MAX_WEIGHT_SHARE,
    MIN_EFFECTIVE_SIZE,
    CombinedEvidence,
    EvidenceRun,
    combine_runs,
    error_floor,
    run_flags,
)
from transit.exploration import ChainHook, explore, produce, tempering_step
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
from transit.peaks import climb, cover_outliers, find_peaks, local_covariances, local_scale
from transit.pool import (
    CHAIN_THIN,
    FIT_DRAWS,
    EvidenceError,
    LnLikelihood,
    Pool,
    Target,
    fit_set,
    truncate,
)

__all__ = [
    "CHAIN_THIN",
    "MIN_EFFECTIVE_SIZE",
    "Budget",
    "ChainHook",
    "CombinedEvidence",
    "EvidenceError",
    "EvidenceRun",
    "LnLikelihood",
    "SamplerSettings",
    "bridge_estimate",
    "climb",
    "combine_runs",
    "error_floor",
    "estimate_evidence",
    "importance_estimate",
    "local_covariances",
    "tempering_step",
    "truncate",
]

# Number of equally weighted posterior draws handed on.
_POSTERIOR_DRAWS = 2000
# Numbers of components to try.
_SIZES = (1, 2, 4, 7, 11)


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
    target = Target(ln_likelihood, n_dim)

    pool = Pool(target)
    explored, ln_explored = explore(pool, stratum_dim, budget, seeds[1], rng, chain_hook)
    peaks = find_peaks(target, explored, ln_explored, stratum_dim, starts_z, budget.climb_steps)
    wide, peaks = _adapt(pool, explored, ln_explored, peaks, budget, rng)
    chain = produce(pool, wide, budget, seeds[2], rng, chain_hook)
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
    return replace(run, flags=run_flags(run, n_dim))


def _adapt(
    pool: Pool,
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
    near = rng.permutation(near)[:FIT_DRAWS]
    chain_draws = explored[near]
    scale = local_scale(chain_draws)
    core = None
    for number in range(budget.rounds):
        draws, shares = fit_set(pool, chain_draws, rng)
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
            found = cover_outliers(pool, scale, budget.outliers)
            peaks = found if peaks is None else combine_mixtures([(1.0, peaks), (1.0, found)])
    return proposal, peaks


def _with_safety(core: Mixture, peaks: Mixture | None, prior_share: float, peak_share: float) -> Mixture:
    """Mixture with a share of the prior (defensive, Hesterberg 1995) and of the local approximations."""
    parts = [(prior_share, standard_normal_mixture(core.n_dim))]
    if peaks is not None:
        parts.append((peak_share, peaks.widened(1.5)))
    parts.append((1 - sum(share for share, _ in parts), core))
    return combine_mixtures(parts)


def _final_mixture(
    pool: Pool, first_half: np.ndarray, peaks: Mixture | None, rng: np.random.Generator
) -> Mixture:
    """Proposal of the estimates, from the first half of the chain (S, W, D) and the weighted draws."""
    chain_draws = rng.permutation(first_half.reshape(-1, pool.target.n_dim))[:FIT_DRAWS]
    draws, shares = fit_set(pool, chain_draws, rng)
    core = choose_mixture(draws, shares, rng, sizes=(*_SIZES, 16), dof=5.0, thin=CHAIN_THIN)
    return _with_safety(core, peaks, prior_share=0.05, peak_share=0.05)


def _importance_draws(
    target: Target, frozen: Mixture, budget: Budget, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Draws (N, D) from the frozen mixture and log weights (N,), in batches until the error is reached."""
    draws, ln_weights = [], []
    for _ in range(budget.final_batches):
        batch = frozen.draw(budget.final_draws, rng)
        draws.append(batch)
        ln_weights.append(target.ln_posterior(batch) - frozen.ln_density(batch))
        together = np.concatenate(ln_weights)
        ln_mean, own_err, ess = importance_estimate(together)
        heaviest = np.exp(together.max() - ln_mean) / len(together)
        if own_err <= budget.target_err and ess >= MIN_EFFECTIVE_SIZE and heaviest <= MAX_WEIGHT_SHARE:
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
