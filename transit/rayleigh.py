"""Rayleigh scattering cross sections of the background gases, cm2 per molecule."""

from __future__ import annotations

import numpy as np

LOSCHMIDT_0C_CM3 = 2.686780e19  # number density at 0 C and 1 atm
LOSCHMIDT_15C_CM3 = 2.546899e19  # at 15 C and 1 atm


def _from_index(wavelength_um, index_minus_1, density_cm3, king_factor):
    """24 pi^3 nu^4 / N^2 ((n^2-1)/(n^2+2))^2 F, with n and N at the same temperature and pressure."""
    nu = 1e4 / wavelength_um
    n2 = (1 + index_minus_1) ** 2
    return 24 * np.pi**3 * nu**4 / density_cm3**2 * ((n2 - 1) / (n2 + 2)) ** 2 * king_factor


def hydrogen_cm2(wavelength_um):
    """H2: Dalgarno & Williams 1962, ApJ 136, 690."""
    angstrom = np.asarray(wavelength_um, float) * 1e4
    return 8.14e-13 / angstrom**4 + 1.28e-6 / angstrom**6 + 1.61 / angstrom**8


def helium_cm2(wavelength_um):
    """He: refractivity of Mansfield & Peck 1969, JOSA 59, 199 (0 C), King factor 1."""
    inverse2 = np.asarray(wavelength_um, float) ** -2.0
    return _from_index(wavelength_um, 0.01470091 / (423.98 - inverse2), LOSCHMIDT_0C_CM3, 1.0)


def nitrogen_cm2(wavelength_um):
    """N2: refractivity and King factor given by Sneep & Ubachs 2005, JQSRT 92, 293 (15 C)."""
    nu = 1e4 / np.asarray(wavelength_um, float)
    low = 1e-8 * (6498.2 + 307.4335e12 / (14.4e9 - nu**2))
    high = 1e-8 * (5677.465 + 318.81874e12 / (14.4e9 - nu**2))
    return _from_index(
        wavelength_um, np.where(nu < 21360, low, high), LOSCHMIDT_15C_CM3, 1.034 + 3.17e-12 * nu**2
    )


def carbon_dioxide_cm2(wavelength_um):
    """CO2: refractivity and King factor given by Sneep & Ubachs 2005, JQSRT 92, 293 (15 C)."""
    # The last term has the pole of the 4.3 um band: beyond 1.8 um the refractivity is held at its value there.
    nu = 1e4 / np.asarray(wavelength_um, float)
    nu2 = np.maximum(nu, 1e4 / 1.8) ** 2
    index = 1.1427e3 * (
        5799.25 / (128908.9**2 - nu2)
        + 120.05 / (89223.8**2 - nu2)
        + 5.3334 / (75037.5**2 - nu2)
        + 4.3244 / (67837.7**2 - nu2)
        + 1.218145e-5 / (2418.136**2 - nu2)
    )
    return _from_index(wavelength_um, index, LOSCHMIDT_15C_CM3, 1.1364 + 25.3e-12 * nu**2)


def water_cm2(wavelength_um):
    """H2O vapour: constant refractivity 2.52e-4 at 0 C and 1 atm (from memory), King factor 1."""
    wavelength_um = np.asarray(wavelength_um, float)
    return _from_index(wavelength_um, np.full_like(wavelength_um, 2.52e-4), LOSCHMIDT_0C_CM3, 1.0)


_CM2 = {
    "H2": hydrogen_cm2, "He": helium_cm2, "N2": nitrogen_cm2, "CO2": carbon_dioxide_cm2, "H2O": water_cm2,
}  # fmt: skip


def mixture_cm2(wavelength_um, fractions: dict[str, float]):
    """Cross section per molecule of a mixture.

    Parameters
    ----------
    wavelength_um : array_like, shape (N,)
    fractions : dict
        Number fraction by gas.

    Returns
    -------
    ndarray, shape (N,)
        cm2.
    """
    return sum(fraction * _CM2[gas](wavelength_um) for gas, fraction in fractions.items())
