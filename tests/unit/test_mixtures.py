"""Mixtures: densities against scipy, draws and fits against known truth, weights against closed forms."""

import numpy as np
import pytest
from scipy import stats

from transit.mixtures import (
    Mixture,
    choose_mixture,
    combine_mixtures,
    effective_size,
    fit_mixture,
    pareto_shape,
    spread_start,
    standard_normal_mixture,
    systematic_resample,
)

COVARIANCE = np.array([[2.0, 0.6, 0.1], [0.6, 1.0, -0.3], [0.1, -0.3, 0.5]])


@pytest.fixture
def generator():
    return np.random.default_rng(20)


@pytest.fixture
def mixture():
    """A Gaussian and a t with three degrees of freedom in three dimensions."""
    means = np.array([[0.0, 1.0, -1.0], [3.0, -2.0, 0.5]])
    return Mixture(
        np.array([3.0, 1.0]), means, np.array([COVARIANCE, 0.5 * np.eye(3)]), np.array([np.inf, 3.0])
    )


def test_density_equals_scipy(mixture, generator):
    z = 3 * generator.standard_normal((50, 3))
    gaussian = stats.multivariate_normal(mixture.means[0], COVARIANCE).pdf(z)
    student = stats.multivariate_t(mixture.means[1], 0.5 * np.eye(3), df=3).pdf(z)
    np.testing.assert_allclose(mixture.ln_density(z), np.log(0.75 * gaussian + 0.25 * student), rtol=1e-12)


def test_density_integrates_to_one():
    mixture = Mixture(
        np.array([0.3, 0.7]),
        np.array([[-1.0, 0.5], [2.0, -1.0]]),
        np.array([[[0.3, 0.1], [0.1, 0.2]], [[0.5, -0.2], [-0.2, 0.4]]]),
        np.array([7.0, np.inf]),
    )
    axis = np.linspace(-40, 40, 2001)
    grid = np.stack(np.meshgrid(axis, axis, indexing="ij"), axis=-1).reshape(-1, 2)
    total = np.exp(mixture.ln_density(grid)).sum() * (axis[1] - axis[0]) ** 2
    # A t with seven degrees of freedom has 1e-9 of its mass beyond the grid.
    assert total == pytest.approx(1.0, abs=1e-7)


def test_density_of_narrow_and_far_points(generator):
    """Widths of 1e-3 around a centre far from zero keep their digits; far points give finite densities."""
    mixture = Mixture(np.ones(1), np.full((1, 4), 3.0), 1e-6 * np.eye(4)[None], np.array([np.inf]))
    z = 3.0 + 1e-3 * generator.standard_normal((20, 4))
    expected = stats.norm(3.0, 1e-3).logpdf(z).sum(axis=1)
    np.testing.assert_allclose(mixture.ln_density(z), expected, rtol=1e-9)
    assert np.isfinite(mixture.ln_density(np.full((1, 4), 50.0))).all()


def test_draws_follow_the_density(mixture, generator):
    draws = mixture.draw(40000, generator)
    # E[f/q] over draws from q is one for any other density f that q covers.
    other = standard_normal_mixture(3)
    ratio = np.exp(other.ln_density(draws) - mixture.ln_density(draws))
    assert ratio.mean() == pytest.approx(1.0, abs=4 * ratio.std() / np.sqrt(len(ratio)))
    mean = mixture.weights @ mixture.means
    # The t with three degrees of freedom has a variance three times its scale.
    spread = np.sqrt(
        0.75 * np.diag(COVARIANCE) + 0.25 * 1.5 + 0.75 * 0.25 * (np.diff(mixture.means, axis=0)[0]) ** 2
    )
    np.testing.assert_allclose(draws.mean(axis=0), mean, atol=4 * spread.max() / 200)


def test_draws_come_in_random_order(mixture, generator):
    """Consumers take the first n draws as a fair sample: both halves must hold the same mixture."""
    draws = mixture.draw(4000, generator)
    first, second = draws[:2000, 0], draws[2000:, 0]
    assert stats.ks_2samp(first, second).pvalue > 1e-3


def test_block_draws_leave_the_mixture_invariant(mixture):
    """Gibbs-like replacement of any block maps draws of the mixture to draws of the mixture."""
    draws = mixture.draw(20000, np.random.default_rng(1))
    random = np.random.RandomState(np.random.MT19937(np.random.SeedSequence(2)))
    for block in (np.array([0]), np.array([0, 2]), np.array([0, 1, 2])):
        replaced = mixture.draw_block(draws, block, random)
        kept = np.setdiff1d(np.arange(3), block)
        np.testing.assert_array_equal(replaced[:, kept], draws[:, kept])
        for projection in (replaced, replaced @ np.array([[1.0, 1, 0], [0, -1, 1], [1, 0, 1]])):
            reference = mixture.draw(20000, np.random.default_rng(3))
            if projection is not replaced:
                reference = reference @ np.array([[1.0, 1, 0], [0, -1, 1], [1, 0, 1]])
            for axis in range(3):
                assert stats.ks_2samp(projection[:, axis], reference[:, axis]).pvalue > 1e-3


def test_combined_mixture_is_the_weighted_sum(mixture, generator):
    z = generator.standard_normal((30, 3))
    prior = standard_normal_mixture(3)
    both = combine_mixtures([(0.2, prior), (0.6, mixture), (0.0, prior)])
    expected = 0.25 * np.exp(prior.ln_density(z)) + 0.75 * np.exp(mixture.ln_density(z))
    np.testing.assert_allclose(np.exp(both.ln_density(z)), expected, rtol=1e-12)


def test_widened_scales_the_distance(mixture, generator):
    z = generator.standard_normal((5, 3))
    np.testing.assert_allclose(
        mixture.widened(4.0).squared_distance(z), mixture.squared_distance(z) / 4, rtol=1e-12
    )


def test_indefinite_scale_is_refused():
    with pytest.raises(np.linalg.LinAlgError):
        Mixture(np.ones(1), np.zeros((1, 2)), np.array([[[1.0, 2.0], [2.0, 1.0]]]), np.array([5.0]))


def test_fit_recovers_a_mixture(generator):
    truth = Mixture(
        np.array([0.3, 0.7]),
        np.array([[-2.0, 0.0], [2.0, 1.0]]),
        np.array([[[0.4, 0.1], [0.1, 0.3]], [[1.0, -0.6], [-0.6, 0.8]]]),
        np.array([np.inf, np.inf]),
    )
    draws = truth.draw(20000, generator)
    start = spread_start(draws, np.ones(len(draws)), 2, np.inf, generator)
    fit, mean_ln_density = fit_mixture(draws, np.ones(len(draws)), start, max_iterations=300, tolerance=1e-9)
    order = np.argsort(fit.means[:, 0])
    # Standard errors: about width / sqrt(6000) for the small component; five of them.
    np.testing.assert_allclose(fit.weights[order], truth.weights, atol=0.02)
    np.testing.assert_allclose(fit.means[order], truth.means, atol=0.06)
    np.testing.assert_allclose(fit.scales[order], truth.scales, atol=0.08)
    assert mean_ln_density == pytest.approx(truth.ln_density(draws).mean(), abs=2e-3)


def test_fit_uses_the_weights(generator):
    """Draws of one width, weighted towards another: the fit is of the weighted density."""
    draws = 2.0 * generator.standard_normal((40000, 2)) + 0.3
    weights = stats.norm(0.5, 1.0).pdf(draws).prod(axis=1) / stats.norm(0.3, 2.0).pdf(draws).prod(axis=1)
    fit = choose_mixture(draws, weights, generator, sizes=(1,), dof=np.inf)
    error = 5 / np.sqrt(effective_size(weights))
    np.testing.assert_allclose(fit.means[0], 0.5, atol=error)
    np.testing.assert_allclose(fit.scales[0], np.eye(2), atol=1.5 * error)


def test_fit_of_a_t_finds_its_scale(generator):
    truth = Mixture(np.ones(1), np.array([[1.0, -1.0, 0.0]]), COVARIANCE[None], np.array([5.0]))
    draws = truth.draw(20000, generator)
    start = spread_start(draws, np.ones(len(draws)), 1, 5.0, generator)
    fit, _ = fit_mixture(draws, np.ones(len(draws)), start, max_iterations=200, tolerance=1e-9)
    np.testing.assert_allclose(fit.scales[0], COVARIANCE, atol=5 * 2.0 * np.sqrt(2 / 20000) * 1.3)


def test_criterion_counts_the_components(generator):
    centres = np.array([[0.0, 0.0], [8.0, 0.0], [0.0, 8.0]])
    draws = np.concatenate([c + generator.standard_normal((400, 2)) for c in centres])
    assert choose_mixture(draws, np.ones(len(draws)), generator, dof=np.inf).n_components == 3
    assert choose_mixture(draws[:400], np.ones(400), generator, dof=np.inf).n_components == 1


def test_component_cannot_collapse_onto_one_draw(generator):
    """A single far draw with a large weight stays a component of finite width."""
    draws = np.vstack([generator.standard_normal((500, 3)), np.full((1, 3), 20.0)])
    weights = np.append(np.ones(500), 50.0)
    fit = choose_mixture(draws, weights, generator)
    assert np.linalg.eigvalsh(fit.scales).min() > 1e-4
    assert np.isfinite(fit.ln_density(draws)).all()


def test_fits_do_not_touch_their_input(generator):
    draws, weights = generator.standard_normal((200, 2)), generator.random(200)
    before = draws.copy(), weights.copy()
    choose_mixture(draws, weights, generator)
    np.testing.assert_array_equal(draws, before[0])
    np.testing.assert_array_equal(weights, before[1])


def test_systematic_resampling_is_fair(generator):
    weights = np.array([0.0, 1.0, 2.5, 0.5, 0.0])
    counts = np.bincount(systematic_resample(weights, 4000, generator), minlength=5)
    # Each count is within one of its expectation: the point of a common offset.
    assert np.all(np.abs(counts - 1000 * weights) <= 1)


def test_effective_size_of_equal_and_single_weights():
    assert effective_size(np.full(70, 0.2)) == pytest.approx(70)
    assert effective_size(np.array([0.0, 3.0])) == pytest.approx(1)
    assert effective_size(np.zeros(4)) == 0


@pytest.mark.parametrize("shape", [0.3, 0.7, 1.1])
def test_pareto_shape_of_pareto_weights(shape, generator):
    """Exact Pareto weights; the prior of ten draws towards 0.5 is part of the expectation."""
    ln_weights = shape * generator.exponential(size=40000)
    n_tail = int(3 * np.sqrt(40000))
    expected = (n_tail * shape + 5) / (n_tail + 10)
    # Standard error of a Pareto shape: (1 + k)/sqrt(n) (Smith 1987, Ann. Stat. 15, 1174).
    assert pareto_shape(ln_weights) == pytest.approx(expected, abs=4 * (1 + shape) / np.sqrt(n_tail))


def test_pareto_shape_needs_a_tail():
    assert pareto_shape(np.zeros(20)) == np.inf
    assert pareto_shape(np.zeros(2000)) == np.inf
    assert pareto_shape(np.append(np.full(2000, -np.inf), 0.0)) == np.inf
