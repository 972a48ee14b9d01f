"""Opacity that a line list lacks when hot, taken from band means and spread like shifted copies of the lines."""

from __future__ import annotations

import numpy as np
from scipy.ndimage import uniform_filter1d

from transit.opacity_builder.bandmeans import BAND_WIDTH_CM1, BandMeans, interpolate_temperature
from transit.opacity_builder.linelists import LineList

# Hot bands are copies of the cold ones, displaced by anharmonicity: a few displaced copies fill the gaps between the
# cold lines as they do. Three copies restored <ln k> of water lists that had been cut short to within 0.1-0.5 (the
# cut lists alone were 0.8-3.4 too low; six copies 0.6-1.2 too high). Fixed, irregular shifts in cm-1.
COPY_SHIFTS_CM1 = (-7.9, 3.7, 9.7)
# A smaller share than this is a difference between the two sources, not missing lines.
LEAST_MISSING_SHARE = 0.02
# Limits of the rescaling of the band means to the lines at 300 K, where lists are complete.
RESCALING_LIMITS = (0.5, 1.5)


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

    Notes
    -----
    The means are first scaled, band by band, to the lines at their first temperature (300 K), where the list is
    complete and any difference lies between the two sources.
    """
    edges = np.append(
        band_means.centre_cm1 - BAND_WIDTH_CM1 / 2, band_means.centre_cm1[-1] + BAND_WIDTH_CM1 / 2
    )

    def summed(at_k: float) -> np.ndarray:
        total, _ = np.histogram(lines.wavenumber_cm1, bins=edges, weights=lines.intensity_at(at_k))
        return total / BAND_WIDTH_CM1

    def measured(at_k: float) -> np.ndarray:
        ln_values = np.log(band_means.cross_section_cm2)
        return np.exp(interpolate_temperature(ln_values, band_means.temperature_k, at_k))

    cool_k = float(band_means.temperature_k[0])
    scale = np.clip(summed(cool_k) / measured(cool_k), *RESCALING_LIMITS)
    want = scale * measured(temperature_k)
    # Subtracted rather than cut off at, so that the completion sets in smoothly as the gas gets hotter.
    return np.maximum((1 - LEAST_MISSING_SHARE) * want - summed(temperature_k), 0.0)


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
