"""Tail probabilities, bounds and scales at the edges of what they accept."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from transit.errors import SettingError
from transit.prior_width import ln_bayes_factor_normal_prior, ln_bayes_factor_uniform_prior
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


@given(st.floats(0.0, 37.0))
def test_deviate_and_probability_are_inverse(z):
    """Far into the upper tail, where 1 - p has long lost its digits."""
    assert normal_deviate(p_from_deviate(z)) == pytest.approx(z, abs=1e-12, rel=1e-12)


def test_deviates_at_the_ends():
    """Certainty either way is infinitely far out; even odds lie at zero."""
    assert list(normal_deviate(np.array([0.0, 0.5, 1.0]))) == [np.inf, 0.0, -np.inf]


def test_trials_of_tiny_probabilities():
    """n p, which 1 - (1 - p)^n written out would turn into zero."""
    assert trials(1e-30, 40) == pytest.approx(4e-29, rel=1e-12)
    assert trials(1e-9, 1) == pytest.approx(1e-9, rel=1e-12)
    assert list(trials(np.array([0.0, 1.0]), 7)) == [0.0, 1.0]


@given(st.floats(1e-12, 0.999), st.integers(1, 1000))
def test_trials_bounds(p, n):
    """Between one look's probability and Bonferroni's n p."""
    assert p * (1 - 1e-12) <= trials(p, n) <= min(1.0, n * p) * (1 + 1e-12)


def test_trials_against_drawing():
    """The least of seven uniform numbers is below 0.05 as often as the formula says, within four binomial errors."""
    least = np.random.default_rng(7).random((50000, 7)).min(axis=1)
    expected = trials(0.05, 7)
    assert np.mean(least <= 0.05) == pytest.approx(expected, abs=4 * np.sqrt(expected / 50000))


def test_sellke_bound_ends_at_one():
    """At p of 1/e the bound reaches one and stays there; a p of zero has none."""
    assert sellke_bound(1 / np.e - 1e-9) == pytest.approx(1.0, abs=1e-12)
    assert list(sellke_bound(np.array([0.0, 0.4, 0.9, 1.0]))) == [np.inf, 1.0, 1.0, 1.0]
    grid = sellke_bound(np.linspace(1e-6, 1, 500))
    assert np.all(np.diff(grid) <= 0)


def test_bound_of_a_huge_deviate_is_infinite():
    """No warning and no error: the bound is larger than any number that can be held."""
    assert bayes_bound_gaussian(100.0) == np.inf
    assert bayes_bound_gaussian(-2.0) == bayes_bound_gaussian(2.0)


@pytest.mark.parametrize("z", [-40.0, -2.0, 0.0, 0.5, 3.0, 12.0, 40.0])
@pytest.mark.parametrize("width", [1e-6, 0.3, 5.0, 200.0])
def test_uniform_prior_against_quadrature(z, width):
    """The likelihood ratio exp(z a - a^2/2) averaged over 0 to width by Gauss-Legendre quadrature."""
    nodes, weights = np.polynomial.legendre.leggauss(2000)
    a = width * (nodes + 1) / 2
    exponent = z * a - a**2 / 2
    expected = exponent.max() + np.log(np.exp(exponent - exponent.max()) @ weights / 2)
    assert ln_bayes_factor_uniform_prior(z, width) == pytest.approx(expected, abs=1e-8, rel=1e-9)


@pytest.mark.parametrize("z", [-2.0, 0.0, 3.0, 8.0])
@pytest.mark.parametrize("width", [0.1, 2.0, 30.0])
def test_normal_prior_against_quadrature(z, width):
    """The likelihood ratio averaged over the prior by Gauss-Hermite quadrature about the posterior's own centre."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    sd = width / np.sqrt(1 + width**2)
    a = z * sd**2 + 1.3 * sd * nodes
    ln_joint = z * a - a**2 / 2 - a**2 / (2 * width**2) - np.log(width) + np.log(1.3 * sd) + nodes**2 / 2
    expected = np.log(np.exp(ln_joint) @ weights / np.sqrt(2 * np.pi))
    assert ln_bayes_factor_normal_prior(z, width) == pytest.approx(expected, abs=1e-6)


def test_no_bayes_factor_passes_its_bounds():
    """For any prior ln B stays below z^2/2 (Edwards et al. 1963)."""
    z = np.linspace(-5, 9, 57)
    for width in (0.1, 1.0, 10.0):
        assert np.all(ln_bayes_factor_normal_prior(z, width) <= np.log(bayes_bound_gaussian(z)) + 1e-12)
        assert np.all(ln_bayes_factor_uniform_prior(z, width) <= np.log(bayes_bound_gaussian(z)) + 1e-12)


def test_prior_odds():
    """Odds multiply: B of 10 with odds of 1 to 10 leaves an even chance."""
    assert posterior_odds_probability(np.log(10), 0.1) == pytest.approx(0.5)
    assert posterior_odds_probability(-1000.0) == 0.0
    assert posterior_odds_probability(1000.0) == 1.0


def test_words_are_blind_to_the_sign():
    """The sign tells for which hypothesis, the word how much."""
    for word in (trotta_word, kass_raftery_word, jeffreys_word):
        assert word(-3.7) == word(3.7)
        assert word(1e6) != word(0.0)
        assert word(np.inf) == word(1e6)


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda: normal_deviate(-0.01), "-0.01 is not a probability"),
        (lambda: normal_deviate(np.array([0.2, 1.5])), "1.5 is not a probability"),
        (lambda: normal_deviate(np.nan), "not a number"),
        (lambda: p_from_deviate(np.nan), "not a number"),
        (lambda: sellke_bound(2.0), "2 is not a probability"),
        (lambda: trials(0.1, 0), "number of looks is 0"),
        (lambda: trials(-1, 3), "-1 is not a probability"),
        (lambda: boundary_p(np.array([3.0, -0.5])), "fall in chi-square of -0.5 is negative"),
        (lambda: bic(10.0, 2, 0), "0 bins"),
        (lambda: bic(10.0, -1, 5), "-1 free parameters"),
        (lambda: aicc(10.0, 4, 5), "at least 6 bins"),
        (lambda: ln_bayes_factor_uniform_prior(1.0, 0.0), "width of the prior is 0"),
        (lambda: ln_bayes_factor_normal_prior(1.0, -2.0), "width of the prior is -2"),
        (lambda: posterior_odds_probability(1.0, 0.0), "Prior odds of 0"),
        (lambda: trotta_word(np.nan), "ln B is not a number"),
    ],
)
def test_what_cannot_be_used_is_said(call, said):
    """One sentence with what was found."""
    with pytest.raises(SettingError, match=said):
        call()
