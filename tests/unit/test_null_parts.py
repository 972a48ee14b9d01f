"""Parts of the false-alarm probabilities and of the sensitivity, each against a sum or integral made another way."""

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad
from scipy.special import logsumexp, ndtr

from transit.bases import line_base
from transit.errors import SettingError
from transit.hypotheses import Hypothesis, physical
from transit.library import (
    Library,
    Statistic,
    evaluate,
    feature_library,
    library_over_flat,
    library_points,
    line_statistic,
    model_depths,
    name_key,
    prior_points,
    slope_over_flat,
)
from transit.mixtures import Mixture
from transit.nulls import LeftOutTask, added_depths, false_alarms
from transit.problem import Problem
from transit.records import DepthSpectrum, Nuisances, System
from transit.sensitivity import crossing, crossing_with_error, sensitivity, stratified_truths
from transit.tails import (
    PLANTED_SQUARE,
    Tail,
    importance_weights,
    largest_chance,
    planted_templates,
)
from transit.units import PPM

SYSTEM = System(
    star_radius_rsun=0.94, planet_radius_rjup=1.28, planet_mass_mjup=0.28, equilibrium_temperature_k=1120.0
)
EDGES_UM = np.geomspace(1.1, 1.7, 13)


def small_problem(species=("H2O",), depth=0.0211, nuisances=None):
    centre, half = (EDGES_UM[1:] + EDGES_UM[:-1]) / 2, np.diff(EDGES_UM) / 2
    depth = np.broadcast_to(np.asarray(depth, float), centre.shape)
    spectrum = DepthSpectrum(centre, half, depth, np.full(12, 100 * PPM))
    return Problem(spectrum, SYSTEM, species, (560.0, 1344.0), nuisances=nuisances or Nuisances())


def random_library(rng, n_templates=50, n_bins=7, length=2.0):
    return Library("X", (length * rng.standard_normal((n_templates, n_bins))).astype(np.float32))


# --- the statistic -------------------------------------------------------------------------------------------------


def test_prior_points_are_normal_and_even():
    """Marginals are N(0, 1) (Kolmogorov-Smirnov of scipy) and far more even than independent draws would be."""
    z = prior_points(5, 1000, [1, 2])
    assert z.shape == (1000, 5)
    for column in z.T:
        assert stats.kstest(column, "norm").statistic < 0.2 * stats.kstwo.isf(0.05, 1000)
    assert np.array_equal(z, prior_points(5, 1000, [1, 2]))
    assert not np.array_equal(z, prior_points(5, 1000, [1, 3]))


@pytest.mark.parametrize("scale", [0.1, 3.0, 300.0])
def test_library_is_a_mean_likelihood(scale):
    """ln of the mean of N(y; g, 1) / N(y; 0, 1), term by term with scipy's normal density."""
    rng = np.random.default_rng(1)
    library = random_library(rng, length=scale)
    mean, noise = scale * rng.standard_normal((3, 7)), rng.standard_normal((6, 7)).astype(np.float32)
    ln_z, gain = library_over_flat(library, mean, noise)
    for k in range(6):
        y = mean[k // 2] + noise[k]
        by_template = stats.norm.logpdf(y - library.templates.astype(float)).sum(axis=1)
        flat = stats.norm.logpdf(y).sum()
        assert ln_z[k] == pytest.approx(logsumexp(by_template) - np.log(50) - flat, abs=1e-3, rel=1e-6)
        assert gain[k] == pytest.approx(2 * (by_template.max() - flat), abs=2e-3, rel=1e-6)


def test_weighted_library_is_a_weighted_mean():
    """scipy's logsumexp with factors, weights over sixteen powers of ten; the fall in chi-square knows no weights."""
    rng = np.random.default_rng(2)
    plain = random_library(rng)
    weight = 10 ** rng.uniform(-16, 0, 50)
    weight /= weight.mean()
    library = Library("X", plain.templates, weight.astype(np.float32))
    mean, noise = 2 * rng.standard_normal((8, 7)), rng.standard_normal((8, 7)).astype(np.float32)
    ln_z, gain = library_over_flat(library, mean, noise)
    exponent = (mean + noise) @ plain.exact.T - plain.half_square
    np.testing.assert_allclose(ln_z, logsumexp(exponent, axis=1, b=weight / 50), atol=2e-5)
    np.testing.assert_allclose(gain, 2 * exponent.max(axis=1), atol=2e-5)


def test_focused_points_stand_for_the_prior():
    """Weighted means of focused points are those of N(0, 1), and they are dense where they should be."""
    problem = small_problem()
    centre, width = np.array([[1.5, -1.0, 0.5, 0.0]]), 0.05
    focus = Mixture(np.ones(1), centre, width**2 * np.eye(4)[None], 5.0)
    z, weight = library_points(problem, Hypothesis("H2O", ("H2O",)), 4096, [1, 2], (focus,))
    assert z.shape == (4096, 5)
    assert weight.mean() == pytest.approx(1)
    assert weight.max() < 2.1
    for column in z.T:
        for power, expected in ((1, 0), (2, 1), (3, 0), (4, 3)):
            values = weight * (column**power - expected)
            assert values.mean() == pytest.approx(0, abs=5 * values.std() / 64)
    near = np.linalg.norm(z[:, :4] - centre, axis=1) < 4 * width
    assert near.sum() > 1500
    assert np.std(z[near, 4]) == pytest.approx(1, abs=0.1)  # abundances are those of the prior there as well
    plain, even = library_points(problem, Hypothesis("H2O", ("H2O",)), 4096, [1, 2])
    assert np.array_equal(plain[:2048], z[:2048])
    assert np.all(even == 1)


@pytest.mark.parametrize("length", [1e-3, 0.7, 30.0])
@pytest.mark.parametrize("z", [-20.0, -1.0, 0.0, 4.0, 25.0])
def test_slope_is_an_integral(length, z):
    """exp(s z L - s^2 L^2 / 2) averaged over s in (-1, 1), by adaptive quadrature."""
    direction = np.array([0.6, 0.8])
    ln_b, gain = slope_over_flat((z * direction)[None, :], length * direction)
    peak = np.clip(z / length, -1, 1)
    top = peak * z * length - 0.5 * (peak * length) ** 2
    breaks = np.clip(peak + np.array([-8, -1, 1, 8]) / length, -1, 1)
    integral = quad(lambda s: np.exp(s * z * length - 0.5 * (s * length) ** 2 - top), -1, 1, points=breaks)[0]
    assert ln_b[0] == pytest.approx(top + np.log(integral / 2), abs=1e-6)
    assert gain[0] == pytest.approx(z**2)


def test_best_null_is_the_best():
    """Against the largest of nothing, slope and continuum, in ln B and in chi-square."""
    rng = np.random.default_rng(2)
    own, continuum = random_library(rng), random_library(rng, length=1.5)
    edge = rng.standard_normal(7)
    mean, noise = (
        rng.uniform(0, 2, (40, 1)) * rng.standard_normal((40, 7)),
        rng.standard_normal((40, 7)).astype(np.float32),
    )
    ln_b, gain = evaluate(Statistic((own, own), continuum, edge), mean, noise)
    parts = [
        library_over_flat(own, mean, noise),
        library_over_flat(continuum, mean, noise),
        slope_over_flat(mean + noise, edge),
    ]
    for k, found in enumerate((ln_b, gain)):
        best = np.maximum(0, np.maximum(parts[1][k], parts[2][k]))
        assert np.array_equal(found[:, 0], found[:, 1])
        np.testing.assert_allclose(found[:, 0], parts[0][k] - best, atol=1e-4)
    wins = np.argmax([np.zeros(40), parts[1][0], parts[2][0]], axis=0)
    assert set(wins) == {0, 1, 2}  # each null is the best one for some


def test_strong_features_do_not_overflow():
    """A signal of 3000 errors: ln B near half its square, finite, and right to a part in a million."""
    g = np.zeros((4, 6), np.float32)
    g[:, 0] = [0, 1000, 3000, 3001]
    ln_b, gain = evaluate(Statistic((Library("X", g),)), g[2:3].astype(float), np.zeros((1, 6)))
    assert ln_b[0, 0] == pytest.approx(0.5 * 3000**2 - np.log(4) + np.log1p(np.exp(-0.5)), rel=1e-9)
    assert gain[0, 0] == pytest.approx(3000**2, rel=1e-9)


def test_slope_in_every_hypothesis_leaves_no_slope_null():
    problem = small_problem(nuisances=Nuisances(slope=True))
    base = line_base(problem, "flat")
    assert line_statistic(problem, base, None, ()).slope_edge is None
    assert line_statistic(small_problem(), base, None, ()).slope_edge is not None


def test_templates_are_whitened_depths():
    """For independent equal errors a template's length is its rms about its mean over the error, by hand."""
    problem = small_problem()
    library = feature_library(problem, "H2O", line_base(problem, "flat"), 16, 1)
    z = prior_points(5, 16, [1, name_key("H2O"), 2])
    with_it = model_depths(problem, Hypothesis("H2O", ("H2O",)), z)
    without = model_depths(problem, Hypothesis("continuum", ()), z[:, :4])
    expected = 12 * np.var(with_it - without, axis=1) / (100 * PPM) ** 2
    np.testing.assert_allclose(2 * library.half_square, expected, rtol=1e-4, atol=1e-8)


# --- weights and tails ---------------------------------------------------------------------------------------------


def test_weights_are_ratios_of_densities():
    """Plain over mixture density with scipy's multivariate normal, 20 per cent plain and 80 per cent planted."""
    rng = np.random.default_rng(3)
    planting = random_library(rng, n_templates=9)
    noise = rng.standard_normal((30, 7)).astype(np.float32)
    noise[10:] += planting.templates[rng.integers(9, size=20)]
    plain = stats.multivariate_normal(np.zeros(7)).pdf(noise)
    planted = np.mean([stats.multivariate_normal(g).pdf(noise) for g in planting.templates], axis=0)
    expected = plain / (0.2 * plain + 0.8 * planted)
    np.testing.assert_allclose(importance_weights(planting, noise), expected, rtol=1e-4)


@pytest.mark.parametrize("length", [1e-4, 1.0, 1e4])
def test_planted_templates_have_lengths_that_matter(length):
    """Whatever the precision of the spectrum, planted templates lie where false alarms do."""
    planting = planted_templates([random_library(np.random.default_rng(4), length=length)], 1)
    square = 2 * planting.half_square
    low, high = PLANTED_SQUARE
    assert len(square) > 500
    assert np.all((square > 0.999 * low) & (square < 1.001 * high))
    assert np.ptp(square) > 0.8 * (high - low)


def test_nothing_to_plant_leaves_plain_noise():
    """Templates of no length at all: every weight is 1."""
    empty = Library("X", np.zeros((8, 5), np.float32))
    planting = planted_templates([empty], 1)
    noise = np.random.default_rng(1).standard_normal((20, 5)).astype(np.float32)
    np.testing.assert_allclose(importance_weights(planting, noise), 1)


def test_tail_counts():
    """With weights of one the chance is a share, and its error that of the means' own shares."""
    value = np.random.default_rng(5).standard_normal((400, 10))
    tail = Tail(np.ones((400, 10)), value)
    for threshold in (-1.0, 0.0, 1.5):
        p, err = tail.chance(threshold)
        assert p == pytest.approx(np.mean(value >= threshold))
        assert err == pytest.approx(np.sqrt(p * (1 - p) / 4000), rel=0.15)


def test_beyond_the_simulations_the_chance_is_a_bound():
    """The chance of a value that no simulation reaches is that of the last resolved one, never zero."""
    value = np.arange(1000.0).reshape(100, 10)
    tail = Tail(np.ones((100, 10)), value)
    assert tail.resolved == 989.0  # the eleventh from above
    assert tail.chance(989.0)[0] == tail.chance(995.0)[0] == tail.chance(1e9)[0] == pytest.approx(0.011)
    assert tail.chance(900.0)[0] == pytest.approx(0.1)
    assert tail.chance(-1e9)[0] == 1.0


def test_largest_chance_is_quoted():
    value = np.arange(1000.0).reshape(100, 10)
    tails = {"flat": Tail(np.ones((100, 10)), value), "slope": Tail(np.ones((100, 10)), value + 50)}
    p, _, by_null = largest_chance(tails, 900.0)
    assert by_null == pytest.approx({"flat": 0.1, "slope": 0.15})
    assert p == pytest.approx(0.15)


def test_too_few_simulations_are_refused():
    with pytest.raises(SettingError, match="expected at least 80 of each null"):
        false_alarms(small_problem(), ("H2O",), (), {}, seed=1, n_simulations=79)


# --- left out ------------------------------------------------------------------------------------------------------


def test_what_a_species_adds():
    """Depth with both less depth with one, for the same temperature, deck and haze, computed draw by draw."""
    problem = small_problem(("H2O", "CH4"))
    one, both = Hypothesis("H2O", ("H2O",)), Hypothesis("all", ("H2O", "CH4"))
    draws = np.random.default_rng(6).standard_normal(
        (64, 6)
    )  # the sixth is the error factor of an inflated fit
    task = LeftOutTask(problem, one, "CH4", draws[0], draws, 800, 1, 1.0, 0.0)
    added = added_depths(problem, task)
    assert added.shape == (64, 12)
    # The abundance that was drawn is not handed out: the one of the same effect must lie inside the prior.
    names = [p.name for p in problem.parameters(both)]
    assert names[-2:] == ["log10_vmr_H2O", "log10_vmr_CH4"]
    abundance = np.linspace(-12, -1, 3000)
    z = np.repeat(draws[:1, :5], 3000, axis=0)
    low, high = -12.0, -1.0
    z = np.column_stack([z, stats.norm.ppf(np.clip((abundance - low) / (high - low), 1e-9, 1 - 1e-9))])
    assert physical(z, problem.parameters(both))[1500, 5] == pytest.approx(abundance[1500])
    grid = model_depths(problem, both, z) - model_depths(problem, one, draws[:1, :5])
    nearest = np.abs(grid - added[0]).max(axis=1).min()
    assert nearest < 2e-3 * np.abs(grid).max()


# --- sensitivity ---------------------------------------------------------------------------------------------------


def test_crossing_of_a_known_curve():
    """Detection by a probit curve in ln amplitude: it crosses 80 per cent at 2 exp(0.3 Phi^-1(0.8)) = 2.574."""
    rng = np.random.default_rng(7)
    amplitude = np.exp(rng.uniform(np.log(0.1), np.log(30), 4000))
    truth = 2 * np.exp(0.3 * stats.norm.ppf(0.8))
    errors = []
    for _ in range(20):
        detected = rng.random(4000) < ndtr((np.log(amplitude) - np.log(2)) / 0.3)
        found, err = crossing_with_error(amplitude, np.arange(4000), detected, 0.8, rng)
        errors.append((found - truth) / err)
    assert abs(np.mean(errors)) < 0.8
    assert 0.5 < np.std(errors) < 1.6


def test_a_few_lucky_detections_are_no_sensitivity():
    """A rate of 60 per cent everywhere, the ten strongest truths seen by luck."""
    rng = np.random.default_rng(8)
    ln_amplitude = np.sort(rng.uniform(-2, 3, 2000))
    seen = (rng.random(2000) < 0.6).astype(float)
    seen[-10:] = 1.0
    assert crossing(ln_amplitude, seen, np.ones(2000), 0.8) is None
    assert crossing(ln_amplitude, np.zeros(2000), np.ones(2000), 0.8) is None
    assert crossing(ln_amplitude, np.ones(2000), np.ones(2000), 0.8) == ln_amplitude[0]
    assert crossing(np.zeros(0), np.zeros(0), np.zeros(0), 0.8) is None


def test_truths_are_spread_over_amplitudes():
    """Rare amplitudes get their share, none is used more than four times, those too small to matter are left out."""
    rng = np.random.default_rng(9)
    amplitude = np.concatenate([rng.uniform(0.01, 0.02, 5000), np.geomspace(0.02, 20, 300), np.zeros(50)])
    chosen = stratified_truths(amplitude, 2000, rng)
    assert np.bincount(chosen).max() <= 4
    assert amplitude[chosen].min() >= 0.01
    strong = np.mean(amplitude[chosen] > 0.5)
    assert strong > 5 * np.mean(amplitude > 0.5)
    assert not len(stratified_truths(np.zeros(10), 100, rng))


def test_sensitivity_looks_at_no_depth_but_the_median():
    """Other depths with the same median give the same numbers."""
    thresholds = SYSTEM.thresholds
    bump = 0.0211 + 800 * PPM * np.array([0, 0, 1, -1, 2, -2, 3, -3, 0, 0, 0, 0])
    found = [
        sensitivity(
            small_problem(depth=d),
            ("H2O",),
            seed=3,
            thresholds=thresholds,
            n_simulations=512,
            n_templates=512,
        )["H2O"]
        for d in (0.0211, bump)
    ]
    assert found[0] == found[1]
    assert found[0].sentence == (
        f"H2O of {found[0].amplitude_scale_heights:.1f} scale heights or more would show as present with 80 % chance."
    )
    assert found[0].largest_scale_heights > found[0].amplitude_scale_heights > 0
