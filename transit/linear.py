"""Flat and sloped spectra: evidence and posterior by direct quadrature; weighted least squares in closed form."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from transit.likelihood import DepthLikelihood

SLOPE_NODES = 96
FACTOR_NODES = 160


@dataclass(frozen=True)
class LeastSquares:
    """Solution of a linear model; `z` is estimate over error for each coefficient."""

    estimate: np.ndarray
    covariance: np.ndarray
    chi2: float
    dof: int

    @property
    def error(self) -> np.ndarray:
        """1-sigma errors of the coefficients."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def z(self) -> np.ndarray:
        """Estimates in units of their errors."""
        return self.estimate / self.error


def least_squares(design: np.ndarray, depth: np.ndarray, covariance: np.ndarray) -> LeastSquares:
    """Generalised least squares: (X^T C^-1 X)^-1 X^T C^-1 d.

    Parameters
    ----------
    design : ndarray, shape (N, K)
    depth : ndarray, shape (N,)
    covariance : ndarray, shape (N, N) or (N,)
        Full covariance, or variances.

    Returns
    -------
    LeastSquares
    """
    if covariance.ndim == 1:
        covariance = np.diag(covariance)
    factor = np.linalg.cholesky(covariance)
    white, target = np.linalg.solve(factor, design), np.linalg.solve(factor, depth)
    inverse = np.linalg.inv(white.T @ white)
    estimate = inverse @ (white.T @ target)
    residual = target - white @ estimate
    return LeastSquares(estimate, inverse, float(residual @ residual), len(depth) - design.shape[1])


@dataclass(frozen=True, eq=False)
class LinearPosterior:
    """Evidence of a flat or sloped spectrum and equally weighted posterior draws.

    Parameters
    ----------
    ln_evidence : float
    slope, radius, error_factor : ndarray, shape (S,)
        Draws: slope in depth (fraction) per e-fold of wavelength, reference radius in units of the observed one.
    best : tuple of float
        Slope, radius and error factor of greatest likelihood.
    chi2 : float
        Chi-square there with the quoted errors.
    """

    ln_evidence: float
    slope: np.ndarray
    radius: np.ndarray
    error_factor: np.ndarray
    best: tuple[float, float, float]
    chi2: float


def linear_posterior(
    likelihood: DepthLikelihood,
    abscissa: np.ndarray | None,
    slope_limit: float,
    error_factor_range: tuple[float, float] | None,
    rng: np.random.Generator,
    n_draws: int = 2000,
) -> LinearPosterior:
    """Integrate a flat (abscissa None) or sloped spectrum over its priors.

    Parameters
    ----------
    likelihood : DepthLikelihood
    abscissa : ndarray, shape (N,), or None
        ln wavelength less its mean; None for a flat spectrum.
    slope_limit : float
        The slope is uniform within -/+ this, depth (fraction) per e-fold.
    error_factor_range : (float, float) or None
        Log-uniform inflation of the errors, or quoted errors.
    rng : numpy.random.Generator
    n_draws : int

    Returns
    -------
    LinearPosterior

    Notes
    -----
    The reference radius is integrated by `DepthLikelihood.collapse`, slope and error factor by Gauss-Legendre
    quadrature: the slope over ten of its errors about the best value for each error factor, cut at its prior.
    """
    n = len(likelihood.depth)
    if error_factor_range is None:
        factors, factor_weights = np.ones(1), np.ones(1)
    else:
        low, high = np.log(error_factor_range)
        nodes, weights = np.polynomial.legendre.leggauss(FACTOR_NODES)
        factors = np.exp(0.5 * (low + high) + 0.5 * (high - low) * nodes)
        factor_weights = weights / 2
    slopes, ln_weights, f_grid = [], [], []
    for factor, factor_weight in zip(factors, factor_weights, strict=True):
        if abscissa is None:
            grid, weight = np.zeros(1), np.ones(1)
        else:
            grid, weight = _slope_nodes(likelihood, abscissa, slope_limit, factor)
        slopes.append(grid)
        ln_weights.append(np.log(weight) + np.log(factor_weight))
        f_grid.append(np.full_like(grid, factor))
    slope, ln_weight, factor = map(np.concatenate, (slopes, ln_weights, f_grid))
    zeros = np.zeros((len(slope), n))
    extra = None if abscissa is None else slope[:, None] * abscissa
    result = likelihood.collapse(zeros, zeros, factor, extra)
    ln_joint = result.ln_evidence + ln_weight
    peak = ln_joint.max()
    probability = np.exp(ln_joint - peak)
    ln_evidence = float(peak + np.log(probability.sum()))
    chosen = rng.choice(len(slope), n_draws, p=probability / probability.sum())
    radius = result.radius[chosen] + result.radius_err[chosen] * rng.standard_normal(n_draws)
    best = int(np.argmax(result.ln_evidence))
    best_slope, best_radius, chi2 = _quoted_minimum(likelihood, abscissa, slope_limit, float(slope[best]))
    return LinearPosterior(
        ln_evidence=ln_evidence,
        slope=slope[chosen],
        radius=radius,
        error_factor=factor[chosen],
        best=(best_slope, best_radius, float(factor[best])),
        chi2=chi2,
    )


def _quoted_minimum(likelihood, abscissa, limit, near):
    """Slope, radius and chi-square of the best fit at the quoted errors; chi-square is a parabola in the slope."""
    n = len(likelihood.depth)
    if abscissa is None:
        flat = likelihood.collapse(np.zeros((1, n)), np.zeros((1, n)))
        return 0.0, float(flat.radius[0]), float(flat.chi2[0])
    step = 0.05 * limit
    trial = np.array([near - step, near, near + step])
    zeros = np.zeros((3, n))
    left, middle, right = likelihood.collapse(zeros, zeros, 1.0, trial[:, None] * abscissa).chi2
    shift = 0.5 * step * (left - right) / (left - 2 * middle + right)
    trial = np.clip(np.array([near, near + shift]), -limit, limit)
    result = likelihood.collapse(zeros[:2], zeros[:2], 1.0, trial[:, None] * abscissa)
    best = int(np.argmin(result.chi2))
    return float(trial[best]), float(result.radius[best]), float(result.chi2[best])


def _slope_nodes(likelihood, abscissa, limit, factor):
    """Quadrature nodes for the slope and their weights over the prior's width."""
    n = len(abscissa)
    # ln likelihood is close to a parabola in the slope: three points give its centre and width.
    trial = np.array([-0.5, 0.0, 0.5]) * limit
    zeros = np.zeros((3, n))
    ln_like = likelihood.collapse(zeros, zeros, factor, trial[:, None] * abscissa).ln_evidence
    second = (ln_like[0] - 2 * ln_like[1] + ln_like[2]) / (0.5 * limit) ** 2
    first = (ln_like[2] - ln_like[0]) / limit
    width = 1 / np.sqrt(max(-second, 1e-30))
    centre = np.clip(first * width**2, -limit, limit)
    low, high = max(-limit, centre - 10 * width), min(limit, centre + 10 * width)
    if high <= low:
        low, high = -limit, limit
    nodes, weights = np.polynomial.legendre.leggauss(SLOPE_NODES)
    return 0.5 * (low + high) + 0.5 * (high - low) * nodes, weights * 0.5 * (high - low) / (2 * limit)
