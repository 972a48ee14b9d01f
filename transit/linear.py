"""Flat and sloped spectra: evidence and posterior by direct quadrature; weighted least squares in closed form."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from transit.likelihood import DepthLikelihood

SLOPE_NODES = 96
FACTOR_NODES = 160
AR1_NODES = 32


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
    ar1 : ndarray, shape (S,), or None
        Draws of the correlation of neighbouring bins, where it is free.
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
    ar1: np.ndarray | None = None


def linear_posterior(
    likelihood: DepthLikelihood,
    abscissa: np.ndarray | None,
    slope_limit: float,
    error_factor_range: tuple[float, float] | None,
    rng: np.random.Generator,
    n_draws: int = 2000,
    ar1_range: tuple[float, float] | None = None,
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
    ar1_range : (float, float), optional
        Uniform correlation of neighbouring bins, or independent errors.

    Returns
    -------
    LinearPosterior

    Notes
    -----
    The reference radius is integrated by `DepthLikelihood.collapse`, slope, error factor and correlation by
    Gauss-Legendre quadrature: the slope over ten of its errors about the best value for each, cut at its prior.
    """
    factors, factor_weights = _factor_nodes(error_factor_range)
    correlations, correlation_weights = _ar1_nodes(ar1_range)
    slopes, ln_weights, f_grid, rho_grid, results = [], [], [], [], []
    for rho, rho_weight in zip(correlations, correlation_weights, strict=True):
        own = []
        for factor, factor_weight in zip(factors, factor_weights, strict=True):
            if abscissa is None:
                grid, weight = np.zeros(1), np.ones(1)
            else:
                grid, weight = _slope_nodes(likelihood, abscissa, slope_limit, factor, rho)
            own.append(
                (grid, np.log(weight) + np.log(factor_weight * rho_weight), np.full_like(grid, factor))
            )
        slope, ln_weight, factor = map(np.concatenate, zip(*own, strict=True))
        results.append(_collapse_lines(likelihood, abscissa, slope, factor, rho))
        slopes.append(slope)
        ln_weights.append(ln_weight)
        f_grid.append(factor)
        rho_grid.append(np.full_like(slope, np.nan if rho is None else rho))
    slope, ln_weight, factor, rho = map(np.concatenate, (slopes, ln_weights, f_grid, rho_grid))
    ln_likelihood, radius, radius_err = (
        np.concatenate([getattr(result, name) for result in results])
        for name in ("ln_evidence", "radius", "radius_err")
    )
    ln_joint = ln_likelihood + ln_weight
    peak = ln_joint.max()
    probability = np.exp(ln_joint - peak)
    ln_evidence = float(peak + np.log(probability.sum()))
    chosen = rng.choice(len(slope), n_draws, p=probability / probability.sum())
    drawn_radius = radius[chosen] + radius_err[chosen] * rng.standard_normal(n_draws)
    best = int(np.argmax(ln_likelihood))
    best_rho = None if ar1_range is None else float(rho[best])
    best_slope, best_radius, chi2 = _quoted_minimum(
        likelihood, abscissa, slope_limit, float(slope[best]), best_rho
    )
    return LinearPosterior(
        ln_evidence=ln_evidence,
        slope=slope[chosen],
        radius=drawn_radius,
        error_factor=factor[chosen],
        best=(best_slope, best_radius, float(factor[best])),
        chi2=chi2,
        ar1=None if ar1_range is None else rho[chosen],
    )


def _factor_nodes(error_factor_range):
    """Nodes and weights of the log-uniform error factor; the single node 1 when it is not free."""
    if error_factor_range is None:
        return np.ones(1), np.ones(1)
    low, high = np.log(error_factor_range)
    nodes, weights = np.polynomial.legendre.leggauss(FACTOR_NODES)
    return np.exp(0.5 * (low + high) + 0.5 * (high - low) * nodes), weights / 2


def _ar1_nodes(ar1_range):
    """Nodes and weights of the uniform correlation; the single node None when errors are independent."""
    if ar1_range is None:
        return [None], np.ones(1)
    low, high = ar1_range
    nodes, weights = np.polynomial.legendre.leggauss(AR1_NODES)
    return list(0.5 * (low + high) + 0.5 * (high - low) * nodes), weights / 2


def _collapse_lines(likelihood, abscissa, slope, factor, rho):
    """Likelihood of lines of given slopes (S,), the level integrated out."""
    zeros = np.zeros((len(slope), len(likelihood.depth)))
    extra = None if abscissa is None else slope[:, None] * abscissa
    factor = np.broadcast_to(factor, len(slope))
    return likelihood.collapse(
        zeros, zeros, factor, extra, ar1=None if rho is None else np.full(len(slope), rho)
    )


def _quoted_minimum(likelihood, abscissa, limit, near, rho):
    """Slope, radius and chi-square of the best fit at the quoted errors; chi-square is a parabola in the slope."""
    if abscissa is None:
        flat = _collapse_lines(likelihood, None, np.zeros(1), 1.0, rho)
        return 0.0, float(flat.radius[0]), float(flat.chi2[0])
    step = 0.05 * limit
    trial = np.array([near - step, near, near + step])
    left, middle, right = _collapse_lines(likelihood, abscissa, trial, 1.0, rho).chi2
    shift = 0.5 * step * (left - right) / (left - 2 * middle + right)
    trial = np.clip(np.array([near, near + shift]), -limit, limit)
    result = _collapse_lines(likelihood, abscissa, trial, 1.0, rho)
    best = int(np.argmin(result.chi2))
    return float(trial[best]), float(result.radius[best]), float(result.chi2[best])


def _slope_nodes(likelihood, abscissa, limit, factor, rho):
    """Quadrature nodes for the slope and their weights over the prior's width."""
    # ln likelihood is close to a parabola in the slope: three points give its centre and width.
    trial = np.array([-0.5, 0.0, 0.5]) * limit
    ln_like = _collapse_lines(likelihood, abscissa, trial, factor, rho).ln_evidence
    second = (ln_like[0] - 2 * ln_like[1] + ln_like[2]) / (0.5 * limit) ** 2
    first = (ln_like[2] - ln_like[0]) / limit
    width = 1 / np.sqrt(max(-second, 1e-30))
    centre = np.clip(first * width**2, -limit, limit)
    low, high = max(-limit, centre - 10 * width), min(limit, centre + 10 * width)
    if high <= low:
        low, high = -limit, limit
    nodes, weights = np.polynomial.legendre.leggauss(SLOPE_NODES)
    return 0.5 * (low + high) + 0.5 * (high - low) * nodes, weights * 0.5 * (high - low) / (2 * limit)
