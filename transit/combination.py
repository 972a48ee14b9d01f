"""Records of one run and of several of an evidence, and the judgement on whether to believe them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

# An evidence rests on at least this effective number of weighted draws.
MIN_EFFECTIVE_SIZE = 300.0
# One draw that carries more than this share of the weight is a sign of a region that the mixture misses.
MAX_WEIGHT_SHARE = 0.02
_PARETO_LIMIT = 0.7


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


def error_floor(n_dim: int) -> float:
    """Smallest error of ln Z that is believed, from measured deficits: 0.02 for D <= 4, 0.1 for D >= 8."""
    return float(np.interp(n_dim, [4, 8], [0.02, 0.1]))


def run_flags(run: EvidenceRun, n_dim: int) -> tuple[str, ...]:
    """Sentences on what is doubtful about a run in D = `n_dim` dimensions; none when nothing is."""
    flags = []
    if run.ess < MIN_EFFECTIVE_SIZE:
        flags.append(f"importance weights: effective size {run.ess:.0f}, below {MIN_EFFECTIVE_SIZE:.0f}")
    if run.max_weight > MAX_WEIGHT_SHARE:
        flags.append(
            f"importance weights: one draw carries {100 * run.max_weight:.1f} % of the weight, "
            f"more than {100 * MAX_WEIGHT_SHARE:.0f} %"
        )
    if run.pareto_k > _PARETO_LIMIT and run.ess < 2 * MIN_EFFECTIVE_SIZE:
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
