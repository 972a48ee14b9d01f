"""Fine points under the bins of a spectrum: cells of neighbouring bands, each sampled by slices of its distribution."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array

from transit.opacity import BANDS_PER_E_FOLD, band_edges_cm1, band_index
from transit.units import SECOND_RADIATION_CM_K

SLICES = 16
# A bin of the spectrum is one cell as long as it holds no more bands than this (a resolving power of 50);
# wider bins are cut into several cells, because bands of different species lie at different places inside them.
BANDS_PER_CELL = 8.0
ORDER_CANDIDATES = 50


@dataclass(frozen=True, eq=False)
class FineGrid:
    """Cells under the bins of a spectrum; every cell is sampled by `SLICES` equally weighted points.

    Parameters
    ----------
    bands : tuple of ndarray of int, length C
        Bands of the common grid in each cell.
    band_weights : tuple of ndarray, length C
        Their photon-weighted shares; each sums to 1.
    averaging : csr_array, shape (N, C)
        Photon-weighted mean of cells over each bin; rows sum to 1.
    wavelength_um : ndarray, shape (C,)
        Photon-weighted centres of the cells.
    too_fine : int
        Number of bins narrower than the bands under them.
    """

    bands: tuple[np.ndarray, ...]
    band_weights: tuple[np.ndarray, ...]
    averaging: csr_array
    wavelength_um: np.ndarray
    too_fine: int

    @property
    def n_points(self) -> int:
        """Number of fine points."""
        return SLICES * len(self.bands)

    def bin_means(self, by_point: np.ndarray) -> np.ndarray:
        """Photon-weighted mean over each bin: (W, SLICES, C) to (W, N), double precision."""
        return (self.averaging @ by_point.mean(axis=1, dtype=np.float32).T.astype(float)).T


def photon_weight(wavelength_um: np.ndarray, star_teff_k: float | None) -> np.ndarray:
    """Relative stellar photons per wavelength: Planck at the star's temperature, or uniform when unknown."""
    if star_teff_k is None:
        return np.ones_like(wavelength_um)
    x = SECOND_RADIATION_CM_K * 1e4 / (wavelength_um * star_teff_k)
    return 1 / (wavelength_um**4 * np.expm1(x))


def make_grid(
    wavelength_um: np.ndarray, half_width_um: np.ndarray, star_teff_k: float | None = None
) -> FineGrid:
    """Choose the cells for a spectrum.

    Parameters
    ----------
    wavelength_um, half_width_um : ndarray, shape (N,)
    star_teff_k : float, optional
        For the photon weights inside a bin.

    Returns
    -------
    FineGrid
    """
    bands, weights, centres, rows, columns, shares = [], [], [], [], [], []
    too_fine = 0
    for row, (centre, half) in enumerate(zip(wavelength_um, half_width_um, strict=True)):
        low, high = centre - half, centre + half
        first, last = int(band_index(1e4 / high)), int(band_index(1e4 / low))
        edges_um = 1e4 / band_edges_cm1(first, last - first + 1)  # decreasing
        overlap = np.minimum(high, edges_um[:-1]) - np.maximum(low, edges_um[1:])
        band_um = np.sqrt(edges_um[1:] * edges_um[:-1])
        weight = np.maximum(overlap, 0) * photon_weight(band_um, star_teff_k)
        weight /= weight.sum()
        too_fine += int(2 * half < 0.8 * (edges_um[0] - edges_um[1]))
        n_cells = int(np.ceil(2 * half * BANDS_PER_E_FOLD / centre / BANDS_PER_CELL - 1e-9))
        for members in np.array_split(np.arange(len(weight)), max(n_cells, 1)):
            share = weight[members].sum()
            if share <= 0:
                continue
            rows.append(row)
            columns.append(len(bands))
            shares.append(share)
            bands.append(first + members)
            weights.append(weight[members] / share)
            centres.append(float(band_um[members] @ weights[-1]))
    return FineGrid(
        bands=tuple(bands),
        band_weights=tuple(weights),
        averaging=csr_array((shares, (rows, columns)), shape=(len(wavelength_um), len(bands))),
        wavelength_um=np.array(centres),
        too_fine=too_fine,
    )


def cell_slices(ln_values: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Slices of the joint distribution of several bands.

    Parameters
    ----------
    ln_values : ndarray, shape (B, K, S)
        Slice means of ln k of B bands under K conditions.
    weights : ndarray, shape (B,)
        Shares of the bands, summing to 1.

    Returns
    -------
    ndarray, shape (K, SLICES)
        Increasing; the mean over slices is the weighted mean of ln k.
    """
    _, n_cases, n_slices = ln_values.shape
    flat = ln_values.transpose(1, 0, 2).reshape(n_cases, -1)
    share = np.repeat(weights / n_slices, n_slices)
    order = np.argsort(flat, axis=1)
    ordered = np.take_along_axis(flat, order, axis=1)
    step = share[order]
    probability = np.concatenate([np.zeros((n_cases, 1)), np.cumsum(step, axis=1)], axis=1)
    integral = np.concatenate([np.zeros((n_cases, 1)), np.cumsum(step * ordered, axis=1)], axis=1)
    cuts = np.linspace(0, 1, SLICES + 1)
    at_cuts = np.stack([np.interp(cuts, p, i) for p, i in zip(probability, integral, strict=True)])
    return np.diff(at_cuts, axis=1) * SLICES


def slice_orders(n_species: int, cell_key: int) -> np.ndarray:
    """Orders in which the slices of each species are put before they are added, for one cell.

    Lines of different species do not line up, so slices must not be added rank by rank; but with few slices a
    random order can be correlated by chance. Each order is the best of a few random ones: least correlated, in
    rank and in distance from the middle rank, with the orders before it. (Strata of a scrambled Sobol sequence
    spread pairs better but leave some pairs of four or more species in step: heights 0.3 H too low.)

    Parameters
    ----------
    n_species : int
    cell_key : int
        Fixes the random stream: the same cell gets the same orders in every run.

    Returns
    -------
    ndarray of int, shape (n_species, SLICES)
    """
    rng = np.random.default_rng([20, cell_key])
    rank = np.arange(SLICES) - (SLICES - 1) / 2
    fold = np.abs(rank) - np.abs(rank).mean()
    orders = [rng.permutation(SLICES)]
    for _ in range(1, n_species):
        candidates = np.array([rng.permutation(SLICES) for _ in range(ORDER_CANDIDATES)])
        before = np.array(orders)
        linear = np.abs(rank[candidates] @ rank[before].T) / (rank @ rank)
        folded = np.abs(fold[candidates] @ fold[before].T) / (fold @ fold)
        orders.append(candidates[np.argmin((linear + folded / 2).max(axis=1))])
    return np.array(orders)


def cell_key(bands: np.ndarray) -> int:
    """Key of a cell for `slice_orders`: its middle band on the common grid."""
    return int(max(bands[len(bands) // 2] + BANDS_PER_E_FOLD * 4, 0))
