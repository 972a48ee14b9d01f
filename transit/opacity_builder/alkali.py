"""Resonance doublets of sodium and potassium with far wings."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from scipy.special import voigt_profile

from transit.opacity_builder.profiles import doppler_hwhm_cm1
from transit.units import ATM_BAR, LIGHT_SPEED_M_S

# pi e^2 / (m_e c^2), cm: integrated cross section per unit oscillator strength over wavenumber.
STRENGTH_PER_F_CM = 8.85282e-13
WING_CUTOFF_CM1 = 1500.0
MOLAR_MASS = {"Na": 22.98977, "K": 39.0983}
# Half widths in H2/He at 2000 K (cm-1/atm, HWHM), falling as T^-0.7; from memory, after the impact widths used
# in brown-dwarf work (Burrows, Marley & Sharp 2000, ApJ 531, 438).
GAMMA_2000K = {"Na": 0.071, "K": 0.14}


def read_doublet(path: Path, atom: str) -> pd.DataFrame:
    """Read the two resonance lines of an atom: columns centre_cm1, f_lu, damping_s1."""
    table = pd.read_csv(path)
    names = {"nu_vac_cm-1": "centre_cm1", "f_lu": "f_lu", "damping_gamma_rad_s-1": "damping_s1"}
    return table[table["species"] == f"{atom} I"].rename(columns=names)[list(names.values())]


def doublet_cross_section_cm2(
    grid_cm1: np.ndarray,
    doublet: pd.DataFrame,
    atom: str,
    temperature_k: float,
    pressure_bar: float,
    cutoff_cm1: float = WING_CUTOFF_CM1,
) -> np.ndarray:
    """Voigt profiles of the two lines, cut at a declared distance.

    Notes
    -----
    Integrated cross section pi e^2/(m_e c^2) f. The far wings in H2 are not Lorentzian (Allard et al. 2016, A&A
    589, A21; 2019, A&A 628, A120): these are approximate there.
    """
    total = np.zeros_like(grid_cm1)
    for line in doublet.itertuples(index=False):
        natural = line.damping_s1 / (4 * np.pi * 100 * LIGHT_SPEED_M_S)
        gamma = natural + GAMMA_2000K[atom] * (2000.0 / temperature_k) ** 0.7 * pressure_bar / ATM_BAR
        sigma = doppler_hwhm_cm1(line.centre_cm1, temperature_k, MOLAR_MASS[atom]) / np.sqrt(2 * np.log(2))
        distance = grid_cm1 - line.centre_cm1
        profile = np.where(np.abs(distance) < cutoff_cm1, voigt_profile(distance, sigma, gamma), 0.0)
        total += STRENGTH_PER_F_CM * line.f_lu * profile
    return total
