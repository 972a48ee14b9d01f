"""The evidence against closed forms, quadrature and dynesty, and its refusal to believe a spoilt run.

Every comparison allows three combined errors, with the errors that the runs themselves quote.
"""

import dataclasses

import dynesty
import numpy as np
import pytest
from scipy.special import logsumexp, ndtr, ndtri

from transit.evidence import (
    Budget,
    EvidenceError,
    SamplerSettings,
    bridge_estimate,
    climb,
    combine_runs,
    error_floor,
    estimate_evidence,
    importance_estimate,
    local_covariances,
    tempering_step,
    truncate,
)

STANDARD = SamplerSettings.standard()
LN_2PI = np.log(2 * np.pi)


def both_seeds(ln_likelihood, n_dim, settings=STANDARD, **options):
    """Two independent runs and their combination."""
    runs = [
        estimate_evidence(ln_likelihood, n_dim, np.random.SeedSequence([11, i]), settings, **options)
        for i in range(2)
    ]
    return runs, combine_runs(runs, n_dim)


def assert_agrees(combined, expected, expected_err=0.0):
    assert combined.sampling["converged"], combined.sampling["flags"]
    assert combined.ln_evidence == pytest.approx(
        expected, abs=3 * np.hypot(combined.ln_evidence_err, expected_err)
    )


# ---------------------------------------------------------------------------------------------------------
# Closed forms


def test_gaussian_on_a_flat_prior():
    """L = exp(-x^2/2), x in U(-10, 10): ln Z = ln(sqrt(2 pi)/20), the tails beyond 10 being 1e-23."""
    runs, combined = both_seeds(lambda z: -0.5 * (20 * ndtr(z[:, 0]) - 10) ** 2, 1)
    assert_agrees(combined, -2.076794)
    x = 20 * ndtr(combined.draws_z[:, 0]) - 10
    n_effective = min(run.ess for run in runs)
    assert x.mean() == pytest.approx(0.0, abs=4 / np.sqrt(min(n_effective, 2000)))
    assert x.std() == pytest.approx(1.0, abs=4 / np.sqrt(2 * min(n_effective, 2000)))
    assert combined.best_ln_likelihood == pytest.approx(0.0, abs=1e-3)


def linear_model(n_dim, seed):
    """y = G z + noise with prior z ~ N(0, I): ln Z = ln N(y; 0, C + G G^T) (e.g. Bishop 2006, eq. 2.115)."""
    rng = np.random.default_rng(seed)
    matrix = rng.standard_normal((3 * n_dim, n_dim)) @ np.diag(np.geomspace(100.0, 0.1, n_dim))
    data = matrix @ rng.standard_normal(n_dim) + rng.standard_normal(3 * n_dim)
    spread = np.eye(3 * n_dim) + matrix @ matrix.T
    expected = -0.5 * (
        data @ np.linalg.solve(spread, data) + np.linalg.slogdet(spread)[1] + len(data) * LN_2PI
    )

    def ln_likelihood(z):
        residual = data - z @ matrix.T
        return -0.5 * (np.einsum("wn,wn->w", residual, residual) + len(data) * LN_2PI)

    return ln_likelihood, expected


@pytest.mark.parametrize("n_dim", [3, 7, 11])
def test_linear_model(n_dim):
    """Widths from 0.01 of the prior's to all of it."""
    ln_likelihood, expected = linear_model(n_dim, n_dim)
    runs, combined = both_seeds(ln_likelihood, n_dim)
    assert_agrees(combined, expected)
    # The quoted own error must hold as well, without the floor.
    own = np.sqrt(sum(run.ln_evidence_err**2 for run in runs)) / 2
    assert np.mean([run.ln_evidence for run in runs]) == pytest.approx(expected, abs=4 * own)
    bridge_err = np.sqrt(sum(run.bridge_err**2 for run in runs)) / 2
    assert np.mean([run.ln_evidence_bridge for run in runs]) == pytest.approx(expected, abs=4.5 * bridge_err)


def two_modes(widths):
    """Two Gaussian peaks of weights 1:3 at -1.5 and 1 in four dimensions; returns L, ln Z, share of the first.

    The prior N(0, I) times each peak integrates to N(centre; 0, (1 + width^2) I).
    """
    centres, widths, weights = np.array([[-1.5] * 4, [1.0] * 4]), np.array(widths), np.array([0.25, 0.75])

    def ln_likelihood(z):
        distance2 = ((z[:, None, :] - centres) ** 2).sum(axis=2)
        return logsumexp(
            np.log(weights) - 0.5 * distance2 / widths**2 - 4 * np.log(widths) - 2 * LN_2PI, axis=1
        )

    total = 1 + widths**2
    ln_mass = np.log(weights) - 0.5 * (centres**2).sum(axis=1) / total - 2 * (LN_2PI + np.log(total))
    return ln_likelihood, logsumexp(ln_mass), np.exp(ln_mass[0] - logsumexp(ln_mass))


@pytest.mark.parametrize(
    ("widths", "options"),
    [
        ((0.15, 0.2), {"stratum_dim": 0}),
        # A peak of 1e-6 of the prior's volume is found only by a hint, such as the optimum of a nested model.
        ((0.03, 0.1), {"stratum_dim": 0, "starts_z": np.full((1, 4), -1.4)}),
    ],
)
def test_two_modes(widths, options):
    ln_likelihood, expected, share = two_modes(widths)
    _, combined = both_seeds(ln_likelihood, 4, **options)
    assert_agrees(combined, expected)
    n_effective = min(2000.0, combined.sampling["ess"])
    found = np.mean(combined.draws_z[:, 0] < 0)
    assert found == pytest.approx(share, abs=4 * np.sqrt(share * (1 - share) / n_effective))


# ---------------------------------------------------------------------------------------------------------
# Quadrature


def by_quadrature(ln_likelihood, n_nodes):
    """ln Z in probit space by Gauss-Legendre quadrature in u = Phi(z), `n_nodes` for each dimension."""
    nodes = [np.polynomial.legendre.leggauss(n) for n in n_nodes]
    grid = np.stack(np.meshgrid(*[(x + 1) / 2 for x, _ in nodes], indexing="ij"), axis=-1).reshape(
        -1, len(nodes)
    )
    weight = np.stack(np.meshgrid(*[w / 2 for _, w in nodes], indexing="ij"), axis=-1)
    return logsumexp(ln_likelihood(ndtri(grid)), b=weight.reshape(-1, len(nodes)).prod(axis=1))


def test_banana():
    """A curved ridge of width 0.05 in two dimensions."""

    def ln_likelihood(z):
        return -0.5 * ((z[:, 1] - 0.8 * z[:, 0] ** 2 + 0.5) / 0.05) ** 2

    expected = by_quadrature(ln_likelihood, (400, 400))
    assert expected == pytest.approx(by_quadrature(ln_likelihood, (320, 320)), abs=1e-3)
    _, combined = both_seeds(ln_likelihood, 2)
    assert_agrees(combined, expected)


def test_soft_edges():
    """Three abundances without effect below a threshold, and one measured: prior-like with soft edges."""
    threshold, sharpness = np.array([0.3, -0.5, 1.0]), 0.15

    def ln_likelihood(z):
        above = np.logaddexp(0, (z[:, :3] - threshold) / sharpness) * 2.0
        return -0.5 * (above**2).sum(axis=1) - 0.5 * ((z[:, 3] - 0.7) / 0.05) ** 2

    # Separable: one quadrature per dimension.
    axis = np.linspace(-10, 10, 200001)
    step, ln_prior = axis[1] - axis[0], -0.5 * axis**2 - 0.5 * LN_2PI
    expected = 0.0
    for edge in threshold:
        above = np.logaddexp(0, (axis - edge) / sharpness) * 2.0
        expected += logsumexp(ln_prior - 0.5 * above**2) + np.log(step)
    expected += logsumexp(ln_prior - 0.5 * ((axis - 0.7) / 0.05) ** 2) + np.log(step)
    _, combined = both_seeds(ln_likelihood, 4)
    assert_agrees(combined, expected)


def saturating_band(z):
    """A band whose height grows as the logarithm of a log-uniform abundance, over a cloud of any level."""
    x = np.linspace(-1, 1, 25)
    band = np.exp(-0.5 * (x / 0.25) ** 2)
    data = 60.0 * np.log1p(30.0 * band) - 90.0 + 20.0 * np.sin(37.0 * np.arange(25))
    height, abundance = 20 + 130 * ndtr(z[:, :1]), 10 ** (8 * ndtr(z[:, 1:2]) - 4)
    level = -400 + 600 * ndtr(z[:, 2:3])
    residual = (data - level - height * np.log1p(abundance * band)) / 25.0
    return -0.5 * (residual**2).sum(axis=1)


def test_saturating_band():
    expected = by_quadrature(saturating_band, (50, 80, 120))
    assert expected == pytest.approx(by_quadrature(saturating_band, (40, 64, 100)), abs=2e-3)
    _, combined = both_seeds(saturating_band, 3)
    assert_agrees(combined, expected)


# ---------------------------------------------------------------------------------------------------------
# Nested sampling


def absorption_toy(n_absorbers, seed=3, n_points=60, err_ppm=40.0):
    """Spectrum of absorbers over a cloud deck: T ln(sum_i 10^x_i k_i + haze + 10^c), the level integrated out.

    Coordinates: T, cloud c, haze amplitude, haze slope, then the absorbers' log abundances, all uniform. The first
    two absorbers are in the made-up data.
    """
    rng = np.random.default_rng(seed)
    place = np.linspace(0, 1, n_points)
    ln_k = np.full((n_absorbers, n_points), -3.0)
    for i in range(n_absorbers):
        for _ in range(3):
            band = 4 * rng.uniform(0.5, 1) - 0.5 * ((place - rng.uniform()) / rng.uniform(0.03, 0.12)) ** 2
            ln_k[i] = np.maximum(ln_k[i], band)
    k = np.exp(ln_k)
    low = np.array([20, -6, -6, -1] + [-9] * n_absorbers, dtype=float)
    high = np.array([200, 2, 1, 8] + [0] * n_absorbers, dtype=float)

    def heights_ppm(theta):
        haze = 10 ** theta[:, 2:3] * np.exp(-theta[:, 3:4] * np.log(1 + 2 * place))
        opacity = 10 ** theta[:, 4:] @ k + haze + 10 ** theta[:, 1:2]
        return theta[:, :1] * np.log(opacity)

    truth = np.array([[100, -1.5, -4, 4, -2, -3] + [-7] * (n_absorbers - 2)], dtype=float)
    data = heights_ppm(truth)[0] + err_ppm * rng.standard_normal(n_points)

    def ln_likelihood(z):
        residual = (heights_ppm(low + (high - low) * ndtr(z)) - data) / err_ppm
        residual -= residual.mean(axis=1, keepdims=True)
        return -0.5 * np.einsum("wn,wn->w", residual, residual)

    return ln_likelihood, 4 + n_absorbers


def by_nested_sampling(ln_likelihood, n_dim, n_live, seed=0):
    """ln Z and its error from dynesty (Speagle 2020, MNRAS 493, 3132)."""
    sampler = dynesty.NestedSampler(
        lambda z: float(ln_likelihood(z[None])[0]),
        lambda u: ndtri(np.clip(u, 1e-15, 1 - 1e-15)),
        n_dim,
        nlive=n_live,
        sample="rslice",
        rstate=np.random.default_rng(seed),
    )
    sampler.run_nested(dlogz=0.05, print_progress=False)
    return float(sampler.results.logz[-1]), float(sampler.results.logzerr[-1])


def test_absorbers_against_nested_sampling():
    """Seven parameters, three absorbers."""
    ln_likelihood, n_dim = absorption_toy(3)
    expected, expected_err = by_nested_sampling(ln_likelihood, n_dim, 200)
    _, combined = both_seeds(ln_likelihood, n_dim, stratum_dim=1)
    assert_close(combined, expected, expected_err)


@pytest.mark.slow
@pytest.mark.parametrize("n_absorbers", [4, 6])
def test_many_absorbers_against_nested_sampling(n_absorbers):
    ln_likelihood, n_dim = absorption_toy(n_absorbers)
    expected, expected_err = by_nested_sampling(ln_likelihood, n_dim, 500)
    _, combined = both_seeds(ln_likelihood, n_dim, stratum_dim=1)
    assert_close(combined, expected, expected_err)


def assert_close(combined, expected, expected_err):
    """Agreement without a demand on the flags: this posterior is harder than those of real spectra."""
    error = np.hypot(combined.ln_evidence_err, expected_err)
    assert error < 0.6
    assert combined.ln_evidence == pytest.approx(expected, abs=3 * error)


# ---------------------------------------------------------------------------------------------------------
# Seeds and settings


def test_same_seed_same_numbers():
    ln_likelihood, _ = linear_model(3, 5)
    before = np.random.get_state()  # noqa: NPY002 - the test is about this very state
    sequence = np.random.SeedSequence(4)
    first = estimate_evidence(ln_likelihood, 3, sequence, SamplerSettings.quick())
    second = estimate_evidence(ln_likelihood, 3, sequence, SamplerSettings.quick())
    other = estimate_evidence(ln_likelihood, 3, np.random.SeedSequence(5), SamplerSettings.quick())
    after = np.random.get_state()  # noqa: NPY002
    for field in dataclasses.fields(first):
        np.testing.assert_array_equal(getattr(first, field.name), getattr(second, field.name))
    assert first.ln_evidence != other.ln_evidence
    np.testing.assert_array_equal(before[1], after[1])
    assert before[2] == after[2]


def test_scribbling_likelihood():
    """A likelihood that overwrites its input must not corrupt the run."""
    clean, _ = linear_model(3, 5)

    def scribbling(z):
        value = clean(z)
        z[:] = 1e6
        return value

    settings, sequence = SamplerSettings.quick(), np.random.SeedSequence(4)
    expected = estimate_evidence(clean, 3, sequence, settings).ln_evidence
    assert estimate_evidence(scribbling, 3, sequence, settings).ln_evidence == expected


@pytest.mark.parametrize(("n_dim", "calls"), [(3, 40_000), (5, 45_000), (10, 120_000)])
def test_standard_budget_is_kept(n_dim, calls):
    counted = 0

    def ln_likelihood(z):
        nonlocal counted
        counted += len(z)
        return np.where(z[:, 0] > 3.0, -np.inf, -np.sum(np.abs(z), axis=1) * 20)  # cusps: hard for a mixture

    run = estimate_evidence(ln_likelihood, n_dim, np.random.SeedSequence(0), STANDARD, stratum_dim=0)
    assert run.likelihood_calls == counted
    assert counted <= calls


def test_budget_interpolates():
    assert STANDARD.budget(3) == STANDARD.budget(4)
    assert STANDARD.budget(10) == STANDARD.budget(11)
    for name in Budget.__dataclass_fields__:
        low, middle, high = (getattr(STANDARD.budget(d), name) for d in (4, 7, 10))
        assert min(low, high) <= middle <= max(low, high)
    assert STANDARD.budget(30).walkers >= 60  # emcee needs two walkers per dimension
    assert STANDARD.budget(7).walkers % 2 == 0


# ---------------------------------------------------------------------------------------------------------
# Must-fail controls


def test_chain_of_another_target_is_flagged():
    """The production chain is moved away from the posterior: the bridge and the weights must object."""
    ln_likelihood, _ = linear_model(3, 5)

    def spoil(stage, positions):
        return positions + 0.3 if stage == "production" else None

    runs, combined = both_seeds(ln_likelihood, 3, SamplerSettings.quick(), chain_hook=spoil)
    assert not combined.sampling["converged"]
    assert all(any("differ by" in flag for flag in run.flags) for run in runs)


def test_exploration_lost_far_away_is_flagged():
    """All draws of the burn-in sit far from a narrow peak in seven dimensions, on a budget too small to recover."""
    ln_likelihood, expected = linear_model(7, 7)

    def spoil(stage, positions):
        return 0.001 * positions + 4.0 if stage == "burn-in" else None

    small = dataclasses.replace(SamplerSettings.quick().budget(7), rounds=1, climb_steps=0)
    _, combined = both_seeds(ln_likelihood, 7, SamplerSettings(small, small), chain_hook=spoil)
    assert not combined.sampling["converged"]
    assert any("effective size" in flag for flag in combined.sampling["flags"])
    assert abs(combined.ln_evidence - expected) > 1  # and it would have been wrong


def test_too_hard_for_the_budget_is_flagged():
    """A shell has no mixture of a few components in eight dimensions."""
    small = dataclasses.replace(
        SamplerSettings.quick().budget(8), rounds=1, production_steps=20, burn_steps=10
    )

    def ln_likelihood(z):
        return -0.5 * ((np.sqrt((z**2).sum(axis=1)) - 2.0) / 0.002) ** 2

    run = estimate_evidence(ln_likelihood, 8, np.random.SeedSequence(1), SamplerSettings(small, small))
    assert run.flags
    assert not combine_runs([run], 8).sampling["converged"]


def test_nan_is_a_fault_of_the_model():
    with pytest.raises(EvidenceError, match="is nan at"):
        estimate_evidence(lambda z: np.full(len(z), np.nan), 2, np.random.SeedSequence(0), STANDARD)


def test_zero_likelihood_everywhere_is_refused():
    with pytest.raises(EvidenceError, match="zero at all"):
        estimate_evidence(lambda z: np.full(len(z), -np.inf), 2, np.random.SeedSequence(0), STANDARD)


def test_hard_edges_are_allowed():
    """-inf beyond a plane: ln Z = ln Phi(-1)."""
    _, combined = both_seeds(lambda z: np.where(z[:, 0] > 1.0, 0.0, -np.inf), 2)
    assert_agrees(combined, float(np.log(ndtr(-1.0))))


def test_flat_likelihood_gives_its_own_value():
    """Nothing learnt: ln Z is the constant, and the posterior the prior."""
    _, combined = both_seeds(lambda z: np.full(len(z), -1234.5), 5)
    assert_agrees(combined, -1234.5)
    np.testing.assert_allclose(combined.draws_z.std(axis=0), 1.0, atol=0.1)


# ---------------------------------------------------------------------------------------------------------
# Combination


@pytest.fixture(scope="module")
def good_run():
    ln_likelihood, _ = linear_model(3, 5)
    return estimate_evidence(ln_likelihood, 3, np.random.SeedSequence(4), STANDARD)


def test_combination_of_agreeing_runs(good_run):
    twin = dataclasses.replace(good_run, ln_evidence=good_run.ln_evidence + 0.01)
    combined = combine_runs([good_run, twin], 3)
    assert combined.ln_evidence == pytest.approx(good_run.ln_evidence + 0.005)
    assert combined.ln_evidence_err == error_floor(3)
    assert combined.sampling["converged"]
    assert combined.sampling["flags"] == []
    assert combined.sampling["likelihood_calls"] == 2 * good_run.likelihood_calls
    assert combined.draws_z.shape == good_run.draws_z.shape


def test_combination_of_disagreeing_runs(good_run):
    far = dataclasses.replace(good_run, ln_evidence=good_run.ln_evidence + 1.0)
    combined = combine_runs([good_run, far], 3)
    assert combined.ln_evidence_err == pytest.approx(0.5)
    assert not combined.sampling["converged"]
    assert any("seeds differ by 1.00" in flag for flag in combined.sampling["flags"])


def test_exploded_run_hardly_counts(good_run):
    exploded = dataclasses.replace(
        good_run, ln_evidence=good_run.ln_evidence + 2.0, ln_evidence_err=0.9, ess=1.2
    )
    combined = combine_runs([good_run, exploded], 3)
    assert combined.ln_evidence == pytest.approx(good_run.ln_evidence, abs=0.02)
    assert combined.ln_evidence_err == pytest.approx(1.0)


def test_single_run(good_run):
    combined = combine_runs([good_run], 3)
    assert combined.ln_evidence == good_run.ln_evidence
    assert combined.sampling["converged"]
    assert combined.sampling["flags"] == ["one seed only: the scatter between seeds is unknown"]
    with pytest.raises(ValueError, match="No runs"):
        combine_runs([], 3)


def test_error_floor():
    assert [error_floor(d) for d in (1, 4, 6, 8, 11)] == pytest.approx([0.02, 0.02, 0.06, 0.1, 0.1])


# ---------------------------------------------------------------------------------------------------------
# Parts


def test_importance_estimate():
    value, error, size = importance_estimate(np.log(np.array([1.0, 2.0, 3.0])) - 700)
    assert value == pytest.approx(np.log(2.0) - 700)
    assert size == pytest.approx(36 / 14)
    assert error == pytest.approx(np.sqrt(14 / 36 - 1 / 3))
    assert importance_estimate(np.full(5, -np.inf)) == (-np.inf, np.inf, 0.0)


def test_bridge_between_two_gaussians():
    """p = 5 N(0.4, 0.8), q = N(0, 1): ln Z = ln 5, and the pull of many repetitions is about one."""
    rng = np.random.default_rng(3)
    pulls = []
    for _ in range(100):
        x, y = rng.standard_normal(2000), 0.4 + 0.8 * rng.standard_normal((100, 20))

        def ln_ratio(v):
            return np.log(5) - 0.5 * ((v - 0.4) / 0.8) ** 2 - np.log(0.8) + 0.5 * v**2

        value, error = bridge_estimate(ln_ratio(x), ln_ratio(y))
        pulls.append((value - np.log(5)) / error)
    assert np.mean(pulls) == pytest.approx(0.0, abs=0.4)
    assert np.std(pulls) == pytest.approx(1.0, abs=0.3)


def test_tempering_step_reaches_the_size():
    ln_like = -0.5 * np.random.default_rng(0).chisquare(5, size=1000) * 100

    def size(rise):
        weights = np.exp(rise * (ln_like - ln_like.max()))
        return weights.sum() ** 2 / (weights**2).sum()

    rise = tempering_step(lambda ln_weights: np.exp(ln_weights - ln_weights.max()), ln_like, 1.0, 100.0)
    assert size(rise) == pytest.approx(100.0, rel=1e-3)
    assert tempering_step(lambda ln_weights: np.exp(ln_weights), ln_like * 0, 0.4, 100.0) == 0.4


def test_truncation_cuts_only_the_top():
    ln_weights = np.append(np.zeros(99), 10.0)
    cut = truncate(ln_weights)
    assert cut[-1] == pytest.approx(logsumexp(ln_weights) - np.log(10))
    np.testing.assert_array_equal(cut[:-1], 0.0)


def test_climb_and_curvature_of_a_gaussian():
    """One strong and one weak direction; curvature wider than the prior's is cut at the prior's."""
    precision = np.array([[400.0, 30.0], [30.0, 5.0]])
    centre = np.array([0.3, -0.7])

    def ln_prob(z):
        d = z - centre
        return -0.5 * np.einsum("ni,ij,nj->n", d, precision, d)

    unbounded = np.full((2, 2), np.inf)
    starts = np.array([[1.0, 1.0], [-1.0, 0.5]])
    tops, ln_tops = climb(ln_prob, starts, 0.1 * np.eye(2), -unbounded, unbounded, 40)
    np.testing.assert_allclose(tops, np.tile(centre, (2, 1)), atol=0.02)
    assert ln_tops.min() > -0.01
    covariance = local_covariances(ln_prob, tops[:1], ln_tops[:1], 0.1 * np.eye(2))[0]
    np.testing.assert_allclose(np.linalg.inv(covariance), precision, rtol=1e-6)
    flat = local_covariances(lambda z: np.zeros(len(z)), np.zeros((1, 2)), np.zeros(1), np.eye(2))[0]
    np.testing.assert_allclose(flat, np.eye(2))


def test_climb_respects_its_limits():
    limit = np.array([[0.2, np.inf]])
    tops, _ = climb(
        lambda z: -0.5 * ((z - 1.0) ** 2).sum(axis=1),
        np.zeros((1, 2)),
        np.eye(2),
        -np.full((1, 2), np.inf),
        limit,
        30,
    )
    np.testing.assert_allclose(tops, [[0.2, 1.0]], atol=0.02)
