"""False-alarm probabilities against counting, exact laws and bounds; sensitivity against counting.

The law of the fall in chi-square is that of Wilks 1938 (Ann. Math. Stat. 9, 60), from scipy; the bound on Bayes factors
is Markov's inequality for a mean of 1 (the evidence of a true null is its density of the data).
"""

from concurrent.futures import ProcessPoolExecutor
from dataclasses import fields
from types import SimpleNamespace

import numpy as np
import pytest
from campaigns import null_calibration as calibration
from scipy import stats
from scipy.special import logsumexp

from transit.bases import atmosphere_base, line_base
from transit.evidence import SamplerSettings
from transit.fit_records import line_fit
from transit.fitting import Plan, fit_hypotheses
from transit.hypotheses import Hypothesis, sampled_hypotheses
from transit.library import (
    Library,
    Statistic,
    evaluate,
    model_depths,
    prior_library,
    prior_points,
    slope_over_flat,
)
from transit.nulls import (
    TABLE_LN_B,
    LeftOutTask,
    false_alarms,
    left_out_library,
    left_out_task,
    posterior_focus,
    run_left_out,
)
from transit.problem import Problem
from transit.records import DepthSpectrum
from transit.sensitivity import sensitivity
from transit.tails import simulate_nulls, tails_of
from transit.units import PPM

SPECIES = ("H2O", "CO2")
N_PLAIN = 40_000


@pytest.fixture(scope="module")
def bench():
    """Two species with 512 templates each, 60,000 simulations of every null."""
    return calibration.make_bench(SPECIES, (1.1, 5.0), 512, 60_000)


@pytest.fixture(scope="module")
def plain(bench):
    """ln B of plain spectra, counted one by one, by null."""
    return {null: calibration.plain_ln_b(bench, null, N_PLAIN, [1, 2]) for null in calibration.NULLS}


# --- one shape: the exact law --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def one_shape():
    """A shape of length 1 whose amplitude has a normal prior of 3 errors, as a library, and simulations of it."""
    prior_width, n_templates, n_bins = 3.0, 4096, 10
    shape = np.random.default_rng(1).standard_normal(n_bins)
    shape /= np.linalg.norm(shape)
    amplitude = prior_width * stats.norm.ppf((np.arange(n_templates) + 0.5) / n_templates)
    library = Library("X", (amplitude[:, None] * shape).astype(np.float32))
    statistic = Statistic((library,))
    means = {"flat": np.zeros((2000, n_bins))}
    draws = simulate_nulls(statistic, (), means, 3)
    return statistic, shape, draws


def test_one_shape_has_the_bayes_factor_of_a_linear_model(one_shape):
    """ln B = -ln(1 + w^2)/2 + z^2/2 w^2/(1 + w^2): 2.8987 at z = 3 and w = 3 (normal integral)."""
    statistic, shape, _ = one_shape
    ln_b, gain = evaluate(statistic, 3.0 * shape[None, :], np.zeros((1, 10)))
    assert ln_b[0, 0] == pytest.approx(2.8987, abs=0.002)
    assert gain[0, 0] == pytest.approx(9.0, abs=1e-4)


@pytest.mark.parametrize("p", [0.5, 0.1, 0.01, 1e-3, 1e-4, 1e-6, 1e-8, 1e-9])
def test_one_shape_follows_chi_square(one_shape, p):
    """P of the ln B that belongs to a fall in chi-square, and of that fall, is chi2 of one degree (scipy)."""
    _, _, draws = one_shape
    gain = stats.chi2.isf(p, 1)
    ln_b = -0.5 * np.log(10) + 0.45 * gain
    for kind, value in (("ln_b", ln_b), ("delta_chi2", gain)):
        found, err = tails_of(draws, kind, 0)["flat"].chance(value)
        assert err < 0.1 * p
        # The library is a sum over 4096 amplitudes, not an integral: 0.002 in ln B, 1 per cent in p.
        assert found == pytest.approx(p, abs=4 * err + 0.01 * p)


def test_weights_average_to_one(one_shape, bench):
    """The mean weight is the integral of the null's own density: 1, within four of its errors."""
    for draws in (*one_shape[2].values(), *bench.reference.values()):
        by_mean = draws.weight.mean(axis=1)
        err = by_mean.std() / np.sqrt(len(by_mean))
        assert err < 0.02
        assert by_mean.mean() == pytest.approx(1, abs=4 * err)


# --- the tail against counting -------------------------------------------------------------------------------------


@pytest.mark.parametrize("null", calibration.NULLS)
@pytest.mark.parametrize("column", [0, 1, None])
def test_weighted_tail_agrees_with_counting(bench, plain, null, column):
    """P(ln B >= t) with planted templates and by counting plain spectra, from 0.5 to 1e-3, within 4 errors."""
    value = plain[null].max(axis=1) if column is None else plain[null][:, column]
    tail = tails_of(bench.reference, "ln_b", column)[null]
    for share in (0.5, 0.1, 0.03, 0.01, 3e-3, 1e-3):
        threshold = np.quantile(value, 1 - share)
        counted = np.mean(value >= threshold)
        found, err = tail.chance(threshold)
        assert found == pytest.approx(counted, abs=4 * np.hypot(err, np.sqrt(counted / N_PLAIN)))


def test_calibration_of_a_matched_null(bench, plain):
    """The share of spectra with p below 0.05, 0.01 and 0.001 is that p, within the interval of 99.99 per cent.

    27 numbers are compared, so that one in 400 such tests would fail by chance; the campaign uses 99 per cent and
    counts how many lie outside. The error of the reference is part of the interval. The largest p, which is quoted,
    is tested from above only.
    """
    limits = calibration.thresholds(bench)
    found = [
        {
            "null": null,
            "n": N_PLAIN,
            "reference_err": {name: [err for _, err in limits[name][null]] for name in limits},
        }
        | calibration.counts(bench, limits, null, ln_b)
        for null, ln_b in plain.items()
    ]
    limit = stats.norm.isf(5e-5)
    columns = [calibration.LEVELS.index(level) for level in (0.05, 0.01, 0.001)]
    for null in calibration.NULLS:
        for deviate in calibration.deviates(found, null).values():
            assert np.all(np.abs(deviate[columns]) < limit)
        for deviate in calibration.quoted_excess(found, null).values():
            assert np.all(deviate[columns] < limit)


def test_calibration_notices_a_wrong_null(bench, plain):
    """Spectra with noise 15 per cent above the quoted errors reach p = 0.01 too often: the test above would fail."""
    limit, err = calibration.threshold(tails_of(bench.reference, "ln_b", None)["flat"], 0.01)
    noise = np.random.default_rng(4).standard_normal((N_PLAIN, 27), dtype=np.float32)
    ln_b = evaluate(bench.statistic, np.zeros((N_PLAIN, 27)), np.float32(1.15) * noise)[0].max(axis=1)
    share = np.mean(ln_b >= limit)
    assert share > 0.01 + stats.norm.isf(5e-5) * np.hypot(err, np.sqrt(0.01 / N_PLAIN))


def test_chi_square_tables_do_not_hold(bench):
    """P(fall over flat >= 6.635) is 0.01 for chi2 of one degree; a species has many shapes and reaches it more often.

    And two species together do so less than twice as often, because their shapes are alike in part.
    """
    statistic = Statistic(bench.statistic.species)
    draws = simulate_nulls(statistic, (), {"flat": np.zeros((2000, 27))}, 4)
    threshold = stats.chi2.isf(0.01, 1)
    named = [tails_of(draws, "delta_chi2", k)["flat"].chance(threshold) for k in (0, 1)]
    for p, err in named:
        assert p > 0.01 + 5 * err
    best, err = tails_of(draws, "delta_chi2", None)["flat"].chance(threshold)
    assert max(p for p, _ in named) + 3 * err < best < sum(p for p, _ in named)


def over_flat(library, mean, noise):
    """ln B over nothing of one library."""
    return evaluate(Statistic((library,)), mean, noise)[0][:, 0]


# --- evidence against its own null ---------------------------------------------------------------------------------


@pytest.mark.parametrize("null", calibration.NULLS)
def test_bayes_factors_keep_markovs_bound(plain, null):
    """P(B >= b) <= 1/b for a named species and N/b for the best of N, with truths from the prior of the null."""
    for ln_b in (0.5, 1.0, 2.0, 3.0):
        bound = np.exp(-ln_b)
        slack = 4 * np.sqrt(bound / N_PLAIN)
        assert np.all(np.mean(plain[null] >= ln_b, axis=0) <= bound + slack)
        assert np.mean(plain[null].max(axis=1) >= ln_b) <= len(SPECIES) * bound + slack


@pytest.mark.parametrize("null", calibration.NULLS)
def test_bayes_factors_average_to_one(bench, null):
    """The mean of B over spectra from the null's own prior is 1.

    The mean of B itself has no finite variance. Drawn half from the null and half from the species, the mean of
    B/(1/2 + B/2) is the same integral, of numbers below 2: any error in either evidence moves it from 1.
    """
    statistic = bench.statistic
    rng = np.random.default_rng([5, calibration.NULLS.index(null)])
    own, continuum = statistic.species[0], statistic.continuum
    n_spectra, half = 40_000, 20_000
    noise = rng.standard_normal((n_spectra, 27), dtype=np.float32)
    if null == "continuum":
        # Its prior is the library here, in place of the continuous one of which that is a sample.
        first = rng.choice(continuum.exact, half)
    else:
        first = calibration.prior_means(bench.problem, null, half, [6])
    mean = np.concatenate([first, rng.choice(own.exact, half)])
    ln_b = over_flat(own, mean, noise)
    if null == "slope":
        ln_b = ln_b - slope_over_flat(mean + noise, statistic.slope_edge)[0]
    elif null == "continuum":
        ln_b = ln_b - over_flat(continuum, mean, noise)
    value = 1 / (0.5 + 0.5 * np.exp(np.minimum(-ln_b, 600)))
    err = value.std() / np.sqrt(n_spectra)
    assert err < 0.006
    assert value.mean() == pytest.approx(1, abs=4 * err)


def test_focus_makes_small_libraries_precise():
    """A haze of 1200 ppm at 25 ppm: ln Z of 1024 focused templates is that of 60,000 prior draws; of 1024 plain, not.

    Over 60 noise realisations, of which the focus knows one; the sum of the likelihood itself agrees for that one.
    """
    blank = calibration.flat_problem(("H2O",), (0.8, 1.7))
    bare = Hypothesis("continuum", ())
    # Unit normal coordinates of 1000 K, a deck below reach and a haze 10^3 times Rayleigh: inside all priors.
    haze = model_depths(blank, bare, np.array([[0.1, 1.5, 0.57, 0.0]]))[0]
    noise = 25 * PPM * np.random.default_rng(3).standard_normal(28)
    problem = with_depths(blank, haze - np.median(haze) + calibration.FRAME_DEPTH + noise, 25.0)
    base = line_base(problem, "flat")
    rng = np.random.default_rng(4)
    data = base.whiten(problem.spectrum.depth)[None, :]
    rows = np.concatenate([np.zeros((1, 27)), rng.standard_normal((59, 27))]).astype(np.float32)

    z = rng.standard_normal((60_000, 4))
    ln_like = problem.ln_likelihood(bare, z)
    chance = np.exp(ln_like - ln_like.max())
    chosen = rng.choice(len(z), 2000, p=chance / chance.sum())
    many = Library("continuum", base.whiten_template(model_depths(problem, bare, z)).astype(np.float32))
    expected = over_flat(many, data, rows)
    flat = line_fit(problem, "flat", 1, False).ln_evidence
    direct = logsumexp(ln_like) - np.log(len(z)) - flat
    # The frame takes the level out in first order only, which is worth 0.1 in a ln Z of some 3000 over flat.
    assert expected[0] == pytest.approx(direct, abs=0.3)

    focus = posterior_focus({"continuum": SimpleNamespace(draws_z=z[chosen])}, "continuum", 4, 1)
    off = {}
    for name, aim in (("focused", focus), ("plain", ())):
        off[name] = over_flat(prior_library(problem, bare, base, 1024, 1, aim), data, rows) - expected
    rms = {name: np.sqrt(np.mean(difference**2)) for name, difference in off.items()}
    assert rms["focused"] < 0.25  # the 60,000 draws themselves are worth some 300 at this precision: 0.06
    assert rms["plain"] > 3 * rms["focused"]


# --- the whole -----------------------------------------------------------------------------------------------------


def fitted(problem, seed=1):
    """Fits of the lines and posteriors from weighted prior draws, enough for spectra of little precision."""
    combined = {}
    for hypothesis in sampled_hypotheses(problem.species):
        z = prior_points(len(problem.parameters(hypothesis)), 1024, [seed, 9])
        ln_like = problem.ln_likelihood(hypothesis, z)
        weight = np.exp(ln_like - ln_like.max())
        chosen = np.random.default_rng(seed).choice(1024, 500, p=weight / weight.sum())
        combined[hypothesis.name] = SimpleNamespace(best_z=z[np.argmax(ln_like)], draws_z=z[chosen])
    return [line_fit(problem, name, seed, False) for name in ("flat", "slope")], combined


def with_depths(problem, depth, err_ppm=calibration.ERR_PPM):
    """The same problem with other depths and errors."""
    old = problem.spectrum
    new = DepthSpectrum(old.wavelength_um, old.half_width_um, depth, np.full(old.n_bins, err_ppm * PPM))
    return Problem(new, problem.system, problem.species, problem.temperature_range_k)


def noisy_problem(species, seed, amplitude=0.0):
    """Problem with noise, and water of an amplitude (in units of one prior draw) where it is asked for."""
    blank = calibration.flat_problem(species)
    noise = calibration.ERR_PPM * PPM * np.random.default_rng(seed).standard_normal(calibration.N_BINS)
    # About 1000 K, a deck at 0.6 bar, little haze, 10^-5 of water: inside all priors.
    depth = model_depths(blank, Hypothesis("H2O", ("H2O",)), np.array([[0.1, 0.96, -2.0, 0.0, 0.35]]))[0]
    return with_depths(blank, blank.spectrum.depth + amplitude * (depth - np.median(depth)) + noise)


def test_workers_and_seeds():
    """One process or two give the same numbers to the last digit, another seed gives others within their errors."""
    problem = noisy_problem(SPECIES, 5)
    fits, combined = fitted(problem)
    settings = dict(n_simulations=2000, n_templates=256)
    alone = false_alarms(problem, SPECIES, fits, combined, seed=1, **settings)
    with ProcessPoolExecutor(2) as executor:
        pooled = false_alarms(problem, SPECIES, fits, combined, seed=1, executor=executor, **settings)
    for field in fields(alone):
        np.testing.assert_equal(getattr(alone, field.name), getattr(pooled, field.name))
    other = false_alarms(problem, SPECIES, fits, combined, seed=2, **settings)
    for name in ("H2O", "CO2", ""):
        key = "p_best_of_n" if name == "" else "p_named"
        assert alone.observed[name][key] != other.observed[name][key]
    assert set(alone.observed) == {"H2O", "CO2", ""}
    assert set(alone.observed["H2O"]["p_null"]) == {"flat", "slope", "continuum"}
    assert alone.left_out["H2O"]["p_null"].keys() == {"CO2"}
    assert np.all(np.diff(alone.p_best_of_n) <= 0)
    for name in SPECIES:
        assert np.all(alone.p_named[name] <= alone.p_best_of_n)
        assert alone.observed[name]["p_named"] == max(alone.observed[name]["p_null"].values())
    assert list(alone.ln_bayes_factor) == list(TABLE_LN_B)
    # Without left out, and with too few species for it, the rest is the same.
    short = false_alarms(problem, SPECIES, fits, combined, seed=1, left_out=False, **settings)
    assert short.left_out == {}
    assert short.observed == alone.observed


def test_clear_water_is_no_false_alarm():
    """A clear water spectrum has a tiny p for water; noise three times as large makes it less striking."""
    problem = noisy_problem(("H2O",), 6, amplitude=1.0)
    fits, combined = fitted(problem)
    found = false_alarms(problem, ("H2O",), fits, combined, seed=1, n_simulations=4000, n_templates=1024)
    assert found.observed["H2O"]["ln_bayes_factor"] > 10
    assert found.observed["H2O"]["p_named"] < 1e-6
    grown = false_alarms(
        problem, ("H2O",), fits, combined, seed=1, n_simulations=4000, n_templates=1024, error_factor=3.0
    )
    assert grown.observed["H2O"]["ln_bayes_factor"] < found.observed["H2O"]["ln_bayes_factor"] / 3
    assert grown.observed["H2O"]["p_named"] > found.observed["H2O"]["p_named"]


def test_left_out_p_is_uniform_on_the_spectra_of_its_null():
    """Spectra scattered about the best water as its frame says have uniform p of CO2 (Kolmogorov-Smirnov)."""
    problem = noisy_problem(SPECIES, 8, amplitude=1.0)
    water = Hypothesis("H2O", ("H2O",))
    posterior = fitted(problem)[1]["H2O"]
    base = atmosphere_base(problem, water, posterior.best_z)
    scatter = np.linalg.pinv(base.transform)
    p = []
    for seed in range(25):
        depth = base.depth + scatter @ np.random.default_rng([9, seed]).standard_normal(scatter.shape[1])
        again = with_depths(problem, depth)
        again.__dict__["model"] = (
            problem.model
        )  # the median moves by a hundredth: reach and heights hardly do
        task = LeftOutTask(again, water, "CO2", posterior.best_z, posterior.draws_z[:256], 1200, 1, 1.0, 0.0)
        p.append(run_left_out(task)["p_named"])
    assert stats.kstest(p, "uniform").pvalue > 1e-3


def test_species_left_out_of_a_precise_spectrum():
    """Water that the spectrum cannot do without is no false alarm; CO2 that is not there does not become one.

    On spectra of the null the Bayes factor averages to no more than 1 (Markov's inequality rests on that).
    """
    problem = noisy_problem(SPECIES, 11, amplitude=1.0)
    hypotheses = sampled_hypotheses(SPECIES)
    fits = fit_hypotheses(problem, hypotheses, Plan(1, 1, SamplerSettings.quick()))
    found = false_alarms(
        problem, SPECIES, fits.fits, fits.combined, seed=1, n_simulations=4000, n_templates=2048
    )
    sampled = fits.fit("all").ln_evidence - fits.fit("CO2").ln_evidence
    assert sampled > 20
    # The frame is linear, and pays twice for what both hypotheses share.
    assert 0.6 * sampled < found.left_out["H2O"]["ln_bayes_factor"] < 1.2 * sampled
    assert found.left_out["H2O"]["p_named"] < 1e-8
    assert found.left_out["CO2"]["p_named"] > 0.01
    alone = min(fits.fit("H2O").ln_evidence - fit.ln_evidence for fit in fits.fits if not fit.species)
    assert found.observed["H2O"]["ln_bayes_factor"] == pytest.approx(alone, abs=0.05 * alone + 1)

    task = left_out_task(problem, SPECIES, "H2O", fits.combined, 4000, 512, 1, 1.0, 0.0)
    base = atmosphere_base(problem, task.base, task.best_z)
    noise = np.random.default_rng(12).standard_normal((20_000, len(base.transform))).astype(np.float32)
    zero = np.zeros((1, noise.shape[1]))
    ratio = np.exp(evaluate(Statistic((left_out_library(problem, base, task),)), zero, noise)[0][:, 0])
    assert ratio.mean() < 1 + 4 * ratio.std() / np.sqrt(len(ratio))


def test_sensitivity_is_what_counting_finds():
    """Other truths near the amplitude found are detected in 80 per cent of cases; weaker and stronger ones are not."""
    problem = calibration.flat_problem(("H2O",))
    found = sensitivity(problem, ("H2O",), seed=1, thresholds=problem.system.thresholds)["H2O"]
    assert found.amplitude_err < 0.1 * found.amplitude_scale_heights
    bench = calibration.make_bench(("H2O",), (1.1, 5.0), 2048, 800)
    water, bare = Hypothesis("H2O", ("H2O",)), Hypothesis("continuum", ())
    z = np.random.default_rng(11).standard_normal((6000, 5))
    depth = model_depths(problem, water, z)
    amplitude = np.ptp(depth - model_depths(problem, bare, z[:, :4]), axis=1) / problem.one_scale_height
    mean = line_base(problem, "flat").whiten_template(depth)
    share = {}
    for factor in (0.5, 1.0, 2.0):
        ratio = amplitude / (factor * found.amplitude_scale_heights)
        near = np.flatnonzero((ratio > 1 / 1.15) & (ratio < 1.15))
        near = np.tile(near, 10)
        noise = np.random.default_rng(12).standard_normal((len(near), mean.shape[1]), dtype=np.float32)
        share[factor] = np.mean(evaluate(bench.statistic, mean[near], noise)[0] >= 5.0)
        n_truths = len(near) / 10
    assert n_truths > 50
    assert share[1.0] == pytest.approx(0.8, abs=0.08)
    assert share[0.5] < 0.5
    assert share[2.0] > 0.93


def test_sensitivity_follows_the_errors():
    """A spectrum three times as precise shows smaller features; a hopeless one shows none and says so."""
    amplitude = []
    for err_ppm in (60.0, 180.0, 5000.0):
        blank = calibration.flat_problem(("CO2",))
        problem = with_depths(blank, blank.spectrum.depth, err_ppm)
        found = sensitivity(
            problem,
            ("CO2",),
            seed=1,
            thresholds=problem.system.thresholds,
            n_simulations=2048,
            n_templates=1024,
        )["CO2"]
        amplitude.append(found.amplitude_scale_heights)
    assert amplitude[0] < 0.6 * amplitude[1]
    assert amplitude[2] is None
    assert found.sentence.startswith("No CO2 feature that the priors allow")
