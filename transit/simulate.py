"""Depth spectra with known truth: an atmosphere (or nothing) seen with given bins and errors."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from transit.models.limb import LimbState
from transit.problem import Problem
from transit.records import DepthSpectrum, System
from transit.units import JUPITER_RADIUS_M, SOLAR_RADIUS_M


@dataclass(frozen=True)
class Truth:
    """Atmosphere behind a simulated spectrum; without species it has a continuum only.

    Parameters
    ----------
    temperature_k : float
    log10_vmr : dict
        log10 of the volume mixing ratio by species.
    log10_deck_pressure_bar, log10_haze_strength, haze_exponent : float
        Grey deck; haze over the Rayleigh scattering of H2 at 0.5 um, and its exponent.
    """

    temperature_k: float
    log10_vmr: dict[str, float] = field(default_factory=dict)
    log10_deck_pressure_bar: float = 1.0
    log10_haze_strength: float = -2.0
    haze_exponent: float = -4.0


def clean_depth(
    truth: Truth | None,
    system: System,
    wavelength_um: np.ndarray,
    half_width_um: np.ndarray,
    tables: Path | None = None,
) -> np.ndarray:
    """Depths without noise.

    Parameters
    ----------
    truth : Truth or None
        None: a flat spectrum.
    system : System
        The radius of the planet is its radius at 10 mbar.
    wavelength_um, half_width_um : ndarray, shape (N,)
    tables : Path, optional

    Returns
    -------
    ndarray, shape (N,)
        Fraction.
    """
    ratio = system.planet_radius_rjup * JUPITER_RADIUS_M / (system.star_radius_rsun * SOLAR_RADIUS_M)
    level = np.full(len(wavelength_um), ratio**2)
    if truth is None:
        return level
    species = tuple(truth.log10_vmr)
    frame = DepthSpectrum(wavelength_um, half_width_um, level, 0.01 * level)
    span = (truth.temperature_k - 1.0, truth.temperature_k + 1.0)
    problem = Problem(frame, system, species, span, tables)
    state = LimbState(
        temperature_k=np.array([truth.temperature_k]),
        ln_deck_pressure_bar=np.array([truth.log10_deck_pressure_bar]) * np.log(10),
        ln_haze_strength=np.array([truth.log10_haze_strength]) * np.log(10),
        haze_exponent=np.array([truth.haze_exponent]),
        vmr=10 ** np.array([[truth.log10_vmr[name] for name in species]]).reshape(1, -1),
    )
    mean, square = problem.model.heights(state)
    return problem.likelihood.predicted_depth(mean, square, np.ones(1))[0]


def simulate_spectrum(
    truth: Truth | None,
    system: System,
    wavelength_um: np.ndarray,
    half_width_um: np.ndarray,
    depth_err: np.ndarray,
    seed: int,
    tables: Path | None = None,
) -> DepthSpectrum:
    """A spectrum with Gaussian noise from a seed.

    Parameters
    ----------
    truth : Truth or None
        None: a flat spectrum.
    system : System
    wavelength_um, half_width_um, depth_err : ndarray, shape (N,)
        Bins, and 1-sigma errors as fractions.
    seed : int
    tables : Path, optional

    Returns
    -------
    DepthSpectrum
    """
    depth = clean_depth(truth, system, wavelength_um, half_width_um, tables)
    noise = depth_err * np.random.default_rng(seed).standard_normal(len(depth))
    clean = DepthSpectrum(wavelength_um, half_width_um, depth, depth_err, source=f"simulated, seed {seed}")
    return replace(clean, depth=depth + noise)
