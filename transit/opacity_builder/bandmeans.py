"""Band means of hot gases (statistical narrow-band parameters): reading, extending to cold gas, fine structure."""

from __future__ import annotations

import gzip
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from transit.errors import InputFileError
from transit.units import BOLTZMANN_J_K

BAND_WIDTH_CM1 = 25.0
STANDARD_ATMOSPHERE_PA = 101325.0


@dataclass(frozen=True)
class BandMeans:
    """Mean cross section and line density in bands of 25 cm-1.

    Parameters
    ----------
    centre_cm1 : ndarray, shape (B,)
    temperature_k : ndarray, shape (T,)
    cross_section_cm2 : ndarray, shape (B, T)
        Mean over the band.
    lines_per_cm1 : ndarray, shape (B, T)
        Inverse mean line spacing of the Malkmus model.
    """

    centre_cm1: np.ndarray
    temperature_k: np.ndarray
    cross_section_cm2: np.ndarray
    lines_per_cm1: np.ndarray

    def ln_mean_at(self, wavenumber_cm1: np.ndarray, temperature_k: float) -> np.ndarray:
        """ln of the mean cross section as a continuous curve that keeps the mean of every band; -inf outside."""
        nodes = interpolate_temperature(np.log(self.cross_section_cm2), self.temperature_k, temperature_k)
        return self._at(keep_band_means(nodes, self.centre_cm1), wavenumber_cm1)

    def lines_per_cm1_at(self, wavenumber_cm1: np.ndarray, temperature_k: float) -> np.ndarray:
        """Inverse mean line spacing, interpolated between band centres."""
        ln_density = np.log(np.maximum(self.lines_per_cm1, 1e-3))
        nodes = interpolate_temperature(ln_density, self.temperature_k, temperature_k)
        return np.exp(self._at(nodes, wavenumber_cm1))

    def _at(self, by_band, wavenumber_cm1):
        half = BAND_WIDTH_CM1 / 2
        inside = (wavenumber_cm1 >= self.centre_cm1[0] - half) & (
            wavenumber_cm1 <= self.centre_cm1[-1] + half
        )
        return np.where(inside, np.interp(wavenumber_cm1, self.centre_cm1, by_band), -np.inf)


def keep_band_means(ln_mean: np.ndarray, centre_cm1: np.ndarray) -> np.ndarray:
    """Node values at the band centres such that straight lines of ln k between them keep every band's mean.

    Straight lines through the means themselves would cut off narrow peaks: 16 per cent of the 4.3 um band of CO2
    at 300 K.

    Parameters
    ----------
    ln_mean, centre_cm1 : ndarray, shape (B,)
        ln of the mean of each band, and its centre.

    Returns
    -------
    ndarray, shape (B,)
    """
    inside = (np.arange(25) + 0.5) / 25 - 0.5
    points = centre_cm1[:, None] + BAND_WIDTH_CM1 * inside
    nodes = ln_mean.copy()
    for _ in range(12):
        means = np.exp(np.interp(points, centre_cm1, nodes)).mean(axis=1)
        # Damped steps and a limit: next to a band without lines the correction would otherwise run away.
        nodes += 0.7 * np.clip(ln_mean - np.log(means), -1.0, 1.0)
        nodes = np.clip(nodes, ln_mean - 2.0, ln_mean + 2.0)
    return nodes


def interpolate_temperature(ln_values: np.ndarray, grid_k: np.ndarray, temperature_k: float) -> np.ndarray:
    """Interpolate ln values (B, T) linearly in 1/T; below the grid continue the slope of its first two nodes.

    Notes
    -----
    ln k is nearly linear in 1/T (a Boltzmann factor with an effective lower energy). Against line sums in bands above
    1e-23 cm2 the continuation from 300 and 400 K scatters by 0.1 (rms of ln k) at 250 K, 0.3-0.5 at 200 K and about 1
    at 150 K; parabolas and explicit partition functions do no better. Above the grid the last node is held.
    """
    x = 1 / grid_k
    target = 1 / min(temperature_k, grid_k[-1])
    upper = int(np.clip(np.searchsorted(-x, -target), 1, len(x) - 1))
    share = (target - x[upper - 1]) / (x[upper] - x[upper - 1])
    return ln_values[:, upper - 1] * (1 - share) + ln_values[:, upper] * share


def read_band_means(path: Path) -> BandMeans:
    """Read narrow-band parameters of the EM2C form.

    Parameters
    ----------
    path : Path
        gzip text: rows of band centre and k(T) in cm-1 atm-1, then as many rows of band centre and 1/delta(T) in
        cm; temperatures from 300 K in steps of 100 K.

    Raises
    ------
    InputFileError
        If the rows do not come in two equal blocks.

    Notes
    -----
    Riviere & Soufiani 2012, Int. J. Heat Mass Transfer 55, 3349. Cross section = k k_B T / (1 atm).
    """
    with gzip.open(path, "rt") as stream:
        lines = [line.split() for line in stream if line.strip()]
    try:
        rows = [[float(word) for word in line] for line in lines]
    except ValueError as error:
        raise InputFileError(f"expected numbers only ({error}).", str(path)) from error
    lengths = {len(row) for row in rows}
    half = len(rows) // 2
    if len(lengths) != 1 or len(rows) % 2 or [r[0] for r in rows[:half]] != [r[0] for r in rows[half:]]:
        raise InputFileError(
            "expected two blocks of rows with the same band centres (k, then 1/delta).", str(path)
        )
    values = np.array(rows)
    temperature_k = 300.0 + 100.0 * np.arange(values.shape[1] - 1)
    per_atm = np.maximum(values[:half, 1:], 1e-16)
    return BandMeans(
        centre_cm1=values[:half, 0],
        temperature_k=temperature_k,
        cross_section_cm2=per_atm * BOLTZMANN_J_K * temperature_k / STANDARD_ATMOSPHERE_PA * 1e6,
        lines_per_cm1=values[half:, 1:],
    )


# Effective width in the Malkmus form, fitted to the distributions of summed lines (CO2: 2000-2304, 3551-3605,
# 4000-5050, 6000-6500 cm-1 at 300, 500, 700 K; CH4: 2731-3254, 3400-4100 cm-1 at 300-500 K; 1e-5 to 1 atm).
# ln width = ln[exp(a) g + exp(b) g^e d^(1-e) (d/delta)^q], g Lorentz and d Doppler half width, cm-1.
EFFECTIVE_WIDTH = {
    "CO2": (-0.2996, -1.7468, 0.2802, 0.3039),
    "CH4": (-0.2261, -0.8661, 0.3350, 0.0805),
}


def effective_width_cm1(species: str, lorentz_cm1, doppler_cm1, lines_per_cm1):
    """Line width that gives the Malkmus distribution the mean ln k of real lines, cm-1.

    Notes
    -----
    The Malkmus form knows Lorentz lines of one kind only: with the Lorentz width it leaves the gaps between strong
    lines too empty wherever many weak lines fill them, with the Voigt width far too full. The form here was fitted
    to summed lines; in single bands of 25 cm-1 it leaves an error in <ln k> of 0.2 at 1 atm, 0.7 at 0.01 atm and
    1.2 at 1e-4 atm (rms), most of it in weak bands.
    """
    a, b, e, q = EFFECTIVE_WIDTH[species]
    ln_g, ln_d = np.log(lorentz_cm1), np.log(doppler_cm1)
    return np.exp(
        np.logaddexp(a + ln_g, b + e * ln_g + (1 - e) * ln_d + q * np.log(doppler_cm1 * lines_per_cm1))
    )
