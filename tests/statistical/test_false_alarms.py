"""Flat spectra must not be given features: many simulated ones through likelihood, evidence and verdict.

On flat spectra the posterior hardly shrinks, so the mean likelihood of a fixed set of prior draws gives evidence
to 0.02 at a thousandth of the sampler's cost. The sampler itself is compared with these sums on some of them.
"""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.special import logsumexp
from synthetic import fit_record

from transit.check import check_spectrum
from transit.evidence import SamplerSettings, estimate_evidence
from transit.hypotheses import DECK_COORDINATE, Hypothesis
from transit.likelihood import DepthLikelihood
from transit.linear import linear_posterior
from transit.problem import Problem
from transit.records import DepthSpectrum, System
from transit.species import select_species
from transit.units import PPM
from transit.verdict import build_comparisons, judge

# Bins, errors, star and planet of the HD 209458 b spectrum of Deming et al. 2013, ApJ 774, 95.
CASES = json.loads((Path(__file__).parents[1] / "reference/cases/published_spectra.json").read_text())
CASE = next(case for case in CASES["spectra"] if case["name"] == "hd209458b_hst_wfc3_deming2013")
WAVELENGTH_UM, HALF_WIDTH_UM, _, ERR_PPM = np.array(CASE["rows"]).T
SYSTEM = System(**CASE["system"])
LEVEL_PPM = 14600.0
PRIOR_DRAWS = 12_000
N_FLAT = 200
HYPOTHESES = (Hypothesis("continuum", ()), Hypothesis("H2O", ("H2O",)))


def flat_spectrum(number, true_over_quoted=1.0):
    """A flat spectrum with independent Gaussian errors."""
    noise = np.random.default_rng([41, number]).standard_normal(len(ERR_PPM))
    depth = LEVEL_PPM + ERR_PPM * true_over_quoted * noise
    return DepthSpectrum(WAVELENGTH_UM, HALF_WIDTH_UM, depth * PPM, ERR_PPM * PPM)


def problem_of(spectrum, prepared=None):
    """Problem of a spectrum; the model of another one on the same bins is used where it is given."""
    selection = select_species(spectrum, SYSTEM, ("H2O",))
    problem = Problem(spectrum, SYSTEM, selection.species, selection.temperature_range_k)
    if prepared is not None:
        # Reference radius and gravity follow the median depth, which moves by 0.1 per cent at most.
        problem.__dict__["model"] = prepared.model
    return problem


@pytest.fixture(scope="module")
def prepared():
    """A problem with its model built, on a spectrum without noise."""
    spectrum = DepthSpectrum(WAVELENGTH_UM, HALF_WIDTH_UM, np.full(28, LEVEL_PPM * PPM), ERR_PPM * PPM)
    return problem_of(spectrum)


@pytest.fixture(scope="module")
def prior_heights(prepared):
    """Heights of prior draws of each sampled hypothesis."""
    out = {}
    for hypothesis in HYPOTHESES:
        n_dim = len(prepared.parameters(hypothesis))
        z = np.random.default_rng([42, n_dim]).standard_normal((PRIOR_DRAWS, n_dim))
        out[hypothesis.name] = prepared.heights(hypothesis, z)[:2]
    return out


def prior_sum(likelihood, heights, error_factor=1.0):
    """ln of the mean likelihood of prior draws, with its error."""
    ln_like = likelihood.collapse(*heights, error_factor).ln_evidence
    ln_z = float(logsumexp(ln_like) - np.log(len(ln_like)))
    share = np.exp(ln_like - ln_z) / len(ln_like)
    return ln_z, float(np.sqrt(np.sum(share**2) - 1 / len(ln_like)))


def judged(spectrum, prior_heights, error_factor_range=None):
    """Verdict and ln B against the best null, all evidences by closed form, quadrature or prior sums."""
    median = float(np.median(spectrum.depth))
    priors = SYSTEM.priors
    likelihood = DepthLikelihood(spectrum, median, priors.radius_fraction, priors.offset_ppm)
    x = np.log(WAVELENGTH_UM)
    x = x - x.mean()
    one_height = 163 * PPM  # one scale height of this planet
    fits = []
    for name, abscissa in (("flat", None), ("slope", x)):
        limit = priors.slope_scale_heights * one_height
        rng = np.random.default_rng(0)
        found = linear_posterior(likelihood, abscissa, limit, error_factor_range, rng, 10)
        fits.append(fit_record(name, (), found.ln_evidence, ln_evidence_err=0.0))
    factor = 1.0
    if error_factor_range is not None:
        low, high = np.log(error_factor_range)
        factor = np.exp(np.random.default_rng(43).uniform(low, high, PRIOR_DRAWS))
    for hypothesis in HYPOTHESES:
        ln_z, err = prior_sum(likelihood, prior_heights[hypothesis.name], factor)
        fits.append(fit_record(hypothesis.name, hypothesis.species, ln_z, ln_evidence_err=err))
    comparisons = build_comparisons(fits, (), ("H2O",))
    ln_b = min(c.ln_bayes_factor for c in comparisons if c.kind == "alone")
    return judge(comparisons, ("H2O",), {}, fits), ln_b


def test_flat_spectra_get_no_features(prior_heights):
    """Of 200 flat spectra none is `present` and at most 2 per cent are a `hint`; of the first 50 at most two."""
    words, ln_bs = zip(*(judged(flat_spectrum(k), prior_heights) for k in range(N_FLAT)), strict=True)
    features = [verdict.feature for verdict in words]
    assert features.count("present") == 0
    assert features.count("hint") <= N_FLAT // 50
    assert features[:50].count("hint") <= 2
    assert features.count("untested") == 0
    assert [verdict.species["H2O"] for verdict in words] == features  # one species: one word
    # If a null is true, Bayes factors against it average to 1; those against the best null lie below.
    assert np.mean(np.exp(ln_bs)) < 1.5


@pytest.mark.parametrize("number", range(4))
def test_sampler_agrees_on_flat_spectra(prepared, prior_heights, number):
    """The quick sampler's evidence equals the prior sum within four combined errors (floor 0.02)."""
    problem = problem_of(flat_spectrum(number), prepared)
    for hypothesis in HYPOTHESES:
        run = estimate_evidence(
            lambda z, h=hypothesis, p=problem: p.ln_likelihood(h, z),
            len(problem.parameters(hypothesis)),
            np.random.SeedSequence([44, number]),
            SamplerSettings.quick(),
            stratum_dim=DECK_COORDINATE,
        )
        expected, err = prior_sum(problem.likelihood, prior_heights[hypothesis.name])
        assert run.ln_evidence == pytest.approx(
            expected, abs=4 * np.hypot(err, max(run.ln_evidence_err, 0.02))
        )


def test_understated_errors_do_not_make_features(prior_heights):
    """With errors understated by two, inflated fits keep 15 flat spectra from becoming features."""
    features = [
        judged(flat_spectrum(k, 2.0), prior_heights, SYSTEM.priors.error_factor)[0].feature for k in range(15)
    ]
    assert features.count("present") == 0
    assert features.count("hint") <= 1


def test_whole_check_of_understated_errors():
    """The check notices that the quoted errors cannot hold, fits again with inflated ones and shows nothing."""
    result = check_spectrum(flat_spectrum(3, 2.0), SYSTEM, species=("H2O",), quick=True, workers=1)
    assert result.inflated != ()
    assert result.verdict.feature == "not shown"
    factor = next(fit for fit in result.inflated if fit.name == "flat").parameters["error_factor"]
    assert 1.4 < factor.median < 2.8


def test_fifty_flat_spectra_through_the_whole_check():
    """50 flat spectra through `check_spectrum`: none `present`, at most two `hint`."""
    features = [
        check_spectrum(flat_spectrum(k), SYSTEM, species=("H2O",), quick=True, workers=1).verdict.feature
        for k in range(50)
    ]
    assert features.count("present") == 0
    assert features.count("hint") <= 2
