"""Absorption cross sections of many lines on a fine grid: Voigt profiles added by convolution."""

from __future__ import annotations

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft
from scipy.special import voigt_profile

from transit.opacity_builder.linelists import LineList
from transit.units import ATM_BAR

LINE_CUTOFF_CM1 = 25.0  # the usual cut for molecules below 200 bar: Gharib-Nezhad et al. 2024, RASTI 3, 44
WIDTH_CLASSES = 5


def doppler_hwhm_cm1(wavenumber_cm1, temperature_k: float, molar_mass: float):
    """Doppler half width at half maximum, cm-1: 3.5812e-7 nu sqrt(T/M)."""
    return 3.5812e-7 * wavenumber_cm1 * np.sqrt(temperature_k / molar_mass)


def fine_grid(low_cm1: float, high_cm1: float, temperature_k: float, molar_mass: float) -> np.ndarray:
    """Uniform grid with two points in a Doppler half width at the middle of the interval."""
    step = doppler_hwhm_cm1(0.5 * (low_cm1 + high_cm1), temperature_k, molar_mass) / 2
    return low_cm1 + step * (np.arange(int((high_cm1 - low_cm1) / step)) + 0.5)


class SegmentSpectrum:
    """Lines of one stretch of wavenumber at one temperature, ready to be broadened at any pressure.

    The stretch must be narrow (a few per cent) because the Doppler width of its middle serves for all its lines.
    Lines are put on the nearest grid point and shared between two of a few Lorentz width classes such that the
    far wing stays exact; each class is then convolved with its Voigt profile.

    Parameters
    ----------
    lines : LineList
    low_cm1, high_cm1 : float
        Limits of the stretch; lines up to the cut-off beyond them are included.
    temperature_k : float
    """

    def __init__(self, lines: LineList, low_cm1: float, high_cm1: float, temperature_k: float):
        near = lines.within(low_cm1 - LINE_CUTOFF_CM1, high_cm1 + LINE_CUTOFF_CM1)
        self.grid_cm1 = fine_grid(low_cm1, high_cm1, temperature_k, lines.molar_mass)
        step = self.grid_cm1[1] - self.grid_cm1[0]
        self.step_cm1 = step
        self._pad = int(np.ceil(LINE_CUTOFF_CM1 / step))
        n = len(self.grid_cm1) + 2 * self._pad
        self._n_fft = next_fast_len(n + 2 * self._pad + 1, real=True)
        self.sigma_cm1 = doppler_hwhm_cm1(
            0.5 * (low_cm1 + high_cm1), temperature_k, lines.molar_mass
        ) / np.sqrt(2 * np.log(2))
        gamma = np.maximum(near.gamma * (296.0 / temperature_k) ** near.gamma_exponent, 1e-3)
        strength = near.intensity_at(temperature_k)
        self.empty = len(gamma) == 0
        if self.empty:
            return
        low, high = gamma.min() * 0.999, gamma.max() * 1.001
        self.class_gamma = np.geomspace(low, high, WIDTH_CLASSES)
        upper = np.clip(np.searchsorted(self.class_gamma, gamma), 1, WIDTH_CLASSES - 1)
        g0, g1 = self.class_gamma[upper - 1], self.class_gamma[upper]
        share = (gamma - g0) / (g1 - g0)
        place = np.rint((near.wavenumber_cm1 - self.grid_cm1[0]) / step).astype(int) + self._pad
        inside = (place >= 0) & (place < n)
        self._transforms = []
        for k in range(WIDTH_CLASSES):
            weight = np.where(upper == k, share, 0) + np.where(upper - 1 == k, 1 - share, 0)
            comb = np.bincount(place[inside], weights=(strength * weight)[inside], minlength=n)
            self._transforms.append(rfft(comb, self._n_fft))

    def cross_section_cm2(self, pressure_bar: float) -> np.ndarray:
        """Cross section on `grid_cm1` at a pressure, cm2/molecule."""
        if self.empty:
            return np.zeros_like(self.grid_cm1)
        offset = self.step_cm1 * np.arange(-self._pad, self._pad + 1)
        total = 0
        for gamma, transform in zip(self.class_gamma, self._transforms, strict=True):
            kernel = voigt_profile(offset, self.sigma_cm1, gamma * pressure_bar / ATM_BAR)
            total = total + transform * rfft(kernel, self._n_fft)
        full = irfft(total, self._n_fft)
        return full[2 * self._pad : 2 * self._pad + len(self.grid_cm1)]
