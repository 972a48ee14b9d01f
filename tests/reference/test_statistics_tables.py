"""Published statistical tables and closed forms that the package must reproduce to the digits printed."""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import chdtrc, chdtri, ndtr

from transit.evidence import SamplerSettings, combine_runs, estimate_evidence
from transit.likelihood import DepthLikelihood
from transit.linear import least_squares
from transit.prior_width import ln_bayes_factor_normal_prior, ln_bayes_factor_uniform_prior
from transit.records import DepthSpectrum
from transit.significance import (
    aicc,
    bayes_bound_gaussian,
    bic,
    boundary_p,
    jeffreys_word,
    kass_raftery_word,
    normal_deviate,
    p_from_deviate,
    posterior_odds_probability,
    sellke_bound,
    trials,
    trotta_word,
)
from transit.units import PPM

GOLDEN = json.loads((Path(__file__).parent / "cases/golden_set.json").read_text())
DEPTH = np.array(GOLDEN["depth_ppm"], float)
ERR = float(GOLDEN["depth_err_ppm"])
BAND = np.array(GOLDEN["template"])
ONES = np.ones(10)


def rounded(digits):
    """Half a unit of the last digit printed, with room for rounding of the half itself."""
    return 0.5000001 * 10.0**-digits


# --- amplitude, goodness of fit --------------------------------------------------------------------------------


def test_error_of_an_amplitude():
    """sigma sqrt(1/n1 + 1/n0): 5 of 20 bins at 50 ppm give 25.820 ppm; recomputed from the formula."""
    inside = (np.arange(20) < 5) * 1.0
    found = least_squares(np.column_stack([np.ones(20), inside]), np.zeros(20), np.full(20, 50.0**2))
    assert found.error[1] == pytest.approx(25.820, abs=rounded(3))


@pytest.mark.parametrize("seed", range(5))
def test_square_of_the_amplitude_is_the_fall_in_chi_square(seed):
    """For one added parameter z^2 is the fall in chi-square exactly (Wilks 1938, Ann. Math. Stat. 9, 60)."""
    rng = np.random.default_rng(seed)
    half = rng.standard_normal((12, 12))
    covariance = half @ half.T + 3 * np.eye(12)
    depth, template = 5 * rng.standard_normal(12), rng.random(12)
    without = least_squares(np.ones((12, 1)), depth, covariance)
    found = least_squares(np.column_stack([np.ones(12), template]), depth, covariance)
    assert without.chi2 - found.chi2 == pytest.approx(found.z[1] ** 2, rel=1e-9)


@pytest.mark.parametrize(("chi2", "dof", "p"), [(30, 20, 0.06985), (55, 30, 0.003550)])
def test_chi_square_tail(chi2, dof, p):
    """Tail of chi-square as the package takes it for `p_chi2`; Abramowitz & Stegun 26.4, recomputed.

    The residuals of a fit of `dof` bins more than parameters have this chi-square.
    """
    depth = np.zeros(dof + 1)
    depth[:2] = np.sqrt(chi2 / 2) * np.array([1.0, -1.0])
    found = least_squares(np.ones((dof + 1, 1)), depth, np.ones(dof + 1))
    assert chdtrc(found.dof, found.chi2) == pytest.approx(p, abs=rounded(6 if p < 0.01 else 5))


# --- information criteria ----------------------------------------------------------------------------------------


def test_information_criteria():
    """chi2 45 (k = 1) against 33 (k = 2) in 30 bins: Schwarz 1978; Hurvich & Tsai 1989; recomputed."""
    difference = bic(45, 1, 30) - bic(33, 2, 30)
    assert difference == pytest.approx(8.5988, abs=rounded(4))
    assert np.exp(difference / 2) == pytest.approx(73.7, abs=rounded(1))
    assert aicc(45, 1, 30) == pytest.approx(47.1429, abs=rounded(4))
    assert aicc(33, 2, 30) == pytest.approx(37.4444, abs=rounded(4))


def test_information_criteria_of_the_golden_set():
    """The band is favoured by 17.18092 and 16.26922; recomputed from the formulas."""
    flat = least_squares(ONES[:, None], DEPTH, np.full(10, ERR**2))
    band = least_squares(np.column_stack([ONES, BAND]), DEPTH, np.full(10, ERR**2))
    assert bic(flat.chi2, 1, 10) - bic(band.chi2, 2, 10) == pytest.approx(17.18092, abs=rounded(5))
    assert aicc(flat.chi2, 1, 10) - aicc(band.chi2, 2, 10) == pytest.approx(16.26922, abs=rounded(5))


# --- tail probabilities --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("z", "tail"),
    [(1, 1.58655e-1), (2, 2.27501e-2), (3, 1.34990e-3), (4, 3.16712e-5), (5, 2.86652e-7), (6, 9.86588e-10)],
)
def test_normal_tail(z, tail):
    """Q(z) as tabulated in Abramowitz & Stegun 1964, table 26.1 and 26.2 (from memory), both ways."""
    assert p_from_deviate(z) == pytest.approx(tail, rel=5e-6)
    assert normal_deviate(tail) == pytest.approx(z, abs=5e-6)


def test_likelihood_ratio():
    """A fall of 9: two-sided 0.002700, bounded 0.001350, two parameters 0.011109 or 2.54 deviates (two-sided).

    Chernoff 1954; Self & Liang 1987; recomputed from the formula.
    """
    assert chdtrc(1, 9) == pytest.approx(0.002700, abs=rounded(6))
    assert boundary_p(9.0) == pytest.approx(0.001350, abs=rounded(6))
    assert boundary_p(9.0) == pytest.approx(p_from_deviate(3), rel=1e-12)
    assert chdtrc(2, 9) == pytest.approx(0.011109, abs=rounded(6))
    assert normal_deviate(chdtrc(2, 9) / 2) == pytest.approx(2.54, abs=rounded(2))


def test_boundary_threshold():
    """At 95 per cent the threshold falls from 3.841 to 2.706; Self & Liang 1987; recomputed."""
    assert chdtri(1, 0.05) == pytest.approx(3.841, abs=rounded(3))
    assert boundary_p(2.706 - 5e-4) > 0.05 > boundary_p(2.706 + 5e-4)


def test_boundary_p_in_simulated_noise():
    """Amplitudes of pure noise that may not be negative: half of the falls are zero, the rest chi-square.

    Counts of 40000 simulated least-squares fits lie within four binomial errors of Chernoff's mixture.
    """
    noise = np.random.default_rng(1954).standard_normal((40000, 10)) * ERR
    design = np.column_stack([ONES, BAND])
    inverse = np.linalg.inv(design.T @ design)
    z = (noise @ design @ inverse)[:, 1] / (ERR * np.sqrt(inverse[1, 1]))
    p = boundary_p(np.maximum(z, 0) ** 2)
    assert np.mean(p == 1) == pytest.approx(0.5, abs=4 * np.sqrt(0.25 / 40000))
    for level in (0.3, 0.1, 0.01):
        assert np.mean(p <= level) == pytest.approx(level, abs=4 * np.sqrt(level * (1 - level) / 40000))


@pytest.mark.parametrize(
    ("local", "n", "over_all"), [(3, 5, 2.47), (3, 10, 2.22), (3, 30, 1.76), (4, 10, 3.42)]
)
def test_trials(local, n, over_all):
    """Two-sided 3 deviates after 5, 10, 30 looks; 4 after 10; Sidak 1967; recomputed from the formula."""
    assert normal_deviate(trials(2 * p_from_deviate(local), n) / 2) == pytest.approx(over_all, abs=rounded(2))


def test_trials_of_the_golden_set():
    """One-sided 5.0736e-6, two-sided 1.01472e-5, after ten looks 1.0147e-4 or 3.89 deviates; recomputed."""
    z = least_squares(np.column_stack([ONES, BAND]), DEPTH, np.full(10, ERR**2)).z[1]
    one_sided = p_from_deviate(z)
    assert one_sided == pytest.approx(5.0736e-6, abs=5e-11)
    assert boundary_p(z**2) == pytest.approx(one_sided, rel=1e-10)
    assert 2 * one_sided == pytest.approx(1.01472e-5, abs=5e-11)
    assert trials(2 * one_sided, 10) == pytest.approx(1.0147e-4, abs=5e-9)
    assert normal_deviate(trials(2 * one_sided, 10) / 2) == pytest.approx(3.89, abs=rounded(2))


# --- bounds ------------------------------------------------------------------------------------------------------

# Greatest B: recomputed from the formula of Sellke, Bayarri & Berger 2001, with its ln and the two-sided deviate.
SELLKE = [
    (0.05, 2.46, 0.90, 1.96),
    (0.04, 2.86, 1.05, 2.05),
    (0.01, 7.99, 2.08, 2.58),
    (0.006, 11.98, 2.48, 2.75),
    (0.003, 21.11, 3.05, 2.97),
    (0.001, 53.26, 3.98, 3.29),
    (0.0003, 151.2, 5.02, 3.62),
    (6e-7, 42798, 10.66, 4.99),
]
# The same table as printed, in fewer digits, by Trotta 2008, table 2, and Benneke & Seager 2013, table 2 (from memory).
PRINTED = [2.5, 2.9, 8.0, 12, 21, 53, 150, 43000]


@pytest.mark.parametrize(("p", "bound", "ln_bound", "deviate"), SELLKE)
def test_sellke_bound(p, bound, ln_bound, deviate):
    """-1/(e p ln p)."""
    digits = {True: 2, bound > 100: 1, bound > 1000: 0}[True]
    assert sellke_bound(p) == pytest.approx(bound, abs=rounded(digits))
    assert np.log(sellke_bound(p)) == pytest.approx(ln_bound, abs=rounded(2))
    assert normal_deviate(p / 2) == pytest.approx(deviate, abs=rounded(2))


@pytest.mark.parametrize(
    ("p", "printed"), [(row[0], value) for row, value in zip(SELLKE, PRINTED, strict=True)]
)
def test_sellke_bound_as_printed(p, printed):
    """Two digits of the published tables."""
    assert float(f"{sellke_bound(p):.2g}") == printed


def test_the_inverse_of_the_bound_overstates():
    """ln B of 5.42 leaves a null probability of 0.0044 at even odds, yet read backwards "is" 3.73 deviates.

    Thorngren, Sing & Mukherjee 2025, arXiv:2510.00169, give the first two numbers of a published detection as an
    example; the third is recomputed. A two-sided tail of 0.0044 is 2.85 deviates: two questions, two answers.
    """
    assert posterior_odds_probability(-5.42) == pytest.approx(0.0044, abs=5e-5)
    p = brentq(lambda p: np.log(sellke_bound(p)) - 5.42, 1e-6, 1e-2, xtol=1e-12)
    assert normal_deviate(p / 2) == pytest.approx(3.73, abs=rounded(2))
    assert normal_deviate(0.0044 / 2) == pytest.approx(2.85, abs=rounded(2))


def test_bound_for_any_prior():
    """exp(z^2/2) is 90 at 3 deviates: Edwards, Lindman & Savage 1963, Psychol. Rev. 70, 193."""
    assert bayes_bound_gaussian(3) == pytest.approx(90, abs=0.5)


@pytest.mark.parametrize(("p", "bound", "ln_bound", "deviate"), SELLKE)
def test_the_bounds_agree_on_their_order(p, bound, ln_bound, deviate):
    """A bound for monotone alternatives is tighter than that for any: Sellke et al. 2001, section 3."""
    assert sellke_bound(p) < bayes_bound_gaussian(normal_deviate(p / 2))


# --- scales ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ln_b", "probability"), [(1, 0.7311), (2.5, 0.9241), (3, 0.9526), (5, 0.99331), (10, 0.9999546)]
)
def test_posterior_probability(ln_b, probability):
    """B/(1+B) at even odds; recomputed from the formula."""
    digits = len(str(probability)) - 2
    assert posterior_odds_probability(ln_b) == pytest.approx(probability, abs=rounded(digits))


def test_trotta_scale():
    """1, 2.5, 5 begin weak, moderate, strong evidence, odds of 3, 12, 150: Trotta 2008, table 1 (from memory)."""
    for ln_b, odds, word, below in (
        (1.0, 3, "weak", "inconclusive"),
        (2.5, 12, "moderate", "weak"),
        (5.0, 150, "strong", "moderate"),
    ):
        assert np.exp(ln_b) == pytest.approx(odds, rel=0.1)  # the table rounds the odds
        assert trotta_word(ln_b) == trotta_word(-ln_b) == word
        assert trotta_word(np.nextafter(ln_b, 0)) == below
    assert trotta_word(0.0) == "inconclusive"


def test_kass_raftery_scale():
    """2 ln B of 0-2, 2-6, 6-10, above 10; B of 1-3, 3-20, 20-150, above 150: Kass & Raftery 1995, section 3.2.

    The two scales of that table are rounded against each other: at B 3, 20 and 150 2 ln B is 2.20, 5.99, 10.02.
    """
    words = ["bare mention", "positive", "strong", "very strong"]
    assert [kass_raftery_word(x / 2) for x in (1, 4, 8, 12)] == words
    assert [kass_raftery_word(np.log(b)) for b in (1.5, 8, 60, 400)] == words
    for edge, word, below in ((2.0, *words[1::-1]), (6.0, *words[2:0:-1]), (10.0, *words[3:1:-1])):
        assert kass_raftery_word(edge / 2) == kass_raftery_word(-edge / 2) == word
        assert kass_raftery_word(np.nextafter(edge / 2, 0)) == below
    assert [2 * np.log(b) for b in (3, 20, 150)] == pytest.approx([2.20, 5.99, 10.02], abs=rounded(2))


def test_jeffreys_scale():
    """Steps of a half in log10 B, that is B of 3.2, 10, 32, 100: Jeffreys 1961, appendix B."""
    words = ["bare mention", "substantial", "strong", "very strong", "decisive"]
    for index, b in enumerate((3.2, 10, 32, 100), start=1):
        edge = 0.5 * index * np.log(10)
        assert np.exp(edge) == pytest.approx(b, rel=0.02)
        assert jeffreys_word(edge * (1 + 1e-12)) == jeffreys_word(-edge * (1 + 1e-12)) == words[index]
        assert jeffreys_word(edge * (1 - 1e-12)) == words[index - 1]


# --- prior sensitivity, evidence -----------------------------------------------------------------------------------

NORMAL_PRIOR = {3: [1.903, 2.899, 2.148, 1.093, -0.106], 5: [5.903, 10.099, 10.069, 9.084, 7.894]}


@pytest.mark.parametrize("z", NORMAL_PRIOR)
def test_normal_prior(z):
    """ln B of one Gaussian amplitude for priors of 1, 3, 10, 30, 100 errors; recomputed from the formula."""
    found = ln_bayes_factor_normal_prior(z, [1, 3, 10, 30, 100])
    assert found == pytest.approx(NORMAL_PRIOR[z], abs=rounded(3))


@pytest.mark.parametrize(("width", "ln_b"), [(10, 3.115), (100, 0.812)])
def test_uniform_prior(width, ln_b):
    """ln B of an amplitude 3 errors from zero, uniform from 0 to 10 or 100 errors; recomputed from the formula."""
    assert ln_bayes_factor_uniform_prior(3, width) == pytest.approx(ln_b, abs=rounded(3))


def test_ln_b_of_five_needs_about_four_deviates():
    """z of 3.7 to 4.1 for priors of 3 to 30 errors; a prior ten times wider costs ln 10; recomputed."""
    needed = [np.sqrt((5 + 0.5 * np.log1p(w**2)) * 2 * (1 + w**2) / w**2) for w in (3, 10, 30)]
    assert min(needed) == pytest.approx(3.7, abs=rounded(1))
    assert max(needed) == pytest.approx(4.1, abs=rounded(1))
    assert ln_bayes_factor_normal_prior(needed, [3, 10, 30]) == pytest.approx(5.0)
    cost = ln_bayes_factor_normal_prior(4, 100) - ln_bayes_factor_normal_prior(4, 1000)
    assert cost == pytest.approx(2.3, abs=rounded(1))


def golden_likelihood():
    """Likelihood of the golden set with the level integrated out, uniform in the radius."""
    spectrum = DepthSpectrum(
        np.array(GOLDEN["wavelength_um"]), np.full(10, 0.03), DEPTH * PPM, np.full(10, ERR * PPM)
    )
    return DepthLikelihood(spectrum, 15000 * PPM, 0.05)


def test_savage_dickey():
    """Density of zero amplitude, prior over posterior, is B: Dickey 1971, Ann. Math. Stat. 42, 204.

    The package's likelihood at zero amplitude over its mean under U(0, 500) ppm gives 7.612274, and so does the
    closed form at z = 4.414013 and a prior of 500 / 23.7171 errors; both recomputed from the formulas.
    """
    likelihood = golden_likelihood()
    nodes, weights = np.polynomial.legendre.leggauss(200)
    amplitude = np.append(0.0, 250 * (nodes + 1)) * PPM
    zeros = np.zeros((201, 10))
    ln_like = likelihood.collapse(zeros, zeros, 1.0, amplitude[:, None] * BAND).ln_evidence
    ln_b = np.log(np.exp(ln_like[1:] - ln_like[0]) @ weights / 2)
    # The level's prior is uniform in the radius: the amplitude shifts the level by 30 of 15000 ppm, its density by
    # half of that, 1e-3.
    assert ln_b == pytest.approx(7.612274, abs=2e-3)
    band = least_squares(np.column_stack([ONES, BAND]), DEPTH, np.full(10, ERR**2))
    closed = ln_bayes_factor_uniform_prior(band.z[1], 500 / band.error[1])
    assert closed == pytest.approx(7.612274, abs=2e-6)
    assert posterior_odds_probability(-closed) == pytest.approx(4.941e-4, abs=5e-8)


@pytest.mark.parametrize(("limit", "ln_b"), GOLDEN["ln_bayes_factor_by_amplitude_prior_ppm"].items())
def test_prior_width_of_the_golden_set(limit, ln_b):
    """ln B for amplitudes up to 100, 200, 500, 2000, 10000 ppm; confirmed by quadrature apart from the package."""
    band = least_squares(np.column_stack([ONES, BAND]), DEPTH, np.full(10, ERR**2))
    found = ln_bayes_factor_uniform_prior(band.z[1], float(limit) / band.error[1])
    assert found == pytest.approx(ln_b, abs=1.5e-4)  # the level's own prior cuts 4e-5 at the narrowest


def test_evidence_of_a_normal_peak_in_a_wide_prior():
    """L = exp(-x^2/2), x uniform within -10 and 10: ln Z = ln(sqrt(2 pi)/20) = -2.076794; recomputed."""
    runs = [
        estimate_evidence(
            lambda z: -0.5 * (20 * ndtr(z[:, 0]) - 10) ** 2,
            1,
            np.random.SeedSequence([1971, seed]),
            SamplerSettings.quick(),
        )
        for seed in (0, 1)
    ]
    found = combine_runs(runs, 1)
    assert found.sampling["converged"], found.sampling["flags"]
    assert found.ln_evidence == pytest.approx(-2.076794, abs=3 * found.ln_evidence_err)
    assert found.ln_evidence_err < 0.05


# --- correlated errors -----------------------------------------------------------------------------------------------


def lag():
    return np.abs(np.subtract.outer(np.arange(10), np.arange(10)))


@pytest.mark.parametrize(
    ("covariance", "amplitude", "error", "z"),
    [
        (np.diag(np.full(10, ERR**2)) + 50.0**2, 104.69, 23.72, 4.414),
        (ERR**2 * 0.5 ** lag(), 99.00, 26.83, 3.690),
    ],
    ids=["common offset", "neighbours"],
)
def test_correlated_errors(covariance, amplitude, error, z):
    """An offset common to all bins leaves the amplitude; 0.5^|i-j| widens it; recomputed from the formula."""
    found = least_squares(np.column_stack([ONES, BAND]), DEPTH, covariance)
    assert found.estimate[1] == pytest.approx(amplitude, abs=rounded(2))
    assert found.error[1] == pytest.approx(error, abs=rounded(2))
    assert found.z[1] == pytest.approx(z, abs=rounded(3))
