"""Evidence of real hypotheses on the real model: dense quadrature for few parameters, dynesty for seven."""

import dataclasses

import dynesty
import numpy as np
import pytest
from scipy.special import ndtri

from transit.evidence import SamplerSettings, combine_runs, estimate_evidence
from transit.hypotheses import DECK_COORDINATE, Hypothesis
from transit.problem import FitTask, Problem, run_fit
from transit.records import DepthSpectrum, Priors, System
from transit.units import PPM

# A warm Saturn, close to WASP-39 b (Faedi et al. 2011, A&A 531, A40).
SYSTEM = System(
    star_radius_rsun=0.94,
    planet_radius_rjup=1.28,
    planet_mass_mjup=0.28,
    equilibrium_temperature_k=1120.0,
    star_teff_k=5485.0,
)
TEMPERATURE_RANGE_K = (600.0, 1300.0)


def made_up_problem(edges_um, species, truth_z, truth, err_ppm, seed, system=SYSTEM):
    """A spectrum drawn from the model itself at sampler coordinates `truth_z` of the hypothesis `truth`."""
    centre, half = (edges_um[1:] + edges_um[:-1]) / 2, np.diff(edges_um) / 2
    err = np.full(len(centre), err_ppm * PPM)
    flat = DepthSpectrum(centre, half, np.full(len(centre), 0.0211), err)
    blank = Problem(flat, system, species, TEMPERATURE_RANGE_K)
    mean, square, _ = blank.heights(truth, np.atleast_2d(truth_z))
    depth = blank.likelihood.predicted_depth(mean, square, np.ones(1))[0]
    depth = depth + err * np.random.default_rng(seed).standard_normal(len(centre))
    return Problem(DepthSpectrum(centre, half, depth, err), system, species, TEMPERATURE_RANGE_K)


def by_quadrature(ln_likelihood, n_nodes):
    """ln Z over the unit cube by Gauss-Legendre quadrature, `n_nodes` in each dimension."""
    axes, all_weights = [], []
    for n in n_nodes:
        nodes, weights = np.polynomial.legendre.leggauss(n)
        axes.append(ndtri((nodes + 1) / 2))
        all_weights.append(weights / 2)
    z = np.stack([a.ravel() for a in np.meshgrid(*axes, indexing="ij")], axis=1)
    weight = np.prod(np.stack([w.ravel() for w in np.meshgrid(*all_weights, indexing="ij")]), axis=0)
    value = np.concatenate([ln_likelihood(block) for block in np.array_split(z, len(z) // 512 + 1)])
    peak = value.max()
    return peak + np.log(np.exp(value - peak) @ weight)


def combined(ln_likelihood, n_dim, seeds=(0, 1)):
    """Evidence of the package, two seeds at standard settings."""
    runs = [
        estimate_evidence(
            ln_likelihood,
            n_dim,
            np.random.SeedSequence([51, seed]),
            SamplerSettings.standard(),
            stratum_dim=DECK_COORDINATE,
        )
        for seed in seeds
    ]
    return combine_runs(runs, n_dim)


def test_three_parameters_against_quadrature():
    """Temperature, deck and water alone, haze held at nothing: a narrow, curved posterior of a real band."""
    water = Hypothesis("H2O", ("H2O",))
    edges = np.linspace(1.12, 1.66, 11)
    problem = made_up_problem(edges, ("H2O",), [0.3, 0.1, -1.6, 0.0, 0.6], water, 150.0, 61)

    def ln_likelihood(z):
        full = np.zeros((len(z), 5))
        full[:, [0, 1, 4]] = z
        full[:, 2] = -6.0  # least haze of the prior
        return problem.ln_likelihood(water, full)

    expected = by_quadrature(ln_likelihood, (16, 64, 64))
    coarser = by_quadrature(ln_likelihood, (12, 54, 54))
    assert coarser == pytest.approx(expected, abs=0.01)  # the quadrature itself has converged
    found = combined(ln_likelihood, 3)
    assert found.sampling["converged"], found.sampling["flags"]
    assert found.ln_evidence == pytest.approx(expected, abs=3 * found.ln_evidence_err)


def test_continuum_against_quadrature():
    """All four parameters of the continuum on a sloped spectrum."""
    continuum = Hypothesis("continuum", ())
    edges = np.geomspace(0.52, 1.0, 9)
    problem = made_up_problem(edges, (), [0.0, 0.8, 0.2, -0.3], continuum, 90.0, 62)

    def ln_likelihood(z):
        return problem.ln_likelihood(continuum, z)

    expected = by_quadrature(ln_likelihood, (8, 24, 26, 18))
    coarser = by_quadrature(ln_likelihood, (6, 20, 22, 14))
    assert coarser == pytest.approx(expected, abs=0.01)
    found = combined(ln_likelihood, 4)
    assert found.sampling["converged"], found.sampling["flags"]
    assert found.ln_evidence == pytest.approx(expected, abs=3 * found.ln_evidence_err)


def test_error_inflation_against_quadrature():
    """Inflation as a fifth parameter, the others narrowed by their priors to a line in temperature and deck."""
    narrow = Priors(log10_haze_strength=(-2.0, -1.999), haze_exponent=(-4.0, -3.999))
    system = dataclasses.replace(SYSTEM, priors=narrow)
    continuum = Hypothesis("continuum", ())
    edges = np.geomspace(0.52, 1.0, 9)
    problem = made_up_problem(edges, (), [0.0, 0.8, 0.0, 0.0], continuum, 90.0, 63, system)

    def ln_likelihood(z):
        full = np.zeros((len(z), 5))
        full[:, [0, 1, 4]] = z
        return problem.ln_likelihood(continuum, full, inflate=True)

    expected = by_quadrature(ln_likelihood, (12, 36, 36))
    task = FitTask(problem, continuum, 5, 0, SamplerSettings.standard(), inflate=True)
    found = combine_runs([run_fit(task), run_fit(dataclasses.replace(task, run=1))], 5)
    # The two parameters of no width leave the evidence as it is.
    assert found.ln_evidence == pytest.approx(expected, abs=3 * found.ln_evidence_err)


def test_seven_parameters_against_dynesty():
    """Three species on 30 bins: ln Z agrees with nested sampling (Speagle 2020, MNRAS 493, 3132) within 3 sigma."""
    species = ("H2O", "CO2", "CH4")
    everything = Hypothesis("all", species)
    edges = np.geomspace(1.1, 1.9, 31)
    truth = [0.2, -0.3, -1.0, 0.0, 0.6, 0.2, -1.5]
    problem = made_up_problem(edges, species, truth, everything, 200.0, 64)

    def ln_likelihood(z):
        return problem.ln_likelihood(everything, z)

    sampler = dynesty.NestedSampler(
        lambda z: float(ln_likelihood(z[None, :])[0]),
        lambda u: ndtri(np.clip(u, 1e-12, 1 - 1e-12)),
        7,
        nlive=400,
        bound="multi",
        sample="rwalk",
        rstate=np.random.default_rng(65),
    )
    sampler.run_nested(dlogz=0.1, print_progress=False)
    result = sampler.results
    found = combined(ln_likelihood, 7)
    assert found.sampling["converged"], found.sampling["flags"]
    error = np.hypot(result.logzerr[-1], found.ln_evidence_err)
    assert found.ln_evidence == pytest.approx(result.logz[-1], abs=3 * error)
    assert error < 0.3


def test_fits_repeat_for_the_same_seed():
    """The same task gives the same numbers; another run of it gives others that agree."""
    hypothesis = Hypothesis("H2O", ("H2O",))
    edges = np.linspace(1.12, 1.66, 8)
    problem = made_up_problem(edges, ("H2O",), [0.0, 0.1, -1.6, 0.0], Hypothesis("continuum", ()), 90.0, 66)
    task = FitTask(problem, hypothesis, 3, 0, SamplerSettings.quick())
    first, again = run_fit(task), run_fit(task)
    other = run_fit(dataclasses.replace(task, run=1))
    assert first.ln_evidence == again.ln_evidence
    assert np.array_equal(first.draws_z, again.draws_z)
    assert first.ln_evidence != other.ln_evidence
    error = np.hypot(max(first.ln_evidence_err, 0.02), max(other.ln_evidence_err, 0.02))
    assert first.ln_evidence == pytest.approx(other.ln_evidence, abs=4 * error)
