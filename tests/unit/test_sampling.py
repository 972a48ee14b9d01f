"""The ensemble sampler's wrapper: seeds, exactness of the moves, autocorrelation."""

import numpy as np
import pytest

from transit import sampling
from transit.mixtures import Mixture, standard_normal_mixture


def ln_gaussian(z):
    """Correlated Gaussian of two dimensions, widths 1 and 0.5, correlation 0.8, not normalised."""
    x, y = z[:, 0], z[:, 1] / 0.5
    return -0.5 * (x**2 - 1.6 * x * y + y**2) / (1 - 0.64)


def run(seed, n_steps=300):
    rng = np.random.default_rng(seed)
    guide = Mixture(np.ones(1), np.zeros((1, 2)), 2.0 * np.eye(2)[None], np.array([5.0]))
    return sampling.run_ensemble(
        ln_gaussian,
        0.5 * rng.standard_normal((20, 2)),
        n_steps,
        np.random.SeedSequence(seed),
        sampling.guided_moves(guide, 20, n_steps, rng),
    )


def test_same_seed_repeats_and_leaves_the_global_state_alone():
    before = np.random.get_state()  # noqa: NPY002 - the test is about this very state
    first, second, other = run(1), run(1), run(2)
    after = np.random.get_state()  # noqa: NPY002
    np.testing.assert_array_equal(first.positions, second.positions)
    assert not np.array_equal(first.positions, other.positions)
    assert before[2] == after[2]
    np.testing.assert_array_equal(before[1], after[1])


def test_global_seed_has_no_influence():
    np.random.seed(1)  # noqa: NPY002
    first = run(3, 40).positions
    np.random.seed(2)  # noqa: NPY002
    np.testing.assert_array_equal(first, run(3, 40).positions)


def test_children_are_fixed_and_distinct():
    parent = np.random.SeedSequence(7)
    first = sampling.child_sequence(parent, 1, 2).generate_state(4)
    parent.spawn(3)
    np.testing.assert_array_equal(first, sampling.child_sequence(parent, 1, 2).generate_state(4))
    assert not np.array_equal(first, sampling.child_sequence(parent, 1, 3).generate_state(4))
    # The tree is numpy's own: the first child of `spawn` is the child at place 0.
    np.testing.assert_array_equal(
        sampling.child_sequence(np.random.SeedSequence(7), 0).generate_state(4),
        np.random.SeedSequence(7).spawn(1)[0].generate_state(4),
    )


def test_guided_moves_leave_the_target_exact():
    """All four moves together, with a guide of the wrong shape, against the known moments."""
    chain = run(5, 2000)
    kept = chain.positions[200:]
    tau = sampling.autocorrelation_steps(kept)
    n_effective = kept.shape[0] * kept.shape[1] / tau
    flat = kept.reshape(-1, 2)
    covariance = np.array([[1.0, 0.4], [0.4, 0.25]])
    assert np.all(np.abs(flat.mean(axis=0)) < 4.5 * np.sqrt(np.diag(covariance) / n_effective))
    np.testing.assert_allclose(np.cov(flat.T), covariance, atol=4.5 * np.sqrt(2 / n_effective))
    assert 0.1 < chain.acceptance < 0.9


def test_log_probabilities_belong_to_the_positions():
    chain = run(6, 50)
    flat = chain.positions.reshape(-1, 2)
    np.testing.assert_allclose(chain.ln_prob.ravel(), ln_gaussian(flat), rtol=1e-12)


def test_walkers_at_zero_probability_wander_in():
    """Half of the starts lie outside the support, where the log probability is -inf."""

    def ln_prob(z):
        return np.where(z[:, 0] > 0, ln_gaussian(z), -np.inf)

    rng = np.random.default_rng(8)
    start = np.abs(rng.standard_normal((20, 2))) * np.where(np.arange(20) % 2, 1, -1)[:, None]
    moves = sampling.guided_moves(standard_normal_mixture(2), 20, 200, rng)
    chain = sampling.run_ensemble(ln_prob, start, 200, np.random.SeedSequence(8), moves)
    assert np.isfinite(chain.ln_prob[-1]).all()
    assert (chain.positions[-1][:, 0] > 0).all()


def test_autocorrelation_of_a_known_process():
    """AR(1) with coefficient a: integrated time (1 + a)/(1 - a) (Sokal 1997, eq. 2.19)."""
    rng = np.random.default_rng(9)
    coefficient = 0.8
    series = np.empty((4000, 20))
    series[0] = rng.standard_normal(20)
    for i in range(1, 4000):
        series[i] = coefficient * series[i - 1] + np.sqrt(1 - coefficient**2) * rng.standard_normal(20)
    assert sampling.autocorrelation_steps(series) == pytest.approx(9.0, rel=0.1)


def test_autocorrelation_with_stuck_walkers():
    rng = np.random.default_rng(10)
    series = rng.standard_normal((500, 10))
    series[:, 0] = 1.0
    assert sampling.autocorrelation_steps(series) < 1.5
    assert sampling.autocorrelation_steps(series * 1e-250) == pytest.approx(
        sampling.autocorrelation_steps(series)
    )
    assert sampling.autocorrelation_steps(np.ones((500, 10))) == np.inf
    assert sampling.autocorrelation_steps(np.ones((1, 10))) == np.inf
