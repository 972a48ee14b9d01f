"""Ensemble sampling with emcee: the only module that knows that package, its moves and its random state."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import emcee
import numpy as np

from transit.mixtures import Mixture

# Stands for -inf inside emcee, which would subtract one infinity from another where two points lie outside.
_FLOOR = -1e200


@dataclass(frozen=True, eq=False)
class EnsembleChain:
    """Positions of W walkers over S steps.

    Parameters
    ----------
    positions : np.ndarray
        Shape (S, W, D).
    ln_prob : np.ndarray
        Shape (S, W), log probability at each position.
    acceptance : float
        Mean share of accepted proposals.
    """

    positions: np.ndarray
    ln_prob: np.ndarray
    acceptance: float


def child_sequence(parent: np.random.SeedSequence, *path: int) -> np.random.SeedSequence:
    """Child of a seed sequence at a fixed place of its tree.

    Unlike `parent.spawn`, which counts its calls, this gives the same child each time, so that using one
    parent twice repeats the numbers.
    """
    return np.random.SeedSequence(
        parent.entropy, spawn_key=(*parent.spawn_key, *path), pool_size=parent.pool_size
    )


def sampler_state(sequence: np.random.SeedSequence) -> tuple:
    """State in the old numpy format, the only form of seed that emcee 3.1 takes without ignoring it."""
    return np.random.RandomState(np.random.MT19937(sequence)).get_state()


def guided_moves(
    guide: Mixture, n_walkers: int, n_steps: int, rng: np.random.Generator
) -> list[tuple[emcee.moves.Move, float]]:
    """Moves for a target that a mixture resembles, roughly at first.

    Parameters
    ----------
    guide : Mixture
        Approximation to the target; any that covers it keeps the chain exact.
    n_walkers, n_steps : int
        Size of the chain.
    rng : np.random.Generator
        Source of the independent proposals.

    Returns
    -------
    list of (Move, float)
        Block moves 0.45, independence 0.25, differential evolution 0.2 (ter Braak 2006), stretch 0.1 (Goodman
        & Weare 2010): on targets like ours the first two jump three to ten times further per call, and
        the last two work where the guide is poor.

    Notes
    -----
    Independence Metropolis-Hastings: Tierney 1994, Ann. Stat. 22, 1701. A block move replaces a random set of
    coordinates by a draw from the guide's conditional density, the same set for all walkers of a step; it is
    accepted far more often than a jump in all of them. In both, the factor is ln q(x) - ln q(x').
    """
    # Independence moves take a random quarter of the steps; more than ten standard deviations above that.
    bank_steps = int(0.25 * n_steps + 5 * np.sqrt(n_steps)) + 1
    bank = guide.draw(bank_steps * n_walkers, rng)
    # Drawn beforehand, their density is evaluated in one block.
    ln_bank = guide.ln_density(bank)
    used = 0

    def jump(coords: np.ndarray, _random: np.random.RandomState) -> tuple[np.ndarray, np.ndarray]:
        nonlocal used
        rows = slice(used, used + len(coords))
        used += len(coords)
        return bank[rows].copy(), guide.ln_density(coords) - ln_bank[rows]

    def replace_block(coords: np.ndarray, random: np.random.RandomState) -> tuple[np.ndarray, np.ndarray]:
        size = random.randint(1, guide.n_dim + 1)
        block = np.sort(random.permutation(guide.n_dim)[:size])
        proposed = guide.draw_block(coords, block, random)
        return proposed, guide.ln_density(coords) - guide.ln_density(proposed)

    return [
        (emcee.moves.MHMove(replace_block), 0.45),
        (emcee.moves.MHMove(jump), 0.25),
        (emcee.moves.DEMove(), 0.2),
        (emcee.moves.StretchMove(), 0.1),
    ]


def run_ensemble(
    ln_prob: Callable[[np.ndarray], np.ndarray],
    start: np.ndarray,
    n_steps: int,
    sequence: np.random.SeedSequence,
    moves: list[tuple[emcee.moves.Move, float]],
) -> EnsembleChain:
    """Run an ensemble sampler from given positions.

    Parameters
    ----------
    ln_prob : callable
        Maps (W, D) to (W,) log probabilities, finite or -inf.
    start : np.ndarray
        Shape (W, D), W even and at least 2 D.
    n_steps : int
        Number of steps S.
    sequence : np.random.SeedSequence
        Seed of this chain; the global random state is neither used nor changed.
    moves : list of (Move, float)
        Moves and their shares.

    Returns
    -------
    EnsembleChain
    """
    n_walkers, n_dim = start.shape

    def floored(z: np.ndarray) -> np.ndarray:
        return np.maximum(ln_prob(z), _FLOOR)

    sampler = emcee.EnsembleSampler(n_walkers, n_dim, floored, moves=moves, vectorize=True)
    sampler.random_state = sampler_state(sequence)
    # emcee refuses starts that are strongly correlated; narrow posteriors are just that, and the moves cope.
    sampler.run_mcmc(start.copy(), n_steps, skip_initial_state_check=True, progress=False)
    found = sampler.get_log_prob()
    found[found <= _FLOOR] = -np.inf
    return EnsembleChain(sampler.get_chain(), found, float(np.mean(sampler.acceptance_fraction)))


def autocorrelation_steps(series: np.ndarray) -> float:
    """Longest integrated autocorrelation time of an ensemble, in steps.

    Parameters
    ----------
    series : np.ndarray
        Shape (S, W) or (S, W, D).

    Returns
    -------
    float
        At least 1. Biased low when the chain is shorter than about 50 times the result; walkers that never
        moved are left out, and `inf` tells that hardly any did.

    Notes
    -----
    Sokal's windowed estimate averaged over the walkers (Goodman & Weare 2010), as in emcee.
    """
    series = series[:, :, None] if series.ndim == 2 else series
    spread = np.ptp(series, axis=0)
    # A constant walker has no autocorrelation function: it would turn the average into 0/0.
    moving = np.all(spread > 0, axis=1)
    if moving.sum() < 2:
        return np.inf
    # The function of each walker is normalised anyway; unit spread keeps its square from underflow.
    series = (series[:, moving] - series[0, moving]) / spread[moving]
    times = emcee.autocorr.integrated_time(series, tol=0, quiet=True)
    return float(max(1.0, np.max(times)))
