"""A small data set whose every statistic is known in closed form."""

import json
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from scipy.special import chdtrc, ndtr

from transit.likelihood import DepthLikelihood
from transit.linear import least_squares, linear_posterior
from transit.records import DepthSpectrum
from transit.units import PPM
from transit.verdict import STANDS_FROM, WORD_THRESHOLDS, word_for

CASE = json.loads((Path(__file__).parent / "cases/golden_set.json").read_text())
WAVELENGTH_UM = np.array(CASE["wavelength_um"])
DEPTH = np.array(CASE["depth_ppm"], float)
ERR = float(CASE["depth_err_ppm"])
TEMPLATE = np.array(CASE["template"])
VARIANCE = np.full(10, ERR**2)
ONES = np.ones(10)


def fit(*columns, depth=DEPTH, covariance=VARIANCE):
    return least_squares(np.column_stack(columns), depth, covariance)


# --- least squares ---------------------------------------------------------------------------------------------


def test_flat_line():
    """Weighted mean, its error, chi-square and tail probability of a flat line."""
    flat = fit(ONES)
    assert flat.estimate[0] == pytest.approx(15030.0)
    assert flat.error[0] == pytest.approx(9.4868, abs=5e-5)
    assert flat.chi2 == pytest.approx(21.8333, abs=5e-5)
    assert flat.dof == 9
    assert chdtrc(flat.dof, flat.chi2) == pytest.approx(0.0094225, abs=5e-8)


def test_template_amplitude():
    """Level and amplitude of the band, their errors and correlation, and the fit's chi-square."""
    found = fit(ONES, TEMPLATE)
    assert found.estimate == pytest.approx([14998.594, 104.6875], abs=5e-4)
    assert found.error == pytest.approx([11.859, 23.7171], abs=5e-4)
    correlation = found.covariance[0, 1] / np.prod(found.error)
    assert correlation == pytest.approx(-0.6, abs=1e-9)
    assert found.chi2 == pytest.approx(2.34983, abs=5e-6)
    assert chdtrc(found.dof, found.chi2) == pytest.approx(0.96837, abs=5e-6)


def test_amplitude_over_error_squared_is_the_drop_in_chi_square():
    """For one added parameter z^2 is the difference of chi-squares (Wilks 1938), and gives the tail probability."""
    z = fit(ONES, TEMPLATE).z[1]
    assert z == pytest.approx(4.414013, abs=5e-7)
    assert fit(ONES).chi2 - fit(ONES, TEMPLATE).chi2 == pytest.approx(19.483507, abs=5e-7)
    assert z**2 == pytest.approx(19.483507, abs=5e-6)
    assert ndtr(-z) == pytest.approx(5.0736e-6, abs=5e-11)
    assert 1 - (1 - 2 * ndtr(-z)) ** 10 == pytest.approx(1.0147e-4, abs=5e-9)


def test_information_criteria():
    """chi2 + k ln n (Schwarz 1978) and its small-sample rival (Hurvich & Tsai 1989) favour the band."""
    flat, band, n = fit(ONES), fit(ONES, TEMPLATE), 10

    def bic(solution, k):
        return solution.chi2 + k * np.log(n)

    def aicc(solution, k):
        return solution.chi2 + 2 * k + 2 * k * (k + 1) / (n - k - 1)

    assert bic(flat, 1) - bic(band, 2) == pytest.approx(17.18092, abs=5e-6)
    assert aicc(flat, 1) - aicc(band, 2) == pytest.approx(16.26922, abs=5e-6)


def test_no_bin_carries_the_band_alone():
    """Amplitude over error with each bin left out in turn."""
    found = []
    for k in range(10):
        keep = np.arange(10) != k
        found.append(fit(ONES[keep], TEMPLATE[keep], depth=DEPTH[keep], covariance=VARIANCE[keep]).z[1])
    assert found == pytest.approx(CASE["drop_one_z"], abs=0.005001)


def test_cyclic_shifts():
    """Rolled forward, the data lose the band: the correlation of neighbours stays, its place does not."""
    found = [fit(ONES, TEMPLATE, depth=np.roll(DEPTH, k)).z[1] for k in range(10)]
    assert found == pytest.approx(CASE["cyclic_shift_z"], abs=0.005001)


def test_permutations_reach_their_floor():
    """Of the 1260 different arrangements of the template none fits better: p = 1/1260, far weaker than 4.4 sigma."""
    observed = fit(ONES, TEMPLATE).z[1]
    count = total = 0
    for full in combinations(range(10), 2):
        rest = [k for k in range(10) if k not in full]
        for half in combinations(rest, 2):
            template = np.zeros(10)
            template[list(full)], template[list(half)] = 1.0, 0.5
            total += 1
            count += fit(ONES, template).z[1] >= observed - 1e-9
    assert (count, total) == (1, 1260)


def test_correlated_errors():
    """Errors with correlation 0.5^|i-j| give A = 99.00 +- 26.83 and a flat chi-square of 16.953."""
    lag = np.abs(np.subtract.outer(np.arange(10), np.arange(10)))
    covariance = ERR**2 * 0.5**lag
    found = fit(ONES, TEMPLATE, covariance=covariance)
    assert found.estimate[1] == pytest.approx(99.00, abs=0.005)
    assert found.error[1] == pytest.approx(26.83, abs=0.005)
    assert found.z[1] == pytest.approx(3.690, abs=5e-4)
    assert fit(ONES, covariance=covariance).chi2 == pytest.approx(16.953, abs=5e-4)


def test_common_error_leaves_the_amplitude():
    """An error common to all bins widens the level only: A = 104.69 +- 23.72 stays."""
    found = fit(ONES, TEMPLATE, covariance=np.diag(VARIANCE) + 50.0**2)
    assert found.estimate[1] == pytest.approx(104.6875, abs=1e-6)
    assert found.error[1] == pytest.approx(23.7171, abs=5e-5)
    assert found.error[0] > 50


@pytest.mark.parametrize(
    ("nuisance", "amplitude", "error", "z"),
    [(WAVELENGTH_UM - 1.37, 106.62, 24.57, 4.34), ((WAVELENGTH_UM > 1.43) * 1.0, 107.60, 24.00, 4.48)],
)
def test_nuisance_terms(nuisance, amplitude, error, z):
    """A slope or a step between detectors hardly changes the amplitude."""
    found = fit(ONES, TEMPLATE, nuisance)
    assert found.estimate[1] == pytest.approx(amplitude, abs=0.005)
    assert found.error[1] == pytest.approx(error, abs=0.005)
    assert found.z[1] == pytest.approx(z, abs=0.005)


def test_step_nuisance():
    """The step itself is -15.5 +- 19.6 ppm."""
    found = fit(ONES, TEMPLATE, (WAVELENGTH_UM > 1.43) * 1.0)
    assert found.estimate[2] == pytest.approx(-15.5, abs=0.05)
    assert found.error[2] == pytest.approx(19.6, abs=0.05)


def test_visits_that_disagree():
    """80+-30, 60+-25, 120+-35 agree (chi2 1.946); 150+-35 and 10+-35 do not (chi2 8.0, p = 0.00468)."""
    agree = least_squares(np.ones((3, 1)), np.array([80.0, 60, 120]), np.array([30.0, 25, 35]) ** 2)
    assert agree.estimate[0] == pytest.approx(80.185, abs=5e-4)
    assert agree.error[0] == pytest.approx(16.837, abs=5e-4)
    assert agree.chi2 == pytest.approx(1.946, abs=5e-4)
    disagree = least_squares(np.ones((2, 1)), np.array([150.0, 10]), np.array([35.0, 35]) ** 2)
    assert disagree.chi2 == pytest.approx(8.0)
    assert chdtrc(1, disagree.chi2) == pytest.approx(0.00468, abs=5e-6)
    assert disagree.z[0] == pytest.approx(3.23, abs=0.005)


# --- evidence --------------------------------------------------------------------------------------------------


def ln_evidence_by_quadrature(amplitude_limit=None):
    """ln Z with level U(14500, 15500) and amplitude U(0, limit) ppm, by Gauss-Legendre quadrature in ppm."""
    nodes, weights = np.polynomial.legendre.leggauss(300)
    level = 15025 + 125 * nodes  # what lies further out has no weight
    ln_norm = -0.5 * 10 * np.log(2 * np.pi) - 10 * np.log(ERR)
    if amplitude_limit is None:
        chi2 = np.sum((DEPTH - level[:, None]) ** 2, axis=1) / ERR**2
        return ln_norm + np.log(np.exp(-chi2 / 2) @ weights * 125 / 1000)
    top = min(amplitude_limit, 400)
    amplitude = top * (nodes + 1) / 2
    model = level[:, None, None] + amplitude[None, :, None] * TEMPLATE
    chi2 = np.sum((DEPTH - model) ** 2, axis=2) / ERR**2
    integral = weights @ np.exp(-chi2 / 2) @ weights * 125 / 1000 * top / 2 / amplitude_limit
    return ln_norm + np.log(integral)


def test_evidence_of_flat_and_band():
    """ln Z of both hypotheses, their ln B, and the probability of a flat spectrum at even odds."""
    flat, band = ln_evidence_by_quadrature(), ln_evidence_by_quadrature(500)
    assert flat == pytest.approx(-57.856938, abs=5e-7)
    assert band == pytest.approx(-50.244663, abs=5e-7)
    assert band - flat == pytest.approx(7.612274, abs=1e-6)
    assert 1 / (1 + np.exp(band - flat)) == pytest.approx(4.941e-4, abs=5e-8)


@pytest.mark.parametrize(("limit", "ln_b"), CASE["ln_bayes_factor_by_amplitude_prior_ppm"].items())
def test_evidence_against_prior_width(limit, ln_b):
    """A prior ten times too wide costs 2.3 in ln B."""
    found = ln_evidence_by_quadrature(float(limit)) - ln_evidence_by_quadrature()
    assert found == pytest.approx(ln_b, abs=5.1e-5)


RADIUS_FRACTION = 0.05


@pytest.fixture(scope="module")
def likelihood():
    """Likelihood of the data set: depth is 15000 ppm times u^2, u uniform within 0.95 and 1.05."""
    spectrum = DepthSpectrum(WAVELENGTH_UM, np.full(10, 0.03), DEPTH * PPM, np.full(10, ERR * PPM))
    return DepthLikelihood(spectrum, 15000 * PPM, RADIUS_FRACTION)


def to_level_prior(ln_evidence, u):
    """From a uniform prior of the radius to a uniform one of the level over 1000 ppm, and from fraction to ppm.

    A radius within du is a level within 2 q u du, so the prior density of the level is 1/(0.2 q u) there.
    """
    density_per_ppm = 1 / (2 * RADIUS_FRACTION * 2 * 15000 * u)
    return ln_evidence - np.log(density_per_ppm * 1000) + 10 * np.log(PPM)


def test_package_evidence_of_a_flat_line(likelihood):
    """The package's flat evidence is -57.8569 once its prior of the radius is exchanged for that of the level."""
    found = linear_posterior(likelihood, None, 1.0, None, np.random.default_rng(1))
    u = np.sqrt(15030 / 15000)
    # The density varies by 3e-4 over the width of the posterior.
    assert to_level_prior(found.ln_evidence, u) == pytest.approx(-57.856938, abs=2e-6)


def test_package_evidence_of_the_band(likelihood):
    """Integrating the amplitude over depths added to the package's likelihood gives -50.2447."""
    nodes, weights = np.polynomial.legendre.leggauss(200)
    amplitude = 250 * (nodes + 1) * PPM
    zeros = np.zeros((200, 10))
    result = likelihood.collapse(zeros, zeros, 1.0, amplitude[:, None] * TEMPLATE)
    ln_z = to_level_prior(result.ln_evidence, result.radius)
    peak = ln_z.max()
    assert peak + np.log(np.exp(ln_z - peak) @ weights / 2) == pytest.approx(-50.244663, abs=2e-6)


def test_package_flat_posterior(likelihood):
    """The level's posterior is 15030 +- 9.487 ppm: draws reproduce it within five of their own errors."""
    found = linear_posterior(likelihood, None, 1.0, None, np.random.default_rng(1), n_draws=20000)
    level = 15000 * found.radius**2
    assert found.chi2 == pytest.approx(21.8333, abs=5e-5)
    assert level.mean() == pytest.approx(15030.0, abs=5 * 9.4868 / np.sqrt(20000))
    assert level.std() == pytest.approx(9.4868, abs=5 * 9.4868 / np.sqrt(40000))


# --- words -----------------------------------------------------------------------------------------------------


def test_thresholds_are_those_of_trotta():
    """ln B 5 is strong (about 150 to 1), 2.5 moderate (12 to 1): Trotta 2008, Contemp. Phys. 49, 71, Table 1."""
    assert dict((word, start) for start, word in WORD_THRESHOLDS) == {"present": 5.0, "hint": 2.5}
    assert STANDS_FROM == 2.5
    assert np.exp(5.0) == pytest.approx(150, rel=0.02)
    assert np.exp(2.5) == pytest.approx(12, rel=0.02)


@pytest.mark.parametrize(
    ("ln_b", "word"),
    [
        (5.0, "present"),
        (np.nextafter(5.0, 0), "hint"),
        (2.5, "hint"),
        (np.nextafter(2.5, 0), "not shown"),
        (0.0, "not shown"),
        (-50.0, "not shown"),
        (1e4, "present"),
        (7.612274, "present"),  # this data set
    ],
)
def test_words_at_their_boundaries(ln_b, word):
    """A threshold itself already earns its word."""
    assert word_for(float(ln_b)) == word


@pytest.mark.parametrize(
    ("ln_b", "err", "word"),
    [(5.2, 0.25, "present"), (5.2, 0.31, "untested"), (4.9, 0.5, "untested"), (9.0, 3.0, "present")],
)
def test_uncertain_words(ln_b, err, word):
    """An error above 0.3 must not straddle a threshold."""
    assert word_for(ln_b, err) == word
