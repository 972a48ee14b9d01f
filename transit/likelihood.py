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
        Standard deviation of the normal prior of the offset of each segment after the first; 0 leaves them out.
    directions : ndarray, shape (N, K), optional
        Further changes of depth whose amplitudes have normal priors (steps, a slope).
    direction_sd : ndarray, shape (K,), optional
        Standard deviations of those amplitudes.

    Notes
    -----
    With C = f^2 C0 + D S D^T (D holds the segments' and the further directions, S their prior variances, f inflates
    the errors) a rotation after whitening by C0 makes C diagonal for every f: eigenvalues f^2 + lambda. Directions
    thus cost nothing and inflation only weights. Depth is a quadratic in u, so chi-square is a quartic: its minimum
    is found by Newton steps and the integral over u taken as a truncated Gaussian.

    With AR(1) noise the correlation of two bins of one segment is rho^|i-j|, i and j counted along wavelength
    (Fortune et al. 2024, A&A 686, A89, discuss noise that is correlated in wavelength). Its whitening is a
    difference of neighbours, and the directions are taken out by Woodbury's formula.
    """

    def __init__(
        self,
        spectrum: DepthSpectrum,
        median_depth: float,
        radius_fraction: float = 0.2,
        offset_ppm: float = 100.0,
        directions: np.ndarray | None = None,
        direction_sd: np.ndarray | None = None,
    ):
        n = spectrum.n_bins
        self.median_depth = median_depth
        self.radius_fraction = radius_fraction
        self.depth = spectrum.depth
        self.has_covariance = spectrum.covariance is not None
        self._base = spectrum.covariance if self.has_covariance else np.diag(spectrum.depth_err**2)
        self._err = np.sqrt(np.diag(self._base))
        self._segment = spectrum.segment
        try:
            factor = np.linalg.cholesky(self._base)
        except np.linalg.LinAlgError as error:
            raise SettingError("The covariance of the depths is not positive definite.") from error
        n_offsets = len(spectrum.segment_names) - 1 if offset_ppm > 0 else 0
        columns = [(spectrum.segment == k).astype(float) for k in range(1, n_offsets + 1)]
        sd = [offset_ppm * PPM] * n_offsets
        if directions is not None:
            columns += list(directions.T)
            sd += list(direction_sd)
        self.directions = np.stack(columns, axis=1) if columns else np.zeros((n, 0))
        self.direction_sd = np.array(sd, float)
        whitened = np.linalg.solve(factor, self.directions * self.direction_sd)
        self._eigenvalues = np.zeros(n)
        if columns:
            rotation, singular, _ = np.linalg.svd(whitened, full_matrices=True)
            self._eigenvalues[: len(singular)] = singular**2
            self._transform = rotation.T @ np.linalg.inv(factor)
        else:
            self._transform = np.linalg.inv(factor)
        self._data = self._transform @ spectrum.depth
        self._ln_norm = -0.5 * n * LN_2PI - np.log(np.diag(factor)).sum()

    def covariance(self, error_factor: float = 1.0, ar1: float = 0.0) -> np.ndarray:
        """Covariance of the depths, directions with their priors included, shape (N, N), fraction squared."""
        base = self._base
        if ar1 > 0:
            place = np.zeros(len(self.depth), int)
            for k in np.unique(self._segment):
                inside = self._segment == k
                place[inside] = np.arange(inside.sum())
            distance = np.abs(place[:, None] - place)
            same = self._segment[:, None] == self._segment
            base = np.outer(self._err, self._err) * np.where(same, ar1**distance, 0.0)
        scaled = self.directions * self.direction_sd
        return error_factor**2 * base + scaled @ scaled.T

    def collapse(
        self,
        mean_height: np.ndarray,
        mean_square_height: np.ndarray,
        error_factor: np.ndarray | float = 1.0,
        extra_depth: np.ndarray | None = None,
        bin_factor: np.ndarray | None = None,
        ar1: np.ndarray | None = None,
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
        ar1 : ndarray, shape (W,), optional
            Correlation of neighbouring bins, in place of independent errors.

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
        factor = np.broadcast_to(np.asarray(error_factor, float), zero.shape[:1])
        if ar1 is not None:
            return self._integrate(*self._ar1_products(self.depth - zero, one, two, factor, ar1))
        arrays = [self._data - zero @ self._transform.T, one @ self._transform.T, two @ self._transform.T]
        variance = factor[:, None] ** 2 + self._eigenvalues
        weight = 1 / variance
        products = [
            np.einsum("wn,wn,wn->w", arrays[i], arrays[j], weight) for i in range(3) for j in range(i, 3)
        ]
        return self._integrate(products, self._ln_norm - 0.5 * np.log(variance).sum(axis=1))

    def _ar1_whiten(self, rows: np.ndarray, factor: np.ndarray, ar1: np.ndarray) -> np.ndarray:
        """Whiten rows (W, N) for AR(1) noise with a walker's factor and correlation."""
        scaled = rows / (factor[:, None] * self._err)
        out = scaled.copy()
        rho = ar1[:, None]
        for k in np.unique(self._segment):
            inside = np.flatnonzero(self._segment == k)
            out[:, inside[1:]] = (scaled[:, inside[1:]] - rho * scaled[:, inside[:-1]]) / np.sqrt(1 - rho**2)
        return out

    def _ar1_directions(self, factor, ar1):
        """Whitened directions times their prior widths, (W, N, K), and 1 + D^T D, (W, K, K)."""
        columns = [
            self._ar1_whiten(np.broadcast_to(column * sd, (len(factor), len(column))), factor, ar1)
            for column, sd in zip(self.directions.T, self.direction_sd, strict=True)
        ]
        if not columns:
            return None, None
        white = np.stack(columns, axis=2)
        return white, np.eye(white.shape[2]) + np.einsum("wnk,wnl->wkl", white, white)

    def _ar1_products(self, e, b, c, factor, ar1):
        """Inner products under the covariance of AR(1) noise with directions, and the ln of its normalisation."""
        n = len(self.depth)
        factor, ar1 = np.asarray(factor, float), np.broadcast_to(np.asarray(ar1, float), factor.shape)
        arrays = [self._ar1_whiten(x, factor, ar1) for x in (e, b, c)]
        n_links = n - len(np.unique(self._segment))
        ln_norm = (
            -0.5 * n * LN_2PI
            - np.log(self._err).sum()
            - n * np.log(factor)
            - 0.5 * n_links * np.log1p(-(ar1**2))
        )
        white, inner = self._ar1_directions(factor, ar1)
        along = None
        if white is not None:
            along = [np.einsum("wnk,wn->wk", white, x) for x in arrays]
            ln_norm = ln_norm - 0.5 * np.linalg.slogdet(inner)[1]
        products = []
        for i in range(3):
            for j in range(i, 3):
                value = np.einsum("wn,wn->w", arrays[i], arrays[j])
                if along is not None:
                    solved = np.linalg.solve(inner, along[j][:, :, None])[:, :, 0]
                    value = value - np.einsum("wk,wk->w", along[i], solved)
                products.append(value)
        return products, ln_norm

    def _integrate(self, products, ln_norm):
        """Quartic chi-square in v = u - 1, (e - b v - c v^2)^2 summed, integrated over the range of v."""
        ee, eb, ec, bb, bc, cc = products
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
        inside = ln_gaussian_mass((-limit - centre) / width, (limit - centre) / width)
        ln_evidence = ln_norm - 0.5 * chi2_centre + 0.5 * LN_2PI + np.log(width) - np.log(2 * limit) + inside
        return Collapsed(ln_evidence, 1 + v, width, chi2)

    def predicted_depth(self, mean_height, mean_square_height, radius, extra_depth=None, bin_factor=None):
        """Depths (fraction), shape (W, N), at given reference radii (W,), directions not included."""
        u = np.asarray(radius)[:, None]
        depth = self.median_depth * (u**2 + 2 * u * mean_height + mean_square_height)
        if bin_factor is not None:
            depth = depth * bin_factor
        return depth if extra_depth is None else depth + extra_depth

    def offsets(
        self,
        depth: np.ndarray,
        error_factor: np.ndarray | float = 1.0,
        ar1: np.ndarray | None = None,
    ) -> np.ndarray:
        """Posterior mean amplitudes of the directions (offsets of segments first), given model depths.

        Parameters
        ----------
        depth : ndarray, shape (W, N)
            Model depths without offsets, fraction.
        error_factor : float or ndarray, shape (W,)
        ar1 : ndarray, shape (W,), optional

        Returns
        -------
        ndarray, shape (W, K)
            Fraction; K is the number of segments less one and of the further directions.
        """
        if not self.directions.shape[1]:
            return np.zeros((len(depth), 0))
        factor = np.broadcast_to(np.asarray(error_factor, float), depth.shape[:1])
        if ar1 is not None:
            ar1 = np.broadcast_to(np.asarray(ar1, float), factor.shape)
            white, inner = self._ar1_directions(factor, ar1)
            residual = self._ar1_whiten(self.depth - depth, factor, ar1)
            along = np.einsum("wnk,wn->wk", white, residual)
            return np.linalg.solve(inner, along[:, :, None])[:, :, 0] * self.direction_sd
        weight = 1 / (factor[:, None] ** 2 + self._eigenvalues)
        residual = self._data - depth @ self._transform.T
        return (residual * weight) @ (self._transform @ self.directions) * self.direction_sd**2

    def with_offsets(
        self,
        depth: np.ndarray,
        error_factor: np.ndarray | float = 1.0,
        ar1: np.ndarray | None = None,
    ) -> np.ndarray:
        """Add the posterior mean of the directions (offsets of the segments) to model depths, (W, N)."""
        return depth + self.offsets(depth, error_factor, ar1) @ self.directions.T


def ln_gaussian_mass(low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """ln of the normal probability between two limits, without loss of digits far out on either side."""
    flip = low > 0
    low, high = np.where(flip, -high, low), np.where(flip, -low, high)
    plain = ndtr(high) - ndtr(low)
    far = high < -5
    ln_far = log_ndtr(np.minimum(high, 0)) + np.log1p(
        -np.exp(np.minimum(log_ndtr(np.minimum(low, 0)) - log_ndtr(np.minimum(high, 0)), -1e-12))
    )
    return np.where(far, ln_far, np.log(np.maximum(plain, 1e-300)))
