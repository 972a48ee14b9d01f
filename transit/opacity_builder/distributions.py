"""Distribution of a cross section inside a band: equal-probability slices of ln k, sampled or of Malkmus form."""

from __future__ import annotations

import numpy as np
from scipy.special import exp1, log_ndtr, ndtr

N_SLICES = 16


def slice_means(ln_values: np.ndarray, n_slices: int = N_SLICES) -> np.ndarray:
    """Sort samples of ln k, cut them into slices of equal probability and average each.

    Parameters
    ----------
    ln_values : ndarray, shape (N,)
        N need not be a multiple of `n_slices`: a sample on a boundary is shared.
    n_slices : int

    Returns
    -------
    ndarray, shape (n_slices,)
        Increasing; its mean is the mean of the samples.
    """
    ordered = np.sort(ln_values)
    n = len(ordered)
    integral = np.concatenate([[0.0], np.cumsum(ordered)])
    cuts = np.linspace(0, n, n_slices + 1)
    return np.diff(np.interp(cuts, np.arange(n + 1), integral)) * n_slices / n


def malkmus_mean_ln(beta) -> np.ndarray:
    """Mean of ln(k / mean k) for the Malkmus distribution of fine-structure parameter beta.

    Notes
    -----
    The Malkmus transmission exp(-beta (sqrt(1 + 2 k u / beta) - 1)) is the Laplace transform of an inverse
    Gaussian with shape beta times its mean (Malkmus 1967, JOSA 57, 323); then <ln k> - ln<k> = -exp(2 beta)
    E1(2 beta).
    """
    x = 2 * np.asarray(beta, float)
    small = np.minimum(x, 500.0)
    return -np.where(x < 500, np.exp(small) * exp1(small), 1 / x)


_LN_BETA_GRID = np.linspace(-22.0, 6.0, 113)


def _malkmus_grid(n_slices: int) -> np.ndarray:
    """Slice means of ln(k / mean k) on `_LN_BETA_GRID`, shape (G, n_slices)."""
    out = np.empty((len(_LN_BETA_GRID), n_slices))
    for row, ln_beta in enumerate(_LN_BETA_GRID):
        beta = np.exp(ln_beta)
        # The bulk lies near beta (many weak wings), the tail reaches the line cores near 1/beta.
        ln_x = np.linspace(min(ln_beta, 0) - 7, max(-ln_beta, 0) + 4, 6000)
        x = np.exp(ln_x)
        root = np.sqrt(beta / x)
        cdf = ndtr(root * (x - 1)) + np.exp(2 * beta + log_ndtr(-root * (x + 1)))
        # The far tail holds next to no probability: the highest slice ends at its last representable quantile.
        probability = (np.arange(n_slices * 400) + 0.5) / (n_slices * 400)
        means = np.interp(probability, cdf, ln_x).reshape(n_slices, 400).mean(axis=1)
        out[row] = means + malkmus_mean_ln(beta) - means.mean()
    return out


class MalkmusSlices:
    """Slice means of the Malkmus distribution, tabulated once against ln beta."""

    def __init__(self, n_slices: int = N_SLICES):
        self._grid = _malkmus_grid(n_slices)

    def __call__(self, ln_mean: np.ndarray, beta: np.ndarray) -> np.ndarray:
        """Slice means of ln k.

        Parameters
        ----------
        ln_mean, beta : ndarray, shape (B,)
            ln of the mean cross section, and the fine-structure parameter.

        Returns
        -------
        ndarray, shape (B, n_slices)
        """
        ln_beta = np.log(np.clip(beta, 3e-10, 400.0))
        columns = [np.interp(ln_beta, _LN_BETA_GRID, column) for column in self._grid.T]
        return np.asarray(ln_mean)[:, None] + np.stack(columns, axis=1)
