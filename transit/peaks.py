"""Gaussian approximations of the posterior at its local optima and at heavy draws that the proposals miss."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.special import ndtri

from transit.exploration import STRATA
from transit.mixtures import Mixture
from transit.pool import Pool, Target


def find_peaks(
    target: Target,
    explored: np.ndarray,
    ln_explored: np.ndarray,
    stratum_dim: int | None,
    starts_z: np.ndarray | None,
    n_steps: int,
) -> Mixture | None:
    """Mixture of Gaussian approximations at local optima, one start per stratum and one per given point.

    Parameters
    ----------
    target : Target
    explored : np.ndarray
        Shape (N, D), points of the exploring chain.
    ln_explored : np.ndarray
        Shape (N,), log posterior there.
    stratum_dim : int or None
        Coordinate whose prior is cut into strata.
    starts_z : np.ndarray or None
        Shape (K, D), further starts.
    n_steps : int
        Number of steps.

    Returns
    -------
    Mixture or None
        None when no optimisation is asked for.
    """
    if n_steps == 0:
        return None
    dim = target.n_dim
    lower, upper = np.full((1, dim), -np.inf), np.full((1, dim), np.inf)
    starts = explored[np.argmax(ln_explored)][None]
    if stratum_dim is not None:
        edges = ndtri(np.linspace(0, 1, STRATA + 1))
        stratum = np.searchsorted(edges[1:-1], explored[:, stratum_dim])
        for s in range(STRATA):
            inside = np.flatnonzero(stratum == s)
            if len(inside):
                start = explored[inside[np.argmax(ln_explored[inside])]]
            else:
                # Nobody survived there: move the best point over, and let the climb find out why.
                start = starts[0].copy()
                start[stratum_dim] = ndtri((s + 0.5) / STRATA)
            starts = np.vstack([starts, start])
            lower, upper = np.vstack([lower, lower[0]]), np.vstack([upper, upper[0]])
            lower[-1, stratum_dim], upper[-1, stratum_dim] = edges[s], edges[s + 1]
    if starts_z is not None and len(starts_z):
        extra = np.asarray(starts_z, dtype=float).reshape(-1, dim)
        starts = np.vstack([starts, extra])
        lower = np.vstack([lower, np.full_like(extra, -np.inf)])
        upper = np.vstack([upper, np.full_like(extra, np.inf)])
    near = ln_explored > ln_explored.max() - 3 * dim - 10
    scale = local_scale(explored[near])
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


def cover_outliers(pool: Pool, scale: np.ndarray, count: int) -> Mixture:
    """Local approximations at the heaviest draws of the pool: regions that the proposals so far miss.

    The idea of incremental mixture importance sampling (Raftery & Bao 2010, Biometrics 66, 1162), with curvature
    in place of neighbours.

    Parameters
    ----------
    pool : Pool
    scale : np.ndarray
        Shape (D, D), lower triangular factor of the covariance of the posterior, roughly.
    count : int
        Largest number of draws to cover.

    Returns
    -------
    Mixture
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


def local_scale(draws: np.ndarray) -> np.ndarray:
    """Lower triangular factor (D, D) of the covariance of draws (N, D), or the prior's if they are too few."""
    dim = draws.shape[1]
    spread = np.cov(draws.T).reshape(dim, dim) if len(draws) > 5 * dim else np.eye(dim)
    return np.linalg.cholesky(spread + 1e-8 * np.eye(dim))
