"""Spectroscopy against published numbers: intensities, partition sums, profiles, band strengths, collisions.

HITRAN2012 is Rothman et al. 2013, JQSRT 130, 4; HITRAN2020 is Gordon et al. 2022, JQSRT 277, 107949; TIPS is Gamache
et al. 2021, JQSRT 271, 107713; "band means" are those of Riviere & Soufiani 2012, Int. J. Heat Mass Transfer 55, 3349.
"""

from functools import cache
from itertools import pairwise

import judge
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.interpolate import CubicSpline
from scipy.special import voigt_profile

from transit.opacity import band_index, load_table
from transit.opacity_builder.alkali import STRENGTH_PER_F_CM
from transit.opacity_builder.collisions import CM5_PER_CM1_AMAGAT2
from transit.opacity_builder.distributions import MalkmusSlices, malkmus_mean_ln, slice_means
from transit.opacity_builder.linelists import LineList, intensity_scaling, read_partition_sums
from transit.opacity_builder.profiles import SegmentSpectrum, doppler_hwhm_cm1
from transit.units import SECOND_RADIATION_CM_K

shipped = cache(load_table)


@cache
def partition_sums():
    """Excerpt of TIPS."""
    return read_partition_sums(judge.DATA / "partition_sums.csv")


# --- intensities and partition sums ------------------------------------------------------------------------


@pytest.mark.parametrize(("energy", "expected"), [(0.0, 0.986652), (500.0, 5.46050), (2000.0, 925.629)])
def test_intensity_scaling(energy, expected):
    """S(1000 K)/S(296 K) at 3000 cm-1 without partition sums; HITRAN definition, Rothman et al. 1998, JQSRT 60, 665."""
    assert intensity_scaling(np.array([3000.0]), np.array([energy]), 1000.0)[0] == pytest.approx(
        expected, rel=3e-6
    )


def test_intensity_with_partition_sums():
    """With Q rising as T^1.5 the ratio at E = 500 cm-1 is 0.879366; definition as above."""
    grid_k = np.array([100.0, 296.0, 1000.0, 3000.0])
    one = np.ones(1)
    lines = LineList(
        3000 * one, one, 500 * one, 0.07 * one, 0.6 * one, np.array([1]), 18.0, {1: (grid_k, grid_k**1.5)}
    )
    assert lines.intensity_at(1000.0)[0] == pytest.approx(0.879366, rel=3e-6)


@pytest.mark.parametrize(
    ("key", "expected"), [((1, 1), 174.58), ((2, 1), 286.09), ((5, 1), 107.42), ((6, 1), 590.5)]
)
def test_partition_sums_at_reference_temperature(key, expected):
    """Q(296 K) of H2O, CO2, CO and CH4: TIPS."""
    grid_k, q = partition_sums()[key]
    assert np.interp(296.0, grid_k, q) == pytest.approx(expected, rel=2e-4)


def oscillator_sum(frequencies, temperature_k):
    """Vibrational partition sum of harmonic oscillators."""
    return np.prod([1 / -np.expm1(-SECOND_RADIATION_CM_K * w / temperature_k) for w in frequencies])


@pytest.mark.parametrize(
    ("key", "power", "frequencies"),
    [
        ((5, 1), 1.0, [2143.27]),
        ((2, 1), 1.0, [667.4, 667.4, 1333.0, 2349.1]),
        ((1, 1), 1.5, [1594.7, 3657.1, 3755.9]),
    ],
    ids=["CO", "CO2", "H2O"],
)
def test_partition_sums_grow_like_rotor_and_oscillators(key, power, frequencies):
    """Q(1000)/Q(296) of TIPS against rigid rotor and harmonic oscillators (Shimanouchi 1972, NSRDS-NBS 39), 3 %."""
    grid_k, q = partition_sums()[key]
    ratio = np.interp(1000.0, grid_k, q) / np.interp(296.0, grid_k, q)
    simple = (1000 / 296) ** power * oscillator_sum(frequencies, 1000.0) / oscillator_sum(frequencies, 296.0)
    assert ratio == pytest.approx(simple, rel=0.03)


# --- profiles ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("x", "sigma", "gamma", "expected"),
    [(0, 1, 1, 0.2087092805), (1, 1, 0.5, 0.2001796376), (0, 1, 0, 0.3989422804), (0, 0, 1, 0.3183098862)],
)
def test_voigt_profile(x, sigma, gamma, expected):
    """The profile in use at four points; Re w(z), Abramowitz & Stegun 1964, chapter 7."""
    assert voigt_profile(x, sigma, gamma) == pytest.approx(expected, abs=1e-10)


@pytest.mark.parametrize(
    ("nu", "mass", "expected"), [(7142.857, 18.010565, 0.0190604), (16973.366, 22.98977, 0.0400890)]
)
def test_doppler_width(nu, mass, expected):
    """Doppler half widths of H2O and of Na D2 at 1000 K: nu/c sqrt(2 ln 2 kT/m)."""
    assert doppler_hwhm_cm1(nu, 1000.0, mass) == pytest.approx(expected, rel=2e-5)


def single_line(nu, gamma, exponent):
    """One line of H2O with unit strength at any temperature."""
    one = np.ones(1)
    grid_k = np.array([100.0, 3000.0])
    return LineList(
        nu * one, one, 0 * one, gamma * one, exponent * one, np.array([1]), 18.0, {1: (grid_k, [1, 1])}
    )


def test_lorentz_width():
    """Far wing S gamma/(pi x^2): 0.07 cm-1/atm, n = 0.6, 1000 K, 0.01 atm give gamma = 3.3719e-4 cm-1 (HITRAN)."""
    segment = SegmentSpectrum(single_line(3000.0, 0.07, 0.6), 2990.0, 3010.0, 1000.0)
    k = segment.cross_section_cm2(0.01 * 1.01325)
    x = segment.grid_cm1 - 3000.0
    far = (np.abs(x) > 4) & (np.abs(x) < 9)
    strength = intensity_scaling(np.array([3000.0]), np.array([0.0]), 1000.0)[0]
    assert np.median(k[far] * np.pi * x[far] ** 2) / strength == pytest.approx(3.3719e-4, rel=2e-3)


def test_voigt_width():
    """Width of a summed line: 0.5346 fL + sqrt(0.2166 fL^2 + fG^2), Olivero & Longbothum 1977, JQSRT 17, 233."""
    segment = SegmentSpectrum(single_line(3000.0, 0.07, 0.6), 2999.0, 3001.0, 1000.0)
    pressure_atm = 0.4
    k = segment.cross_section_cm2(pressure_atm * 1.01325)
    edges = CubicSpline(segment.grid_cm1, k - k.max() / 2).roots(extrapolate=False)
    lorentz = 2 * 0.07 * 0.296**0.6 * pressure_atm
    doppler = 2 * doppler_hwhm_cm1(3000.0, 1000.0, 18.0)
    expected = 0.5346 * lorentz + np.sqrt(0.2166 * lorentz**2 + doppler**2)
    assert edges[-1] - edges[0] == pytest.approx(expected, rel=5e-3)


def test_olivero_longbothum_approximation():
    """For sigma = gamma = 1 the approximation gives 3.60131 where the profile has 3.60114 (1977, JQSRT 17, 233)."""
    half = 3.60114 / 2
    assert voigt_profile(half, 1, 1) / voigt_profile(0, 1, 1) == pytest.approx(0.5, abs=2e-6)
    assert 0.5346 * 2 + np.sqrt(0.2166 * 4 + 8 * np.log(2)) == pytest.approx(3.60131, abs=1e-5)


# --- the Malkmus distribution ------------------------------------------------------------------------------


def inverse_gaussian(x, beta):
    """Density of k / mean k whose Laplace transform is the Malkmus transmission."""
    return np.sqrt(beta / (2 * np.pi * x**3)) * np.exp(-beta * (x - 1) ** 2 / (2 * x))


def average(function, beta):
    """Mean of a function of k / mean k, by quadrature over ln x."""

    def integrand(ln_x):
        x = np.exp(ln_x)
        return function(x) * inverse_gaussian(x, beta) * x

    points = sorted({np.log(beta), 0.0})
    limits = [min(np.log(beta), 0) - 8, *points, max(-np.log(beta), 0) + 5]
    return sum(quad(integrand, a, b, limit=200)[0] for a, b in pairwise(limits))


@pytest.mark.parametrize("beta", [1e-3, 0.03, 0.5, 3.0])
@pytest.mark.parametrize("u", [0.1, 1.0, 30.0])
def test_malkmus_transmission(beta, u):
    """The inverse Gaussian has the transmission exp(-beta (sqrt(1 + 2 k u/beta) - 1)): Malkmus 1967, JOSA 57, 323."""
    expected = np.exp(-beta * (np.sqrt(1 + 2 * u / beta) - 1))
    assert average(lambda x: np.exp(-u * x), beta) == pytest.approx(expected, rel=1e-5)


@pytest.mark.parametrize("beta", [1e-3, 0.03, 0.5, 3.0])
def test_malkmus_mean_ln(beta):
    """<ln k> - ln<k> of the Malkmus form against quadrature over the inverse Gaussian."""
    assert malkmus_mean_ln(beta) == pytest.approx(average(np.log, beta), abs=1e-5)


def test_malkmus_mean_ln_limits():
    """Many overlapping lines: -1/(2 beta); few: ln(2 beta) + 0.5772 (Abramowitz & Stegun 1964, 5.1.11, 5.1.51)."""
    assert malkmus_mean_ln(400.0) == pytest.approx(-1 / 800, rel=2e-3)
    assert malkmus_mean_ln(1e-8) == pytest.approx(np.log(2e-8) + np.euler_gamma, abs=1e-5)


@pytest.mark.parametrize("beta", [1e-6, 0.01, 0.37, 12.0, 300.0])
def test_malkmus_slices_keep_the_mean(beta):
    """The slices increase, and their mean is the mean ln k of the distribution."""
    slices = MalkmusSlices()(np.array([-45.0]), np.array([beta]))[0]
    assert np.all(np.diff(slices) >= 0)
    assert slices.mean() == pytest.approx(-45.0 + malkmus_mean_ln(beta), abs=0.01)


@pytest.mark.parametrize("beta", [0.01, 0.37, 12.0])
def test_malkmus_slices_meet_random_draws(beta):
    """Slices of draws of the inverse Gaussian: Michael, Schucany & Haas 1976, Am. Stat. 30, 88 (as in numpy)."""
    draws = np.random.default_rng(3).wald(1.0, beta, 400_000)
    slices = MalkmusSlices()(np.zeros(1), np.array([beta]))[0]
    assert slices == pytest.approx(slice_means(np.log(draws)), abs=0.03)


# --- the shipped tables ------------------------------------------------------------------------------------


def band_sum(species: str, low_cm1: float, high_cm1: float, temperature_k: float) -> float:
    """Integral of the mean cross section over a range of wavenumber, cm/molecule."""
    table = shipped(species)
    edges = table.edges_cm1
    width = np.clip(np.minimum(high_cm1, edges[1:]) - np.maximum(low_cm1, edges[:-1]), 0, None)
    node = list(table.temperature_k).index(temperature_k)
    return float(np.exp(table.ln_mean[:, node]) @ width)


@pytest.mark.parametrize(
    ("species", "low", "high", "strength"),
    [
        ("CO", 1950, 2300, 1.010e-17),  # fundamental: HITRAN2012
        ("CO", 4000, 4400, 7.66e-20),  # first overtone: HITRAN2012
        ("H2O", 1200, 2200, 1.144e-17),  # 6.3 um: HITRAN2020
        ("H2O", 3300, 4200, 8.35e-18),  # 2.7 um: HITRAN2020
        ("H2O", 6800, 7600, 6.86e-19),  # 1.38 um: band means
        ("CO2", 2100, 2400, 9.93e-17),  # 4.3 um: band means
        ("CO2", 500, 900, 8.99e-18),  # 15 um: band means
        ("CO2", 3400, 3800, 2.74e-18),  # 2.7 um: band means
        ("CH4", 2800, 3250, 1.112e-17),  # 3.3 um: HITRAN2020
        ("CH4", 1100, 1700, 5.22e-18),  # 7.7 um: band means
    ],
)
def test_band_strength_at_300_kelvin(species, low, high, strength):
    """Sums of the shipped band means over a band are its published strength within 5 %."""
    assert band_sum(species, low, high, 300.0) == pytest.approx(strength, rel=0.05)


@pytest.mark.parametrize(("species", "low", "high"), [("CO", 1950, 2300), ("CO2", 2000, 2400)])
@pytest.mark.parametrize("temperature_k", [500.0, 800.0, 1000.0, 1400.0])
def test_fundamentals_keep_their_strength(species, low, high, temperature_k):
    """The sum over a fundamental with its hot bands hardly depends on temperature: harmonic oscillator, 5 %."""
    assert band_sum(species, low, high, temperature_k) == pytest.approx(
        band_sum(species, low, high, 300.0), rel=0.05
    )


@pytest.mark.parametrize(
    ("atom", "f_values"), [("Na", (0.3201, 0.6408)), ("K", (0.3327, 0.6682))], ids=["Na", "K"]
)
@pytest.mark.parametrize("temperature_k", [300.0, 1000.0, 2000.0])
def test_resonance_doublet_strength(atom, f_values, temperature_k):
    """Integrated cross section pi e^2/(m_e c^2) f of both lines (f: Morton 2003, ApJS 149, 205), 2 %."""
    expected = STRENGTH_PER_F_CM * sum(f_values)
    assert band_sum(atom, 0, 1e5, temperature_k) == pytest.approx(expected, rel=0.02)


def test_strength_per_oscillator_strength():
    """pi e^2/(m_e c^2) from CODATA 2018: r_e = 2.8179403262e-13 cm, so pi r_e."""
    assert pytest.approx(np.pi * 2.8179403262e-13, rel=2e-6) == STRENGTH_PER_F_CM


@pytest.mark.parametrize("temperature_k", [300.0, 500.0, 800.0])
@pytest.mark.parametrize("pressure_bar", [1e-4, 1e-3, 1e-1])
def test_water_table_meets_summed_lines(temperature_k, pressure_bar):
    """<ln k> of bands near 2.7 um against lines added one by one (HITRAN2020; nothing is added below 800 K), 0.1."""
    table = shipped("H2O")
    node = list(table.temperature_k).index(temperature_k)
    column = int(np.argmin(np.abs(np.log(table.pressure_bar / pressure_bar))))
    first = int(band_index(3690)) + 1
    for band in range(first, int(band_index(3800)), 4):
        low, high = table.edges_cm1[band - table.first_band : band - table.first_band + 2]
        points = judge.sample_points(low, high, 1500, seed=1)
        exact = judge.ln_cross_sections(judge.excerpt("H2O"), points, temperature_k, np.array([pressure_bar]))
        found = table.ln_cross_section[band - table.first_band, node, column].mean()
        assert found == pytest.approx(exact.mean(), abs=0.1)


def test_mean_of_ln_is_far_below_ln_of_mean():
    """H2O at 3700 cm-1, 1000 K, 1e-3 atm: <ln k> - ln<k> = -5.4 in 25 cm-1 (summed HITRAN lines, this project)."""
    points = judge.sample_points(3690.0, 3715.0, 4000, seed=2)
    ln_k = judge.ln_cross_sections(judge.excerpt("H2O"), points, 1000.0, np.array([1e-3 * 1.01325]))
    lines = judge.excerpt("H2O")
    inside = (lines.nu >= 3690) & (lines.nu < 3715)
    mean = judge.intensities(lines, 1000.0)[inside].sum() / 25.0
    assert ln_k.mean() - np.log(mean) == pytest.approx(-5.4, abs=0.3)


# --- collision-induced absorption --------------------------------------------------------------------------


def collision(pair: str, nu_cm1: float, temperature_k: float) -> float:
    """Coefficient of a shipped table, cm-1 amagat-2."""
    table = shipped(pair)
    node = list(table.temperature_k).index(temperature_k)
    ln_value = float(table.ln_cross_section[int(band_index(nu_cm1)) - table.first_band, node, 0, 0])
    return np.exp(ln_value) / CM5_PER_CM1_AMAGAT2


def test_hydrogen_pairs_at_the_fundamental():
    """H2-H2 at 4160 cm-1: 8.9e-6 cm-1 amagat-2 at 1000 K (Borysow, Jorgensen & Fu 2001, JQSRT 68, 235), and
    4.1e-6 at 350 K (Fletcher et al. 2018, ApJS 235, 24)."""
    assert collision("H2-H2", 4160.0, 1000.0) == pytest.approx(8.9e-6, rel=0.02)
    assert collision("H2-H2", 4160.0, 350.0) == pytest.approx(4.1e-6, rel=0.03)


def test_hydrogen_pairs_rotational_band():
    """H2-H2 near 600 cm-1: 4.5e-6 at 400 K (Fletcher et al. 2018), 2.5e-6 at 1000 K (Borysow et al. 2001)."""
    assert collision("H2-H2", 600.0, 400.0) == pytest.approx(4.5e-6, rel=0.03)
    assert collision("H2-H2", 600.0, 1000.0) == pytest.approx(2.5e-6, rel=0.03)


def test_collision_unit():
    """1e-6 cm-1 amagat-2 is 1.38527e-45 cm5: one over the square of 2.686780e19 cm-3 (CODATA 2018)."""
    assert pytest.approx(1.38527e-39, rel=1e-5) == CM5_PER_CM1_AMAGAT2
    assert pytest.approx(1 / 2.686780111e19**2, rel=1e-5) == CM5_PER_CM1_AMAGAT2


@pytest.mark.parametrize("pair", ["H2-H2", "H2-He"])
def test_collisions_bridge_the_gap_in_temperature(pair):
    """Between the cold (to 350 K) and the hot (from 1000 K) tables the coefficient neither peaks nor dips."""
    for nu in (700.0, 2200.0, 4160.0, 4700.0):
        values = [collision(pair, nu, t) for t in (350.0, 400.0, 600.0, 800.0, 1000.0)]
        assert min(values[0], values[-1]) * 0.98 <= min(values)
        assert max(values[0], values[-1]) * 1.02 >= max(values)
