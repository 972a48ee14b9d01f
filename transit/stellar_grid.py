"""One grid of stellar spectra: fluxes by temperature, continued with scaled Planck curves where it has none."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import PchipInterpolator

from transit.units import SECOND_RADIATION_CM_K

BINS_PER_E_FOLD = 200
JOIN_BINS = 5  # bins over which a Planck curve is scaled to the model beside it
PLANCK_STEP_K = 100.0


@dataclass(frozen=True, eq=False)
class StellarGrid:
    """Mean fluxes of stars of one gravity in neighbouring wavelength bins.

    Parameters
    ----------
    name : str
        For reports.
    edges_um : ndarray, shape (L + 1,)
        Increasing.
    teff_k : ndarray, shape (T,)
        Increasing.
    ln_flux : ndarray, shape (T, L)
        ln of the flux per wavelength, W m-2 um-1 (or any unit common to all temperatures); NaN where there is no model.
    """

    name: str
    edges_um: np.ndarray
    teff_k: np.ndarray
    ln_flux: np.ndarray

    @property
    def centre_um(self) -> np.ndarray:
        """Centres of the bins, shape (L,)."""
        return (self.edges_um[1:] + self.edges_um[:-1]) / 2

    @property
    def covered(self) -> np.ndarray:
        """Where a model stands behind the flux: bool, shape (T, L)."""
        return np.isfinite(self.ln_flux)


def ln_planck(wavelength_um, temperature_k) -> np.ndarray:
    """ln of Planck's flux per wavelength up to a constant common to all wavelengths and temperatures.

    Parameters
    ----------
    wavelength_um, temperature_k : array_like
        Broadcast against each other.

    Returns
    -------
    ndarray
    """
    x = SECOND_RADIATION_CM_K * 1e4 / (np.asarray(wavelength_um) * np.asarray(temperature_k))
    return -5 * np.log(wavelength_um) - x - np.log(-np.expm1(-x))


def widened(
    grid: StellarGrid, lowest_um: float, highest_um: float, coolest_k: float, hottest_k: float
) -> StellarGrid:
    """Add bins and temperatures without a flux (NaN), so that the grid spans the ranges asked for.

    Parameters
    ----------
    grid : StellarGrid
    lowest_um, highest_um, coolest_k, hottest_k : float

    Returns
    -------
    StellarGrid
    """
    step = 1 / BINS_PER_E_FOLD
    edges, teff_k = grid.edges_um, grid.teff_k
    below = max(int(np.ceil(np.log(edges[0] / lowest_um) / step)), 0)
    above = max(int(np.ceil(np.log(highest_um / edges[-1]) / step)), 0)
    edges = np.concatenate(
        [
            edges[0] * np.exp(-step * np.arange(below, 0, -1)),
            edges,
            edges[-1] * np.exp(step * np.arange(1, above + 1)),
        ]
    )
    cooler = _temperatures(coolest_k, teff_k[0])[:-1]
    hotter = _temperatures(teff_k[-1], hottest_k)[1:]
    ln_flux = np.pad(grid.ln_flux, ((len(cooler), len(hotter)), (below, above)), constant_values=np.nan)
    return replace(grid, edges_um=edges, teff_k=np.concatenate([cooler, teff_k, hotter]), ln_flux=ln_flux)


def _temperatures(low_k: float, high_k: float) -> np.ndarray:
    """Evenly spaced temperatures with both ends; none when the range is empty."""
    if low_k >= high_k:
        return np.array([])
    return np.linspace(low_k, high_k, int(np.ceil((high_k - low_k) / PLANCK_STEP_K)) + 1)


def with_planck(grid: StellarGrid) -> StellarGrid:
    """Continue a grid into temperatures and wavelengths that no model covers.

    In temperature the flux of the nearest covered temperature follows the ratio of Planck curves; each temperature is
    then scaled so that it joins its own models where they end in wavelength. Bins that no model covers at any
    temperature are Planck curves scaled to the nearest bins. A Planck curve has no molecular bands: what such a flux
    says about a band is that of the nearest temperature, or nothing.

    Parameters
    ----------
    grid : StellarGrid

    Returns
    -------
    StellarGrid
        Finite everywhere.
    """
    covered = grid.covered
    planck = ln_planck(grid.centre_um, grid.teff_k[:, None])
    inside = np.flatnonzero(covered.any(axis=0))
    rows = np.arange(len(grid.teff_k))
    # Models cover one unbroken range of temperatures in every bin, so the nearest end is the nearest model.
    coolest = covered[:, inside].argmax(axis=0)
    hottest = rows[-1] - covered[::-1, inside].argmax(axis=0)
    nearest = np.clip(rows[:, None], coolest, hottest)
    filled = grid.ln_flux.copy()
    filled[:, inside] = (grid.ln_flux - planck)[nearest, inside] + planck[:, inside]
    for row in np.flatnonzero(covered.any(axis=1) & ~covered[:, inside].all(axis=1)):
        _join_row(filled, grid.ln_flux, planck, row, dict(zip(inside, nearest[row], strict=True)))
    ends = ((slice(None, inside[0]), inside[:JOIN_BINS]), (slice(inside[-1] + 1, None), inside[-JOIN_BINS:]))
    for outside, join in ends:
        scale = (filled[:, join] - planck[:, join]).mean(axis=1)
        filled[:, outside] = planck[:, outside] + scale[:, None]
    return replace(grid, ln_flux=filled)


def _join_row(filled, ln_flux, planck, row: int, nearest: dict[int, int]) -> None:
    """Scale, in place, the filled bins of one temperature that lie beside its models so that the two meet."""
    known = np.flatnonzero(np.isfinite(ln_flux[row]))
    low_side = [column for column in nearest if column < known[0]]
    high_side = [column for column in nearest if column > known[-1]]
    for outside, beside, join in (
        (low_side, known[0] - 1, known[:JOIN_BINS]),
        (high_side, known[-1] + 1, known[-JOIN_BINS:]),
    ):
        if outside:
            other = nearest[beside]
            as_filled = ln_flux[other, join] + planck[row, join] - planck[other, join]
            filled[row, outside] += (ln_flux[row, join] - as_filled).mean()


def photon_flux_in_bins(
    grid: StellarGrid, wavelength_um: np.ndarray, half_width_um: np.ndarray
) -> np.ndarray:
    """Photon-weighted mean flux in bins, integral(lambda F dlambda) / integral(lambda dlambda).

    The integral up to a wavelength is interpolated monotonically between the grid's edges, so that bins narrower than
    the grid's get a smooth flux and wide ones keep every photon.

    Parameters
    ----------
    grid : StellarGrid
        Finite over the bins.
    wavelength_um, half_width_um : ndarray, shape (N,)

    Returns
    -------
    ndarray, shape (T, N)
        In the unit of the grid's flux.
    """
    low, high = wavelength_um - half_width_um, wavelength_um + half_width_um
    first = max(int(np.searchsorted(grid.edges_um, low.min(), side="right")) - 3, 0)
    last = min(int(np.searchsorted(grid.edges_um, high.max())) + 2, len(grid.edges_um) - 1)
    edges = grid.edges_um[first : last + 1]
    photons = np.exp(grid.ln_flux[:, first:last]) * np.diff(edges**2) / 2
    total = np.concatenate([np.zeros((len(photons), 1)), np.cumsum(photons, axis=1)], axis=1)
    integral = PchipInterpolator(edges, total, axis=1)
    return (integral(high) - integral(low)) / ((high**2 - low**2) / 2)
