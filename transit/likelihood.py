"""Gaussian likelihood of a spectrum: covariance, offsets, error inflation; reference radius integrated out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import log_ndtr, ndtr

from transit.errors import SettingError
from transit.records import DepthSpectrum
from transit.units import PPM

LN_2PI = float(np.log(2 * np.pi))


@dataclass(frozen=True, eq=False)
class Collapsed:
    """Integral over the reference radius for W models.

    Parameters
    ----------
    ln_evidence : ndarray, shape (W,)
        ln of the likelihood integrated over the prior of the reference radius (and of the offsets).
    radius : ndarray, shape (W,)
        Best reference radius in units of the observed one, within its prior.
    radius_err : ndarray, shape (W,)
        Its 1-sigma width.
    chi2 : ndarray, shape (W,)
        Chi-square at the best radius, error inflation applied.
    """

    ln_evidence: np.ndarray
    radius: np.ndarray
    radius_err: np.ndarray
    chi2: np.ndarray


class DepthLikelihood:
    """Likelihood of depths (Rp/Rs)^2 = q <(u + h)^2>, with u the reference radius and h the limb's height.

    Parameters
    ----------
    spectrum : DepthSpectrum
    median_depth : float
        q: the depth of the observed radius, which is the unit of u and h.
    radius_fraction : float
        u is uniform within 1 -/+ this.
    offset_ppm : float
        Standard deviation of the normal prior of the offset of each segment after the first.

    Notes
    -----
    With C = f^2 C0 + s^2 P P^T (P marks the bins of each later segment, f inflates the errors) a rotation after
    whitening by C0 makes C diagonal for every f: eigenvalues f^2 + lambda. Offsets thus cost nothing and inflation
    only weights. Depth is a quadratic in u, so chi-square is a quartic: its minimum is found by Newton steps and
    the integral over u taken as a truncated Gaussian.
    """

    def __init__(
        self,
        spectrum: DepthSpectrum,
        median_depth: float,
        radius_fraction: float = 0.2,
        offset_ppm: float = 100.0,
    ):
        n = spectrum.n_bins
        self.median_depth = median_depth
        self.radius_fraction = radius_fraction
        self.offset = offset_ppm * PPM
        self.depth = spectrum.depth
        base = np.diag(spectrum.depth_err**2) if spectrum.covariance is None else spectrum.covariance
        try:
            factor = np.linalg.cholesky(base)
        except np.linalg.LinAlgError as error:
            raise SettingError("The covariance of the depths is not positive definite.") from error
        self.membership = np.stack(
            [spectrum.segment == k for k in range(1, len(spectrum.segment_names))] or [np.zeros(n, bool)],
            axis=1,
        ).astype(float)
        whitened = np.linalg.solve(factor, self.membership * self.offset)
        rotation, singular, _ = np.linalg.svd(whitened, full_matrices=True)
        self._eigenvalues = np.zeros(n)
        self._eigenvalues[: len(singular)] = singular**2
        self._transform = rotation.T @ np.linalg.inv(factor)
        self._data = self._transform @ spectrum.depth
        self._ln_norm = -0.5 * n * LN_2PI - np.log(np.diag(factor)).sum()

    def collapse(
        self,
        mean_height: np.ndarray,
        mean_square_height: np.ndarray,
        error_factor: np.ndarray | float = 1.0,
        extra_depth: np.ndarray | None = None,
        bin_factor: np.ndarray | None = None,
    ) -> Collapsed:
        """Integrate over the reference radius.

        Parameters
        ----------
        mean_height, mean_square_height : ndarray, shape (W, N)
            Of the limb over the 10 mbar level, in units of the observed radius (and squared).
        error_factor : float or ndarray, shape (W,)
            Inflation of the quoted errors.
        extra_depth : ndarray, shape (W, N), optional
            Depth added to the model (a slope), fraction.
        bin_factor : ndarray, shape (W, N), optional
            Factor on the depth of each bin (an inhomogeneous star).

        Returns
        -------
        Collapsed
        """
        q = self.median_depth
        zero = q * (1 + 2 * mean_height + mean_square_height)
        one = 2 * q * (1 + mean_height)
        two = np.full_like(one, q)
        if bin_factor is not None:
            zero, one, two = zero * bin_factor, one * bin_factor, two * bin_factor
        if extra_depth is not None:
            zero = zero + extra_depth
        residual = self._data - zero @ self._transform.T
        one = one @ self._transform.T
        two = two @ self._transform.T
        factor = np.broadcast_to(np.asarray(error_factor, float), residual.shape[:1])
        variance = factor[:, None] ** 2 + self._eigenvalues
        return self._integrate(residual, one, two, 1 / variance, np.log(variance).sum(axis=1))

    def _integrate(self, e, b, c, weight, ln_determinant):
        """Quartic chi-square in v = u - 1: sum w (e - b v - c v^2)^2, integrated over the range of v."""

        def dot(x, y):
            return np.einsum("wn,wn,wn->w", x, y, weight)

        ee, eb, ec, bb, bc, cc = dot(e, e), dot(e, b), dot(e, c), dot(b, b), dot(b, c), dot(c, c)
        limit = self.radius_fraction
        v = np.clip(eb / bb, -limit, limit)
        for _ in range(4):
            slope = -2 * eb + 2 * v * (bb - 2 * ec) + 6 * bc * v**2 + 4 * cc * v**3
            curvature = np.maximum(2 * (bb - 2 * ec) + 12 * bc * v + 12 * cc * v**2, bb)
            v = np.clip(v - slope / curvature, -limit, limit)
        curvature = np.maximum((bb - 2 * ec) + 6 * bc * v + 6 * cc * v**2, 0.1 * bb)
        slope = -2 * eb + 2 * v * (bb - 2 * ec) + 6 * bc * v**2 + 4 * cc * v**3
        chi2 = ee - 2 * eb * v + (bb - 2 * ec) * v**2 + 2 * bc * v**3 + cc * v**4
        width = 1 / np.sqrt(curvature)
        # Where the minimum lies outside the prior, the Gaussian is centred there and cut at the limit.
        centre = v - slope / (2 * curvature)
        chi2_centre = chi2 - slope**2 / (4 * curvature)
        inside = _ln_gaussian_mass((-limit - centre) / width, (limit - centre) / width)
        ln_evidence = (
            self._ln_norm
            - 0.5 * ln_determinant
            - 0.5 * chi2_centre
            + 0.5 * LN_2PI
            + np.log(width)
            - np.log(2 * limit)
            + inside
        )
        return Collapsed(ln_evidence, 1 + v, width, chi2)

    def predicted_depth(self, mean_height, mean_square_height, radius, extra_depth=None, bin_factor=None):
        """Depths (fraction), shape (W, N), at given reference radii (W,), offsets not included."""
        u = np.asarray(radius)[:, None]
        depth = self.median_depth * (u**2 + 2 * u * mean_height + mean_square_height)
        if bin_factor is not None:
            depth = depth * bin_factor
        return depth if extra_depth is None else depth + extra_depth

    def offsets(self, depth: np.ndarray, error_factor: np.ndarray | float = 1.0) -> np.ndarray:
        """Posterior mean offsets of the segments after the first, given model depths.

        Parameters
        ----------
        depth : ndarray, shape (W, N)
            Model depths without offsets, fraction.
        error_factor : float or ndarray, shape (W,)

        Returns
        -------
        ndarray, shape (W, K)
            Fraction; K is the number of segments less one (zero columns for a spectrum of one segment).
        """
        if not np.any(self.membership):
            return np.zeros((len(depth), 0))
        factor = np.broadcast_to(np.asarray(error_factor, float), depth.shape[:1])
        weight = 1 / (factor[:, None] ** 2 + self._eigenvalues)
        residual = self._data - depth @ self._transform.T
        return self.offset**2 * (residual * weight) @ (self._transform @ self.membership)

    def with_offsets(self, depth: np.ndarray, error_factor: np.ndarray | float = 1.0) -> np.ndarray:
        """Add the posterior mean offsets of the segments to model depths, (W, N)."""
        offsets = self.offsets(depth, error_factor)
        return depth + offsets @ self.membership.T if offsets.shape[1] else depth


def _ln_gaussian_mass(low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """ln of the normal probability between two limits, without loss of digits far out on either side."""
    flip = low > 0
    low, high = np.where(flip, -high, low), np.where(flip, -low, high)
    plain = ndtr(high) - ndtr(low)
    far = high < -5
    ln_far = log_ndtr(np.minimum(high, 0)) + np.log1p(
        -np.exp(np.minimum(log_ndtr(np.minimum(low, 0)) - log_ndtr(np.minimum(high, 0)), -1e-12))
    )
    return np.where(far, ln_far, np.log(np.maximum(plain, 1e-300)))
