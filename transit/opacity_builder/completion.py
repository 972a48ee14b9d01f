"""Opacity that a line list lacks when hot, taken from band means and spread like shifted copies of the lines."""

from __future__ import annotations

import numpy as np
from scipy.ndimage import uniform_filter1d

from transit.opacity_builder.bandmeans import BAND_WIDTH_CM1, BandMeans, interpolate_temperature
from transit.opacity_builder.linelists import LineList

# Hot bands are copies of the cold ones, displaced by anharmonicity: a handful of displaced copies fills the gaps
# between the cold lines as they do. Fixed, irregular shifts in cm-1.
COPY_SHIFTS_CM1 = (-11.3, -7.9, -4.1, 3.7, 6.1, 9.7)


def missing_mean_cm2(lines: LineList, band_means: BandMeans, temperature_k: float) -> np.ndarray:
    """Mean cross section that the lines lack in each band of the band means.

    Parameters
    ----------
    lines : LineList
    band_means : BandMeans
    temperature_k : float

    Returns
    -------
    ndarray, shape (B,)
        cm2/molecule, zero where the lines hold as much as the band means or more.
    """
    edges = np.append(
        band_means.centre_cm1 - BAND_WIDTH_CM1 / 2, band_means.centre_cm1[-1] + BAND_WIDTH_CM1 / 2
    )
    strength = lines.intensity_at(temperature_k)
    summed, _ = np.histogram(lines.wavenumber_cm1, bins=edges, weights=strength)
    have = summed / BAND_WIDTH_CM1
    ln_mean = interpolate_temperature(
        np.log(band_means.cross_section_cm2), band_means.temperature_k, temperature_k
    )
    want = np.exp(ln_mean)
    return np.maximum(want - have, 0.0)


def completed(
    cross_section_cm2: np.ndarray, grid_cm1: np.ndarray, missing_cm2: np.ndarray, centre_cm1: np.ndarray
) -> np.ndarray:
    """Add the missing mean to a cross section on a fine grid, structured like displaced copies of it.

    Parameters
    ----------
    cross_section_cm2, grid_cm1 : ndarray, shape (G,)
        Uniform grid.
    missing_cm2, centre_cm1 : ndarray, shape (B,)
        From `missing_mean_cm2`, and the band centres it belongs to.

    Returns
    -------
    ndarray, shape (G,)
    """
    extra = np.interp(grid_cm1, centre_cm1, missing_cm2, left=0.0, right=0.0)
    if not np.any(extra > 0):
        return cross_section_cm2
    step = grid_cm1[1] - grid_cm1[0]
    window = max(int(BAND_WIDTH_CM1 / step), 1)
    local_mean = uniform_filter1d(cross_section_cm2, min(window, len(grid_cm1)), mode="reflect")
    pattern = np.where(local_mean > 0, cross_section_cm2 / np.maximum(local_mean, 1e-60), 1.0)
    copies = np.mean([np.roll(pattern, int(shift / step)) for shift in COPY_SHIFTS_CM1], axis=0)
    return cross_section_cm2 + extra * copies
