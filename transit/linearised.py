"""A fitted model with the directions in which it may still move: residuals that are white once those are taken out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class LinearBase:
    """Frame in which templates are added to a base hypothesis.

    Parameters
    ----------
    name : str
        Base hypothesis.
    depth : ndarray, shape (N,)
        Its best model, fraction.
    transform : ndarray, shape (M, N)
        `transform @ (d - depth)` is standard normal under the base, whatever the value of its level and of the other
        directions taken out.
    ln_evidence : float
        Of the base, in the units of the fits.
    """

    name: str
    depth: np.ndarray
    transform: np.ndarray
    ln_evidence: float = 0.0

    def whiten(self, depths: np.ndarray) -> np.ndarray:
        """Whitened differences from the base, shape (..., M), of depths (..., N)."""
        return (np.asarray(depths) - self.depth) @ self.transform.T

    def whiten_template(self, templates: np.ndarray) -> np.ndarray:
        """Whitened templates, shape (..., M), of differences of depth (..., N)."""
        return np.asarray(templates) @ self.transform.T


def whitening(
    covariance: np.ndarray, free: np.ndarray | None = None, bounded: np.ndarray | None = None
) -> np.ndarray:
    """Linear map after which depths are white and blind to nuisance directions.

    Parameters
    ----------
    covariance : ndarray, shape (N, N)
        Of the depths, positive definite; offsets of segments with their normal prior included.
    free : ndarray, shape (N, F), optional
        Directions without a prior (or a very wide one), projected out.
    bounded : ndarray, shape (N, B), optional
        Directions times the standard deviation of their normal prior, marginalised.

    Returns
    -------
    ndarray, shape (N - F, N)
        A with A C A^T = 1 and A free = 0.
    """
    total = covariance if bounded is None else covariance + bounded @ bounded.T
    inverse_factor = np.linalg.inv(np.linalg.cholesky(total))
    if free is None or free.shape[1] == 0:
        return inverse_factor
    whitened = inverse_factor @ free
    basis, _ = np.linalg.qr(whitened, mode="complete")
    return basis[:, whitened.shape[1] :].T @ inverse_factor
