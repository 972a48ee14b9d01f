"""The slow judge: bin heights of an isothermal limb from summed lines and chords, layer by layer.

It shares nothing with the package but the constants: Voigt lines are added one by one at sampled wavenumbers,
extinction is integrated along every chord through spherical shells, and the annuli are added up. No distributions,
no closed forms, no interpolation in temperature.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.interpolate import CubicSpline
from scipy.special import voigt_profile

from transit.units import ATM_BAR, ATOMIC_MASS_KG, BOLTZMANN_J_K, SECOND_RADIATION_CM_K

DATA = Path(__file__).parent / "reference" / "data"
CUT_CM1 = 25.0
NEAR_CM1 = 1.0  # beyond it a line of infrared Doppler width is Lorentzian to 1e-3 and better
TOP_BAR = 1e-9
BOTTOM_BAR = 10.0
LEVELS_PER_E_FOLD = 6
REFERENCE_BAR = 0.01
# Atomic weights: CIAAW abridged standard atomic weights, 2021.
MASS = {"H2": 2.016, "He": 4.0026, "H2O": 18.015, "CO": 28.010, "CO2": 44.009, "CH4": 16.043}
HITRAN_NUMBER = {"H2O": 1, "CO2": 2, "CO": 5, "CH4": 6}
LINE_PRESSURES_BAR = 10.0 ** (np.arange(-24, 4) / 3.0)


@dataclass(frozen=True)
class Lines:
    """Columns of an excerpt of a line list, with the partition sums of its isotopologues."""

    nu: np.ndarray
    intensity: np.ndarray
    energy: np.ndarray
    gamma: np.ndarray
    exponent: np.ndarray
    isotopologue: np.ndarray
    mass: float
    partition: dict[int, tuple[np.ndarray, np.ndarray]]


def excerpt(species: str) -> Lines:
    """Read the lines of a species from tests/reference/data."""
    table = pd.read_csv(DATA / f"lines_{species}.csv.gz", comment="#")
    sums = pd.read_csv(DATA / "partition_sums.csv", comment="#")
    number = HITRAN_NUMBER[species]
    kinds = sorted(set(table["isotopologue"]))
    partition = {
        k: (sums["T_K"].to_numpy(float), sums[f"{species}_{number}_{k}"].to_numpy(float)) for k in kinds
    }
    columns = [table[name].to_numpy(float) for name in table.columns[:5]]
    return Lines(*columns, table["isotopologue"].to_numpy(int), MASS[species], partition)


def intensities(lines: Lines, temperature_k: float) -> np.ndarray:
    """S(T), cm/molecule, by the HITRAN definition (Rothman et al. 1998, JQSRT 60, 665)."""
    boltzmann = np.exp(-SECOND_RADIATION_CM_K * lines.energy * (1 / temperature_k - 1 / 296.0))
    emission = (1 - np.exp(-SECOND_RADIATION_CM_K * lines.nu / temperature_k)) / (
        1 - np.exp(-SECOND_RADIATION_CM_K * lines.nu / 296.0)
    )
    ratio = np.empty_like(lines.nu)
    for kind, (grid_k, q) in lines.partition.items():
        spline = CubicSpline(grid_k, q)
        ratio[lines.isotopologue == kind] = spline(296.0) / spline(temperature_k)
    return lines.intensity * ratio * boltzmann * emission


def ln_cross_sections(
    lines: Lines,
    points_cm1: np.ndarray,
    temperature_k: float,
    pressures_bar: np.ndarray = LINE_PRESSURES_BAR,
    near_cm1: float = NEAR_CM1,
) -> np.ndarray:
    """ln of the sum of all lines within 25 cm-1 of each point (increasing), shape (points, pressures).

    Closer than `near_cm1` the profile is Voigt, beyond it Lorentz.
    """
    strength = intensities(lines, temperature_k)
    sigma = lines.nu * np.sqrt(BOLTZMANN_J_K * temperature_k / (lines.mass * ATOMIC_MASS_KG)) / 299792458.0
    width_atm = lines.gamma * (296.0 / temperature_k) ** lines.exponent
    out = np.empty((len(points_cm1), len(pressures_bar)))
    for start in range(0, len(points_cm1), 40):
        points = points_cm1[start : start + 40]
        use = slice(*np.searchsorted(lines.nu, [points[0] - CUT_CM1, points[-1] + CUT_CM1]))
        distance = points[:, None] - lines.nu[None, use]
        square = distance**2
        weight = np.where(np.abs(distance) < CUT_CM1, strength[None, use], 0.0)
        point, line = np.nonzero(np.abs(distance) < near_cm1)
        close = distance[point, line]
        close_sigma, close_weight = sigma[use][line], weight[point, line]
        far_weight = np.where(np.abs(distance) < near_cm1, 0.0, weight)
        for column, pressure in enumerate(pressures_bar):
            gamma = width_atm[use] * pressure / ATM_BAR
            total = (far_weight / (square + gamma**2)) @ (gamma / np.pi)
            voigt = close_weight * voigt_profile(close, close_sigma, gamma[line])
            total += np.bincount(point, weights=voigt, minlength=len(points))
            out[start : start + 40, column] = np.log(total)
    return out


def hydrogen_rayleigh_cm2(points_cm1: np.ndarray) -> np.ndarray:
    """Rayleigh scattering of H2: Dalgarno & Williams 1962, ApJ 136, 690."""
    angstrom = 1e8 / points_cm1
    return 8.14e-13 / angstrom**4 + 1.28e-6 / angstrom**6 + 1.61 / angstrom**8


def helium_rayleigh_cm2(points_cm1: np.ndarray) -> np.ndarray:
    """Rayleigh scattering of He from its static polarizability, 0.205 cubic Angstrom (CRC Handbook)."""
    return 128 * np.pi**5 / 3 * 2.05e-25**2 * points_cm1**4


def mean_weight(vmr: dict[str, float]) -> float:
    """Mean molecular weight of hydrogen and helium (0.85 to 0.15 by number) with absorbers."""
    share = {"H2": 0.85 * (1 - sum(vmr.values())), "He": 0.15 * (1 - sum(vmr.values()))}
    return sum(MASS[name] * x for name, x in (share | vmr).items())


def scale_height_m(vmr: dict[str, float], temperature_k: float, gravity: float) -> float:
    """Pressure scale height k T / (mu m_u g)."""
    return BOLTZMANN_J_K * temperature_k / (mean_weight(vmr) * ATOMIC_MASS_KG * gravity)


def point_heights(
    ln_k: dict[str, np.ndarray],
    vmr: dict[str, float],
    points_cm1: np.ndarray,
    temperature_k: float,
    radius_m: float,
    gravity: float,
    deck_bar: float = BOTTOM_BAR,
    pair_cm5: float = 0.0,
    levels_per_e_fold: int = LEVELS_PER_E_FOLD,
) -> np.ndarray:
    """Effective height of each point over the 10 mbar radius, in scale heights at that radius.

    `ln_k` maps species to `ln_cross_sections` at `LINE_PRESSURES_BAR` (species without lines here are left out);
    `pair_cm5` is the collision-induced
    coefficient of H2 with H2. Everything below the deck is opaque.
    """
    background = 1 - sum(vmr.values())
    share = {"H2": 0.85 * background, "He": 0.15 * background}
    scale_m = scale_height_m(vmr, temperature_k, gravity)
    ln_p = np.linspace(
        np.log(deck_bar), np.log(TOP_BAR), int(np.log(deck_bar / TOP_BAR) * levels_per_e_fold) + 1
    )
    # Hydrostatic, gravity falling as r^-2: ln(P/P0) = -(R/H) (1 - R/r).
    r = radius_m / (1 - (np.log(REFERENCE_BAR) - ln_p) * scale_m / radius_m)
    density_cm3 = np.exp(ln_p) * 0.1 / (BOLTZMANN_J_K * temperature_k)
    rayleigh = share["H2"] * hydrogen_rayleigh_cm2(points_cm1) + share["He"] * helium_rayleigh_cm2(points_cm1)
    k = rayleigh[:, None] + pair_cm5 * share["H2"] ** 2 * density_cm3[None, :]
    inside = np.clip(ln_p, *np.log(LINE_PRESSURES_BAR[[0, -1]]))
    for name, values in ln_k.items():
        k = k + vmr[name] * np.exp(CubicSpline(np.log(LINE_PRESSURES_BAR), values, axis=1)(inside))
    ln_extinction = np.log(100 * density_cm3 * k)  # per metre
    tau = np.exp(ln_extinction) @ chord_weights(r).T
    annuli = np.trapezoid(2 * r * -np.expm1(-tau), r, axis=1)
    return (np.sqrt(r[0] ** 2 + annuli) - radius_m) / scale_m


def chord_weights(r: np.ndarray) -> np.ndarray:
    """Weights W with tau(r_i) = sum_j W_ij extinction_j for an extinction that is linear in r between the levels."""
    n = len(r)
    weights = np.zeros((n, n))
    for i in range(n - 1):
        s = np.sqrt(np.maximum(r[i:] ** 2 - r[i] ** 2, 0.0))
        length = np.diff(s)
        # Integral of r along the chord: r s / 2 + b^2 / 2 ln(r + s).
        moment = np.diff(r[i:] * s / 2 + r[i] ** 2 / 2 * np.log((r[i:] + s) / r[i]))
        step = np.diff(r[i:])
        upper = (moment - r[i:-1] * length) / step
        weights[i, i:-1] += 2 * (length - upper)
        weights[i, i + 1 :] += 2 * upper
    return weights


def sample_points(low_cm1: float, high_cm1: float, count: int, seed: int) -> np.ndarray:
    """Wavenumbers in a bin: one at random in each of `count` strata of equal width in wavelength; increasing."""
    share = (np.arange(count) + np.random.default_rng(seed).random(count)) / count
    return np.sort(1 / (1 / low_cm1 + share * (1 / high_cm1 - 1 / low_cm1)))


def mean_and_error(heights: np.ndarray) -> tuple[float, float]:
    """Mean over the points of a bin, and its standard error from differences of neighbouring strata."""
    pairs = heights[: len(heights) // 2 * 2].reshape(-1, 2)
    return float(heights.mean()), float(np.sqrt((np.diff(pairs, axis=1) ** 2).sum()) / (2 * len(pairs)))
