"""Published transmission spectra: their flat-line statistics, and the words that the whole check finds for four."""

import json
from pathlib import Path

import numpy as np
import pytest

from transit.check import check_spectrum
from transit.likelihood import DepthLikelihood
from transit.linear import least_squares, linear_posterior
from transit.records import DepthSpectrum, System
from transit.units import PPM

# Each spectrum names its paper; the flat-line sums were made apart from the package.
CASES = {
    case["name"]: case
    for case in json.loads((Path(__file__).parent / "cases/published_spectra.json").read_text())["spectra"]
}
HD_209458_B = "hd209458b_hst_wfc3_deming2013"


def spectrum_of(name, order=None):
    """The spectrum of one case; `order` permutes depths and errors over the wavelengths."""
    wavelength, half_width, depth, err = np.array(CASES[name]["rows"]).T
    order = np.arange(len(depth)) if order is None else order
    return DepthSpectrum(
        wavelength, half_width, depth[order] * PPM, err[order] * PPM, source=CASES[name]["citation"]
    )


def system_of(name):
    """Star and planet of one case."""
    return System(**CASES[name]["system"], planet_name=CASES[name]["planet"])


def check(name, order=None, **options):
    """Ask about water, by default with one rough fit in this process."""
    options = {"quick": True, "workers": 1} | options
    return check_spectrum(spectrum_of(name, order), system_of(name), species=("H2O",), **options)


def against_best_null(result):
    """ln B of water against the best hypothesis without absorbers, at quoted errors."""
    return min(c.ln_bayes_factor for c in result.comparisons if c.kind == "alone")


@pytest.mark.parametrize("name", CASES)
def test_flat_line_by_least_squares(name):
    """Weighted mean and chi-square of a flat line."""
    spectrum, case = spectrum_of(name), CASES[name]
    flat = least_squares(np.ones((spectrum.n_bins, 1)), spectrum.depth_ppm, spectrum.depth_err_ppm**2)
    assert flat.estimate[0] == pytest.approx(case["flat_mean_ppm"], abs=0.0501)
    assert flat.chi2 == pytest.approx(case["flat_chi2"], abs=0.0501)
    assert flat.dof == case["dof"]


@pytest.mark.parametrize("name", CASES)
def test_flat_line_by_the_likelihood(name):
    """The flat hypothesis, whose level is a radius, has the same chi-square and level."""
    spectrum, case = spectrum_of(name), CASES[name]
    median = float(np.median(spectrum.depth))
    likelihood = DepthLikelihood(spectrum, median)
    found = linear_posterior(likelihood, None, 1.0, None, np.random.default_rng(0))
    assert found.chi2 == pytest.approx(case["flat_chi2"], abs=0.0501)
    assert median * found.best[1] ** 2 / PPM == pytest.approx(case["flat_mean_ppm"], abs=0.06)


@pytest.mark.parametrize("name", CASES)
def test_slope_by_the_likelihood(name):
    """The chi-square of a slope in ln wavelength is that of weighted least squares, to the quadrature's spacing."""
    spectrum = spectrum_of(name)
    x = np.log(spectrum.wavelength_um)
    x = x - x.mean()
    line = least_squares(np.column_stack([np.ones_like(x), x]), spectrum.depth, spectrum.depth_err**2)
    likelihood = DepthLikelihood(spectrum, float(np.median(spectrum.depth)))
    found = linear_posterior(likelihood, x, 20 * line.error[1], None, np.random.default_rng(0), 4000)
    # Nodes lie up to 0.33 errors apart: the nearest is within 0.17, so chi-square within 0.028.
    assert line.chi2 - 1e-6 <= found.chi2 <= line.chi2 + 0.03
    assert found.slope.mean() == pytest.approx(line.estimate[1], abs=5 * line.error[1] / np.sqrt(4000) + 1e-9)
    assert found.slope.std() == pytest.approx(line.error[1], rel=0.06)


def test_water_in_hd_209458_b():
    """Deming et al. 2013 (ApJ 774, 95) find water, some 200 ppm at 1.38 um: far above any null."""
    result = check(HD_209458_B, quick=False)
    assert result.verdict.feature == "present"
    assert result.verdict.species == {"H2O": "present"}
    assert against_best_null(result) > 15
    assert result.fit("flat").chi2 == pytest.approx(160.0, abs=0.0501)
    assert result.fit("H2O").chi2 < 40


@pytest.mark.parametrize("seed", [0, 2, 3])
def test_shuffled_hd_209458_b_loses_its_water(seed):
    """With depths and errors permuted over the wavelengths nothing is left that water could explain."""
    order = np.random.default_rng(seed).permutation(len(CASES[HD_209458_B]["rows"]))
    result = check(HD_209458_B, order)
    assert result.verdict.feature == "not shown"
    assert result.verdict.species == {"H2O": "not shown"}
    assert against_best_null(result) < 2.5
    assert result.fit("flat").chi2 == pytest.approx(160.0, abs=0.0501)  # the same numbers, only elsewhere


def test_gj_1214_b_is_featureless():
    """Kreidberg et al. 2014 (Nature 505, 69) find a flat spectrum: a flat line is the best hypothesis."""
    result = check("gj1214b_hst_wfc3_kreidberg2014")
    assert (result.verdict.feature, result.verdict.species) == ("not shown", {"H2O": "not shown"})
    assert against_best_null(result) < 1
    assert result.inflated == ()


def test_hd_97658_b_has_a_slope_but_no_water():
    """Knutson et al. 2014 (ApJ 794, 155): no feature; the data rise with wavelength and the sentence says so."""
    result = check("hd97658b_hst_wfc3_knutson2014")
    assert (result.verdict.feature, result.verdict.species) == ("not shown", {"H2O": "not shown"})
    assert "slope over a flat line" in result.verdict.sentence


def test_water_in_wasp_107_b():
    """Kreidberg et al. 2018 (ApJL 858, L6) find water at 6.5 sigma: present here too."""
    result = check("wasp107b_hst_wfc3_kreidberg2018")
    assert (result.verdict.feature, result.verdict.species) == ("present", {"H2O": "present"})
    # The gain in ln likelihood over a flat line is at most half of that line's chi-square, 122.8.
    assert 10 < against_best_null(result) < 0.5 * 122.8
