"""Gas, gravity and scale height of a planet's limb, and what one scale height means in depth."""

from __future__ import annotations

import numpy as np

from transit.records import System
from transit.units import (
    ASTRONOMICAL_UNIT_M,
    ATOMIC_MASS_KG,
    BOLTZMANN_J_K,
    GRAVITATION_SI,
    JUPITER_MASS_KG,
    JUPITER_RADIUS_M,
    SOLAR_RADIUS_M,
)

# Number fractions of the gases that make up a background. Hydrogen and helium 0.85 to 0.15 by number is close to
# the protosolar mixture (0.75 to 0.25 by mass is 0.857 to 0.143).
BACKGROUNDS = {
    "H2/He": {"H2": 0.85, "He": 0.15},
    "N2": {"N2": 1.0},
    "CO2": {"CO2": 1.0},
    "H2O": {"H2O": 1.0},
}

# Molar masses, g/mol (CIAAW abridged standard atomic weights, 2021).
MOLAR_MASS = {
    "H2": 2.016, "He": 4.0026, "N2": 28.014, "H2O": 18.015, "CO2": 44.009, "CO": 28.010, "CH4": 16.043,
    "Na": 22.990, "K": 39.098,
}  # fmt: skip

REFERENCE_PRESSURE_BAR = 0.01  # where the reference radius of the atmosphere models is defined


def gravity_m_s2(mass_kg: float, radius_m: float) -> float:
    """Surface gravity G M / R^2, m/s2."""
    return GRAVITATION_SI * mass_kg / radius_m**2


def scale_height_m(temperature_k, mean_molecular_weight, gravity):
    """Pressure scale height k T / (mu m_u g), metres (hydrostatic, ideal gas)."""
    return BOLTZMANN_J_K * temperature_k / (mean_molecular_weight * ATOMIC_MASS_KG * gravity)


def background_molecular_weight(background: str) -> float:
    """Mean molecular weight of a background gas: the sum of number fraction times molar mass."""
    return sum(x * MOLAR_MASS[gas] for gas, x in BACKGROUNDS[background].items())


def mean_molecular_weight(background: str, species: tuple[str, ...], vmr: np.ndarray) -> np.ndarray:
    """Mean molecular weight of a background gas with trace and not so trace absorbers.

    Parameters
    ----------
    background : str
    species : tuple of str, length K
    vmr : ndarray, shape (..., K)
        Volume mixing ratios; their sum must stay below 1, the background fills the rest.

    Returns
    -------
    ndarray, shape (...)
    """
    base = background_molecular_weight(background)
    masses = np.array([MOLAR_MASS[name] for name in species])
    return base + vmr @ (masses - base) if len(species) else np.full(vmr.shape[:-1], base)


def equilibrium_temperature_k(
    star_teff_k: float, star_radius_rsun: float, semi_major_axis_au: float
) -> float:
    """Equilibrium temperature for albedo 0 and full redistribution: T sqrt(R / 2a)."""
    ratio = star_radius_rsun * SOLAR_RADIUS_M / (semi_major_axis_au * ASTRONOMICAL_UNIT_M)
    return star_teff_k * np.sqrt(ratio / 2)


def observed_radius_m(system: System, median_depth: float) -> float:
    """Radius that the measured depth gives, Rs sqrt(median depth): catalogue radii mix references."""
    return system.star_radius_rsun * SOLAR_RADIUS_M * np.sqrt(median_depth)


def planet_gravity_m_s2(system: System, radius_m: float | None = None) -> float:
    """Gravity at a radius, by default the catalogue radius of the system."""
    radius_m = system.planet_radius_rjup * JUPITER_RADIUS_M if radius_m is None else radius_m
    return gravity_m_s2(system.planet_mass_mjup * JUPITER_MASS_KG, radius_m)


def scale_height_depth(radius_m: float, scale_height: float, star_radius_rsun: float) -> float:
    """Depth (fraction) that one scale height adds, 2 R H / Rs^2."""
    return 2 * radius_m * scale_height / (star_radius_rsun * SOLAR_RADIUS_M) ** 2
