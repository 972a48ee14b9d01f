"""Formulas against handbook values, published figures, and integrals written out here."""

import dataclasses

import numpy as np
import pytest
from scipy.special import exp1, voigt_profile

from transit.atmosphere import (
    MOLAR_MASS,
    background_molecular_weight,
    equilibrium_temperature_k,
    gravity_m_s2,
    mean_molecular_weight,
    observed_radius_m,
    planet_gravity_m_s2,
    scale_height_depth,
    scale_height_m,
)
from transit.models.grid import make_grid
from transit.models.limb import LimbModel, LimbState, chord_height
from transit.opacity import (
    BANDS_PER_E_FOLD,
    OpacityTable,
    band_index,
    load_table,
    write_registry,
    write_table,
)
from transit.opacity_builder.linelists import intensity_scaling
from transit.opacity_builder.profiles import doppler_hwhm_cm1
from transit.rayleigh import carbon_dioxide_cm2, helium_cm2, hydrogen_cm2, mixture_cm2, nitrogen_cm2
from transit.records import System
from transit.units import (
    ASTRONOMICAL_UNIT_M,
    ATOMIC_MASS_KG,
    BOLTZMANN_J_K,
    EARTH_MASS_KG,
    EARTH_RADIUS_M,
    JUPITER_MASS_KG,
    JUPITER_RADIUS_M,
    LIGHT_SPEED_M_S,
    PLANCK_J_S,
    PPM,
    SECOND_RADIATION_CM_K,
    SOLAR_RADIUS_M,
)

EULER_GAMMA = 0.5772156649015329


def opaque_height(tau):
    """gamma + ln tau + E1(tau): height over an opaque level, in scale heights.

    Lecavelier des Etangs et al. 2008, A&A 481, L83; de Wit & Seager 2013, Science 342, 1473.
    """
    return EULER_GAMMA + np.log(tau) + exp1(tau)


# --- constants, depths, temperatures ---------------------------------------------------------------------------


def test_depths_of_jupiter_and_earth():
    """The nominal radii of Prsa et al. 2016 (AJ 152, 41) give the depths of Jupiter and Earth before the Sun."""
    jupiter_ppm = (JUPITER_RADIUS_M / SOLAR_RADIUS_M) ** 2 / PPM
    earth_ppm = (EARTH_RADIUS_M / SOLAR_RADIUS_M) ** 2 / PPM
    assert jupiter_ppm == pytest.approx(10560, abs=0.5)
    assert earth_ppm == pytest.approx(84.05, abs=0.005)


def test_constants_agree_with_each_other():
    """The second radiation constant is h c / k (CODATA 2018: 1.438776877 cm K)."""
    second_cm_k = PLANCK_J_S * LIGHT_SPEED_M_S / BOLTZMANN_J_K * 100
    assert second_cm_k == pytest.approx(SECOND_RADIATION_CM_K, rel=1e-9)


def test_gravity_of_the_earth():
    """G M / R^2 at the equator, with the GM and radius of WGS 84 (from memory)."""
    assert gravity_m_s2(EARTH_MASS_KG, EARTH_RADIUS_M) == pytest.approx(3.986004418e14 / 6378137**2, rel=1e-4)


@pytest.mark.parametrize(
    ("teff_k", "radius_rsun", "axis_au", "expected_k"),
    [
        (5772.0, 1.0, 1.0, 278.33),  # Sun of IAU 2015 Resolution B3 (Prsa et al. 2016, AJ 152, 41), albedo 0
        # Torres, Winn & Holman 2008, ApJ 677, 1324, HD 209458: 6065 K, a/Rs 8.76 (from memory).
        (6065.0, 1.155, 8.76 * 1.155 * SOLAR_RADIUS_M / ASTRONOMICAL_UNIT_M, 1448.98),
    ],
)
def test_equilibrium_temperature(teff_k, radius_rsun, axis_au, expected_k):
    """T sqrt(R/2a) for albedo 0 and full redistribution."""
    assert equilibrium_temperature_k(teff_k, radius_rsun, axis_au) == pytest.approx(expected_k, abs=0.02)


# --- gas and scale height --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("temperature_k", "weight", "gravity", "expected_km", "tolerance"),
    [
        # Handbook scale heights, met to 10 per cent: surface or 1 bar values do not hold for a whole atmosphere.
        (288.0, 28.97, 9.80665, 8.5, 0.1),  # Earth, planetary fact sheet (from memory)
        (165.0, 2.22, 24.79, 27.0, 0.1),  # Jupiter, the same (from memory)
        # Digits of the formula itself, computed apart from the package.
        (288.0, 28.97, 9.80665, 8.429, 1e-4),
        (165.0, 2.22, 24.79, 24.93, 2e-4),
    ],
)
def test_scale_height_of_solar_system_planets(temperature_k, weight, gravity, expected_km, tolerance):
    """k T / (mu m_u g) of Earth and Jupiter."""
    assert scale_height_m(temperature_k, weight, gravity) / 1e3 == pytest.approx(expected_km, rel=tolerance)


# Masses, radii and temperatures from memory: Torres, Winn & Holman 2008, ApJ 677, 1324 (HD 209458 b); Cloutier et
# al. 2021, AJ 162, 174 (GJ 1214 b). Scale heights and signals were computed apart from the package.
PLANETS = {
    "HD 209458 b": (0.685 * JUPITER_MASS_KG, 1.359 * JUPITER_RADIUS_M, 1449.0, 1.155),
    "GJ 1214 b": (8.17 * EARTH_MASS_KG, 2.742 * EARTH_RADIUS_M, 596.0, 0.215),
}


@pytest.mark.parametrize(
    ("planet", "weight", "gravity", "height_km", "signal_ppm"),
    [
        ("HD 209458 b", 2.3, 9.193, 569.8, 171.5),
        ("GJ 1214 b", 2.3, 10.647, 202.4, 316.4),
        ("GJ 1214 b", 18.0, 10.647, 25.9, 316.4 * 2.3 / 18),
    ],
)
def test_scale_height_and_its_signal(planet, weight, gravity, height_km, signal_ppm):
    """Scale height, and the depth 2 R H / Rs^2 that it adds, of two well known planets."""
    mass_kg, radius_m, temperature_k, star_radius = PLANETS[planet]
    g = gravity_m_s2(mass_kg, radius_m)
    height = scale_height_m(temperature_k, weight, g)
    assert g == pytest.approx(gravity, abs=6e-4)
    assert height / 1e3 == pytest.approx(height_km, abs=0.06)
    assert scale_height_depth(radius_m, height, star_radius) / PPM == pytest.approx(signal_ppm, abs=0.06)


def test_signal_is_the_growth_of_the_depth():
    """2 R H / Rs^2 is the derivative of the depth: a finite growth by H/1000 agrees to second order."""
    radius_m, height, star = 9e7, 5e5, 1.1
    step = height / 1000
    growth = ((radius_m + step) ** 2 - (radius_m - step) ** 2) / (star * SOLAR_RADIUS_M) ** 2 / 2
    assert scale_height_depth(radius_m, height, star) == pytest.approx(growth * 1000, rel=1e-9)


def test_system_gravity_and_observed_radius():
    """Gravity follows the radius given, and the observed radius is Rs sqrt(depth)."""
    system = System(1.155, 1.359, 0.685, 1449.0)
    assert planet_gravity_m_s2(system) == pytest.approx(9.193, abs=6e-4)
    assert planet_gravity_m_s2(system, 2 * 1.359 * JUPITER_RADIUS_M) == pytest.approx(9.193 / 4, abs=2e-4)
    # Depth 0.0146 is a radius ratio of 0.120830.
    assert observed_radius_m(system, 0.0146) == pytest.approx(0.120830 * 1.155 * SOLAR_RADIUS_M, rel=1e-5)


def test_mean_molecular_weight():
    """Number fractions: 0.85 H2 and 0.15 He give 2.3140; pure gases give their molar masses (CIAAW 2021)."""
    assert background_molecular_weight("H2/He") == pytest.approx(2.3140, abs=5e-5)
    for gas, mass in {"H2O": 18.02, "N2": 28.01, "CO2": 44.01}.items():
        assert background_molecular_weight(gas) == pytest.approx(mass, abs=0.006)
    # By mass 0.75 to 0.25 is 2.3016: 1/mu = sum of X/m.
    by_mass = 1 / (0.75 / MOLAR_MASS["H2"] + 0.25 / MOLAR_MASS["He"])
    assert by_mass == pytest.approx(2.3016, abs=5e-4)


def test_mean_molecular_weight_of_a_mixture():
    """Trace gases replace the background, they do not come on top of it."""
    vmr = np.array([[0.0, 0.0], [0.1, 0.02], [0.0, 0.05]])
    expected = [2.3140, 0.88 * 2.3140 + 0.1 * 18.015 + 0.02 * 28.010, 0.95 * 2.3140 + 0.05 * 28.010]
    assert mean_molecular_weight("H2/He", ("H2O", "CO"), vmr) == pytest.approx(expected, abs=1e-4)
    assert mean_molecular_weight("N2", (), np.zeros((3, 0))) == pytest.approx([28.014] * 3)


# --- line intensities and profiles -----------------------------------------------------------------------------


@pytest.mark.parametrize(("lower_energy_cm1", "expected"), [(0, 0.986652), (500, 5.46050), (2000, 925.629)])
def test_line_intensity_with_temperature(lower_energy_cm1, expected):
    """Boltzmann and stimulated-emission factors at 1000 K, 3000 cm-1 (Rothman et al. 1998, JQSRT 60, 665)."""
    found = intensity_scaling(np.array([3000.0]), np.array([float(lower_energy_cm1)]), 1000.0)
    assert found[0] == pytest.approx(expected, rel=2e-6)


def test_doppler_width():
    """(nu/c) sqrt(2 ln 2 k T / m): H2O at 1.4 um and Na D2 at 1000 K."""
    for nu, mass, expected in ((7142.857, 18.01, 0.0190604), (1e8 / 5891.5833, 22.98977, 0.0400890)):
        exact = nu * np.sqrt(
            2 * np.log(2) * BOLTZMANN_J_K * 1000.0 / (mass * ATOMIC_MASS_KG) / LIGHT_SPEED_M_S**2
        )
        assert doppler_hwhm_cm1(nu, 1000.0, mass) == pytest.approx(exact, rel=2e-5)
        assert exact == pytest.approx(expected, rel=3e-4)


@pytest.mark.parametrize(
    ("x", "sigma", "gamma", "expected"),
    [
        (0, 1, 1, 0.2087092805),
        (1, 1, 0.5, 0.2001796376),
        (0, 1, 0, 0.3989422804),
        (0, 0, 1, 0.3183098862),
    ],
)
def test_voigt_convention(x, sigma, gamma, expected):
    """The profile used has unit area, a Gaussian sigma and a Lorentz half width (Olivero & Longbothum 1977)."""
    assert voigt_profile(x, sigma, gamma) == pytest.approx(expected, rel=1e-9)


# --- sodium and potassium --------------------------------------------------------------------------------------

# Air and vacuum wavelengths (angstrom): Morton 2003, ApJS 149, 205 (vacuum); NIST Atomic Spectra Database (air).
# Transition probabilities (s-1) and statistical weights: Na of Kelleher & Podobedova 2008, JPCRD 37, 267; K of
# Sansonetti 2008, JPCRD 37, 7 (K rates from memory).
DOUBLETS = {
    "Na": [(5889.95095, 5891.5833, 6.16e7, 2.0), (5895.92424, 5897.5581, 6.14e7, 1.0)],
    "K": [(7664.89913, 7667.0089, 3.78e7, 2.0), (7698.96456, 7701.0835, 3.734e7, 1.0)],
}
LINES = [line for lines in DOUBLETS.values() for line in lines]


def ciddor_1996(sigma2):
    """n - 1 of standard air, Ciddor 1996, Appl. Opt. 35, 1566; sigma2 in um-2, vacuum."""
    return 0.05792105 / (238.0185 - sigma2) + 0.00167917 / (57.362 - sigma2)


def morton_2000(sigma2):
    """n - 1 of standard air, Morton 2000, ApJS 130, 403 (the IAU standard)."""
    return 8.34254e-5 + 2.406147e-2 / (130 - sigma2) + 1.5998e-4 / (38.9 - sigma2)


def vacuum_from_air(air_angstrom, refractivity):
    """Invert lambda_air = lambda_vac / n(lambda_vac) by iteration."""
    vacuum = air_angstrom
    for _ in range(4):
        vacuum = air_angstrom * (1 + refractivity((1e4 / vacuum) ** 2))
    return vacuum


@pytest.mark.parametrize("refractivity", [ciddor_1996, morton_2000])
@pytest.mark.parametrize(("air", "vacuum"), [line[:2] for line in LINES])
def test_vacuum_wavelengths_of_the_alkali_lines(air, vacuum, refractivity):
    """Two refraction formulas turn the air wavelengths of NIST into the vacuum ones of Morton 2003."""
    assert vacuum_from_air(air, refractivity) == pytest.approx(vacuum, abs=3e-4)


def test_refraction_formulas_at_a_standard_line():
    """Kr 6056.125 A in air is 6057.8019 A in vacuum (NIST); 2000 A in vacuum is 1999.353 A in air (Morton 2000)."""
    assert vacuum_from_air(6056.125, ciddor_1996) == pytest.approx(6057.8019, abs=3e-4)
    assert 2000 / (1 + ciddor_1996(25.0)) == pytest.approx(1999.353, abs=1e-3)


@pytest.mark.parametrize("atom", ["Na", "K"])
def test_alkali_tables_peak_at_their_lines(atom):
    """The bands with the largest cross sections are those that hold the two lines in vacuum (Morton 2003)."""
    table = load_table(atom)
    row = int(np.argmin(np.abs(table.temperature_k - 1000)))
    column = int(np.argmin(np.abs(table.pressure_bar - 1e-2)))
    strongest = table.ln_cross_section[:, row, column, :].max(axis=1)
    holders = {int(band_index(1e8 / line[1])) for line in DOUBLETS[atom]}
    top = np.argsort(-strongest)[: len(holders)] + table.first_band
    assert set(top.tolist()) == holders


@pytest.mark.parametrize("atom", ["Na", "K"])
def test_alkali_tables_hold_the_strength_of_their_lines(atom):
    """The integrated cross section is pi e^2/(m_e c^2) sum f, with f from the transition probabilities."""
    oscillator = [1.49919e-16 * wave**2 * ratio * a for _, wave, a, ratio in DOUBLETS[atom]]
    table = load_table(atom)
    row = int(np.argmin(np.abs(table.temperature_k - 1000)))
    band_sum = np.exp(table.ln_mean[:, row]) @ np.diff(table.edges_cm1)
    # 8.85282e-13 cm per unit f; f = 1.49919e-16 (lambda/A)^2 (g_u/g_l) A (NIST, Atomic Spectroscopy compendium).
    assert band_sum == pytest.approx(8.85282e-13 * sum(oscillator), rel=0.02, abs=0)


def test_oscillator_strengths_of_sodium():
    """log gf of the sodium lines is 0.108 and -0.194 (Kelleher & Podobedova 2008, JPCRD 37, 267)."""
    for (_, wave, a, ratio), expected in zip(DOUBLETS["Na"], (0.108, -0.194), strict=True):
        assert np.log10(2 * 1.49919e-16 * wave**2 * ratio * a) == pytest.approx(expected, abs=6e-4)


# --- Rayleigh scattering ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("angstrom", "cm2"),
    [
        (3000, 1.20506e-26),
        (4000, 3.51675e-27),
        (5000, 1.38844e-27),
        (5893, 7.06631e-28),
        (6328, 5.28204e-28),
        (10000, 8.26961e-29),
    ],
)
def test_rayleigh_of_hydrogen(angstrom, cm2):
    """Fit of Dalgarno & Williams 1962, ApJ 136, 690."""
    assert hydrogen_cm2(angstrom * 1e-4) == pytest.approx(cm2, rel=5e-6, abs=0)


@pytest.mark.parametrize(
    ("function", "expected"),
    [
        # Values of the index formula with the refractivities and King factors of Sneep & Ubachs 2005, JQSRT 92,
        # 293 (N2, CO2) and Mansfield & Peck 1969, JOSA 59, 199 (He), computed apart from the package.
        (nitrogen_cm2, (1.7139e-26, 5.3080e-27, 3.4997e-27, 4.1333e-28)),
        (carbon_dioxide_cm2, (4.3523e-26, 1.3340e-26, 8.7727e-27, 1.0284e-27)),
        (helium_cm2, (2.2165e-28, 6.9924e-29, 4.6300e-29, 5.5342e-30)),
    ],
)
def test_rayleigh_of_other_gases(function, expected):
    """N2, CO2 and He at 400, 532, 589.3 and 1000 nm."""
    found = function(np.array([0.400, 0.532, 0.5893, 1.000]))
    assert found == pytest.approx(expected, rel=6e-5, abs=0)


def test_hydrogen_agrees_with_its_refractivity():
    """The refractivity of H2 (Peck & Huang 1977, JOSA 67, 1550) gives 3.4 per cent more without a King factor."""
    wave = 0.5893
    index = 1e-6 * (14895.6 / (180.7 - wave**-2) + 4903.7 / (92.0 - wave**-2))
    n2 = (1 + index) ** 2
    sigma = 24 * np.pi**3 * (1e4 / wave) ** 4 / 2.686780e19**2 * ((n2 - 1) / (n2 + 2)) ** 2
    assert hydrogen_cm2(wave) / sigma == pytest.approx(0.966, abs=0.004)


def test_carbon_dioxide_has_no_pole_at_its_infrared_band():
    """Beyond 1.8 um the refractivity is held: the cross section keeps falling as the fourth power."""
    wave = np.array([1.9, 3.0, 4.13, 4.2, 10.0])
    sigma = carbon_dioxide_cm2(wave) * wave**4
    assert np.ptp(sigma) / sigma.mean() < 0.01


def test_rayleigh_slope_in_the_visible():
    """Effective exponent of H2 from 0.4 to 0.8 um is -4.110 (Dalgarno & Williams 1962): a drop of 2.85 H."""
    exponent = np.log(hydrogen_cm2(0.8) / hydrogen_cm2(0.4)) / np.log(2)
    assert exponent == pytest.approx(-4.110, abs=5e-4)


def test_mixture_adds_by_number():
    """A mixture scatters as the sum of its parts by number."""
    expected = 0.85 * hydrogen_cm2(0.5) + 0.15 * helium_cm2(0.5)
    assert mixture_cm2(0.5, {"H2": 0.85, "He": 0.15}) == pytest.approx(expected, abs=0)


# --- height of the limb: closed form ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("tau", "height"),
    [
        (0.01, 0.009975),
        (0.1, 0.097554),
        (1, 0.796599),
        (10, 2.879805),
        (1e3, 7.4850),
        (1e5, 12.0901),
    ],
)
def test_chord_height(tau, height):
    """gamma + ln tau + E1(tau) (Lecavelier des Etangs et al. 2008, A&A 481, L83), to the stated 2e-4."""
    assert opaque_height(tau) == pytest.approx(height, abs=6e-5)
    assert chord_height(np.log(tau)) == pytest.approx(height, abs=2.0e-4 + 6e-5)


def test_chord_height_everywhere():
    """The rational form stays within the stated 2.0e-4 of gamma + ln tau + E1 at any optical depth."""
    ln_tau = np.linspace(-20, 40, 60001)
    assert np.abs(chord_height(ln_tau) - opaque_height(np.exp(ln_tau))).max() < 2.05e-4


def test_slant_over_normal_optical_depth():
    """sqrt(2 pi R / H) is 35.25 at 1000 K, g = 10, mu = 2.3, one Jupiter radius (Fortney 2005, MNRAS 364, 649)."""
    height = scale_height_m(1000.0, 2.3, 10.0)
    assert np.sqrt(2 * np.pi * JUPITER_RADIUS_M / height) == pytest.approx(35.25, abs=0.006)


# --- height of the limb: the model against an integral along each chord ----------------------------------------

TEMPERATURE_K = 1000.0
REFERENCE_RADIUS_M = 7e7
WAVELENGTH_UM = 10.0
VMR = 1e-3
DECK_BAR = 0.01  # the reference level: the deck then lies at the reference radius


def exact_height(radius_over_height, tau, pressure_exponent, falling_gravity):
    """Height of the limb over an opaque sphere, in scale heights, by integrating along each chord.

    Parameters
    ----------
    radius_over_height : float
        R0/H, with H that of the gravity at R0.
    tau : float
        n0 k0 sqrt(2 pi R0 H / (1 + n)): names the absorption at R0, as the closed form would.
    pressure_exponent : float
        The cross section grows as P^n.
    falling_gravity : bool
        Gravity as r^-2, or constant.
    """
    x0, power = radius_over_height, 1 + pressure_exponent
    absorption = tau / np.sqrt(2 * np.pi * x0 / power)  # per scale height, at R0
    nodes, weights = np.polynomial.legendre.leggauss(400)

    def level(r):
        return x0 * (1 - x0 / r) if falling_gravity else r - x0

    top = (max(np.log(tau), 0) + 20) / power
    top = x0 / (1 - top / x0) if falling_gravity else x0 + top
    impact = x0 + (top - x0) * (nodes + 1) / 2
    reach = np.sqrt(2 * 35 / power * top) * (top / x0 if falling_gravity else 1) * 1.5
    path = reach * (nodes + 1) / 2
    r = np.sqrt(impact[:, None] ** 2 + path[None, :] ** 2)
    depth = 2 * absorption * np.exp(-power * level(r)) @ (weights * reach / 2)
    area = 2 * impact * -np.expm1(-depth) @ (weights * (top - x0) / 2)
    return np.sqrt(x0**2 + area) - x0


def test_the_integral_along_chords_itself():
    """On a very large planet it is gamma + ln tau + E1(tau), for any pressure exponent."""
    for exponent in (0.0, 0.5, 1.0):
        for tau in (0.5, 10.0, 1e3):
            found = exact_height(1e6, tau, exponent, False)
            assert found == pytest.approx(opaque_height(tau) / (1 + exponent), abs=2e-4)


def test_optical_depth_of_the_apparent_edge():
    """The chord through the apparent radius has an optical depth near 0.56 (Lecavelier des Etangs et al. 2008)."""
    for x0, expected in ((100, 0.5573), (200, 0.5593), (400, 0.5603)):
        height = exact_height(x0, 1e3, 0.0, False)
        tau_edge = 1e3 * np.exp(-height) * np.sqrt((x0 + height) / x0)
        # The factor is the growth of the chord; its next term is 3/8 of H/r for chord sums of an exponential.
        tau_edge *= (1 + 3 / (8 * (x0 + height))) / (1 + 3 / (8 * x0))
        assert tau_edge == pytest.approx(expected, abs=4e-3)


@pytest.mark.parametrize("radius_over_height", [60, 100, 200, 400])
@pytest.mark.parametrize("tau", [10.0, 1e3, 1e5])
@pytest.mark.parametrize("exponent", [0.0, 0.5, 1.0])
def test_closed_form_at_constant_gravity(radius_over_height, tau, exponent):
    """H/(1+n) [gamma + ln tau + E1] is within 0.15 H of the integral where gravity does not fall."""
    exact = exact_height(radius_over_height, tau, exponent, False)
    closed = chord_height(np.log(tau)) / (1 + exponent)
    assert 0 < exact - closed < 0.15


def synthetic_tables(folder, ln_cross_section_at_10_mbar, exponent, ln_collision=-130.0):
    """Tables of one species with a power law in pressure near 10 um, and of collision pairs that hardly absorb."""
    near = int(band_index(1e4 / (WAVELENGTH_UM * 1.05))), int(np.ceil(0.1 * BANDS_PER_E_FOLD)) + 2
    everywhere = 0, int(band_index(1e4 / 0.3))
    temperature_k = np.array([500.0, 1000.0, 2000.0])
    pressure_bar = 10.0 ** np.arange(-6, 2)
    ln_k = ln_cross_section_at_10_mbar + exponent * np.log(pressure_bar / 0.01)
    header = {"trusted": [], "bands_um": []}
    for name, nodes, values in (
        ("H2O", pressure_bar, ln_k),
        ("H2-H2", np.ones(1), np.full(1, ln_collision)),
        ("H2-He", np.ones(1), np.full(1, -130.0)),
    ):
        slices = 16 if name == "H2O" else 1
        first, count = near if name == "H2O" else everywhere
        shape = (count, len(temperature_k), len(nodes), slices)
        cross_section = np.broadcast_to(values[None, None, :, None], shape)
        table = OpacityTable(
            name, first, temperature_k, nodes, cross_section, cross_section[:, :, 0, 0], header
        )
        write_table(folder / f"{name}.opacity", table)
    write_registry(folder)
    return folder


def column_cm2(radius_over_height):
    """Molecules along the chord at the deck for a cross section that does not depend on pressure, cm-2."""
    density_cm3 = DECK_BAR * 1e5 / (BOLTZMANN_J_K * TEMPERATURE_K) * 1e-6
    return density_cm3 * 100 * REFERENCE_RADIUS_M * np.sqrt(2 * np.pi / radius_over_height)


def model_height(folder, radius_over_height, vmr):
    """Height over the deck in scale heights, as `LimbModel` computes it."""
    weight = mean_molecular_weight("H2/He", ("H2O",), np.array([[vmr]]))[0]
    gravity = scale_height_m(TEMPERATURE_K, weight, 1.0) / (REFERENCE_RADIUS_M / radius_over_height)
    model = LimbModel(
        make_grid(np.array([WAVELENGTH_UM]), np.array([0.05])),
        ("H2O",),
        "H2/He",
        REFERENCE_RADIUS_M,
        gravity,
        (950.0, 1050.0),
        folder,
    )
    state = LimbState(
        temperature_k=np.array([TEMPERATURE_K]),
        ln_deck_pressure_bar=np.log([DECK_BAR]),
        ln_haze_strength=np.array([-40.0]),
        haze_exponent=np.array([0.0]),
        vmr=np.array([[vmr]]),
    )
    mean, square = model.heights(state)
    assert square[0, 0] == pytest.approx(mean[0, 0] ** 2, rel=1e-4)  # one height in the bin
    return mean[0, 0] * radius_over_height


@pytest.mark.parametrize("radius_over_height", [60, 100, 200, 400])
@pytest.mark.parametrize("tau", [10.0, 1e3, 1e5])
@pytest.mark.parametrize("exponent", [0.0, 0.5, 1.0])
def test_limb_model_against_the_integral_along_chords(tmp_path, radius_over_height, tau, exponent):
    """With gravity falling as r^-2 and k as P^n the model is within 0.15 H of the integral along each chord."""
    cross_section = tau / (VMR * column_cm2(radius_over_height) / np.sqrt(1 + exponent))
    folder = synthetic_tables(tmp_path, np.log(cross_section), exponent)
    exact = exact_height(radius_over_height, tau, exponent, True)
    assert model_height(folder, radius_over_height, VMR) == pytest.approx(exact, abs=0.15)


@pytest.mark.parametrize("tau", [10.0, 1e3])
def test_collision_induced_response_is_half(tmp_path, tau):
    """Absorption as density squared reaches (H/2)[gamma + ln tau + E1]: 1.4399 and 3.7425 at tau 10 and 1000."""
    radius_over_height = 300
    density_cm3 = DECK_BAR * 1e5 / (BOLTZMANN_J_K * TEMPERATURE_K) * 1e-6
    ln_cm5 = np.log(tau / (0.85**2 * density_cm3 * column_cm2(radius_over_height) / np.sqrt(2)))
    # Scale so that the pair lies within what a table can store.
    folder = synthetic_tables(tmp_path, -80.0, 0.0, ln_collision=ln_cm5)
    found = model_height(folder, radius_over_height, 0.0)
    assert chord_height(np.log(tau)) / 2 == pytest.approx({10.0: 1.4399, 1e3: 3.7425}[tau], abs=2e-4)
    # Numerical integration at constant gravity gave 1.4421 and 3.7466 (computed apart from the package).
    assert exact_height(radius_over_height, tau, 1.0, False) == pytest.approx(
        {10.0: 1.4421, 1e3: 3.7466}[tau], abs=2e-4
    )
    assert found == pytest.approx(exact_height(radius_over_height, tau, 1.0, True), abs=0.05)


def test_two_opacities_add_inside_the_logarithm(tmp_path):
    """Over a grey continuum a band of k times its opacity stands ln(1 + k) scale heights higher.

    Lecavelier des Etangs et al. 2008; 1, 3, 10, 100, 1000 times give 0.693, 1.386, 2.398, 4.615, 6.909 H.
    """
    radius_over_height = 1e5  # flat: no gravity or chord terms to blur the closed form
    base = 100.0 / (VMR * column_cm2(radius_over_height))
    ratios = np.array([1, 3, 10, 100, 1000])
    heights = []
    for ratio in (0, *ratios):
        folder = tmp_path / str(ratio)
        folder.mkdir()
        synthetic_tables(folder, np.log(base * (1 + ratio)), 0.0)
        heights.append(model_height(folder, radius_over_height, VMR))
    found = np.array(heights[1:]) - heights[0]
    assert found == pytest.approx([0.693, 1.386, 2.398, 4.615, 6.909], abs=0.01)


def test_haze_falls_by_its_exponent_in_scale_heights(tmp_path):
    """dR/d ln lambda = alpha H (Lecavelier des Etangs et al. 2008): -4 from 0.4 to 0.8 um drops 2.7726 H."""
    radius_over_height = 1e4
    synthetic_tables(tmp_path, -80.0, 0.0)
    gravity = scale_height_m(TEMPERATURE_K, background_molecular_weight("H2/He"), 1.0)
    gravity /= REFERENCE_RADIUS_M / radius_over_height
    grid = make_grid(np.array([0.4, 0.8]), np.array([0.001, 0.001]))
    model = LimbModel(grid, (), "H2/He", REFERENCE_RADIUS_M, gravity, (950.0, 1050.0), tmp_path)
    state = LimbState(
        temperature_k=np.array([TEMPERATURE_K]),
        ln_deck_pressure_bar=np.array([np.log(10.0)]),
        ln_haze_strength=np.array([np.log(1e5)]),
        haze_exponent=np.array([-4.0]),
        vmr=np.zeros((1, 0)),
    )
    mean, _ = model.heights(state)
    assert (mean[0, 0] - mean[0, 1]) * radius_over_height == pytest.approx(2.7726, abs=0.01)


def test_collisions_do_not_absorb_outside_their_tables():
    """From 0.5 to 0.3 um the limb rises as Rayleigh scattering does: no wall where the collision tables end.

    With sigma of Dalgarno & Williams 1962 (ApJ 136, 690) the rise is H ln(sigma(0.4)/sigma(0.6)) = 1.67 H.
    """
    wave = np.array([0.35, 0.40, 0.45, 0.55, 0.60])
    grid = make_grid(wave, wave / 100)
    model = LimbModel(grid, (), "H2/He", 9e7, 10.0, (950.0, 1050.0))
    state = LimbState(
        temperature_k=np.array([TEMPERATURE_K]),
        ln_deck_pressure_bar=np.array([np.log(10.0)]),
        ln_haze_strength=np.array([-40.0]),
        haze_exponent=np.array([0.0]),
        vmr=np.zeros((1, 0)),
    )
    height = scale_height_m(TEMPERATURE_K, background_molecular_weight("H2/He"), 10.0) / 9e7
    found = model.heights(state)[0][0] / height
    sigma = mixture_cm2(wave, {"H2": 0.85, "He": 0.15})
    assert found - found[-1] == pytest.approx(np.log(sigma / sigma[-1]), abs=0.15)


def test_the_model_is_transparent_without_absorbers(tmp_path):
    """With nothing over the deck the limb is the deck itself."""
    folder = synthetic_tables(tmp_path, -80.0, 0.0)
    assert model_height(folder, 100, 1e-12) == pytest.approx(0.0, abs=2e-3)


def test_tables_are_not_changed_by_the_model(tmp_path):
    """Two models from one folder give the same numbers: loading and using a table leaves it as it was."""
    folder = synthetic_tables(tmp_path, np.log(1e-20), 0.5)
    before = dataclasses.asdict(load_table("H2O", folder))
    first = model_height(folder, 100, VMR)
    after = dataclasses.asdict(load_table("H2O", folder))
    assert np.array_equal(before["ln_cross_section"], after["ln_cross_section"])
    assert model_height(folder, 100, VMR) == first
