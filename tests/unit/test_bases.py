"""White frames about fitted models, rivals with inflated errors, and what may vary in every hypothesis alike."""

import dataclasses

import numpy as np
import pytest
from scipy.special import logsumexp
from scipy.stats import multivariate_normal

from transit.bases import atmosphere_base, line_base
from transit.errors import SettingError
from transit.fit_records import line_fit
from transit.fitting import Fits, line_names
from transit.hypotheses import Hypothesis
from transit.likelihood import DepthLikelihood
from transit.linear import least_squares, linear_posterior
from transit.linearised import LinearBase, whitening
from transit.problem import Problem
from transit.records import DepthSpectrum, Nuisances, System
from transit.rival_fits import ClosedFormTask, _ln_profile, run_closed_form, without
from transit.star import load_star_spectra
from transit.star_rivals import STAR
from transit.units import PPM

SYSTEM = System(
    star_radius_rsun=0.9,
    planet_radius_rjup=1.25,
    planet_mass_mjup=0.3,
    equilibrium_temperature_k=1100.0,
    star_teff_k=3900.0,
)
N_BINS = 10
WATER = Hypothesis("H2O", ("H2O",))


def problem_of(seed=1, err_ppm=60.0, nuisances=None, star=None, segments=1, depth=None):
    """Problem of a spectrum of ten bins across the water band."""
    rng = np.random.default_rng([71, seed])
    edges = np.geomspace(1.15, 1.65, N_BINS + 1)
    centre, half = (edges[1:] + edges[:-1]) / 2, np.diff(edges) / 2
    err = err_ppm * PPM * rng.uniform(0.8, 1.2, N_BINS)
    depth = 0.0201 + err * rng.standard_normal(N_BINS) if depth is None else depth
    spectrum = DepthSpectrum(
        centre,
        half,
        depth,
        err,
        segment=np.arange(N_BINS) * segments // N_BINS,
        segment_names=tuple(f"part {k}" for k in range(segments)),
    )
    return Problem(spectrum, SYSTEM, ("H2O",), (600.0, 1300.0), nuisances=nuisances or Nuisances(), star=star)


# --- frames


def test_whitening_is_white_and_blind():
    """A C A^T = 1 with the bounded directions in C, and nothing is left of the free ones."""
    rng = np.random.default_rng(3)
    root = rng.standard_normal((7, 7))
    covariance = root @ root.T + np.eye(7)
    free, bounded = rng.standard_normal((7, 2)), 3 * rng.standard_normal((7, 3))
    transform = whitening(covariance, free, bounded)
    assert transform.shape == (5, 7)
    assert transform @ free == pytest.approx(np.zeros((5, 2)), abs=1e-10)
    total = covariance + bounded @ bounded.T
    assert transform @ total @ transform.T == pytest.approx(np.eye(5), abs=1e-9)


@pytest.mark.parametrize("name", ["flat", "slope"])
def test_line_frames_do_not_see_lines(name):
    """Level and slope leave no residual; chi-square is that of weighted least squares."""
    problem = problem_of()
    base = line_base(problem, name)
    x = problem.abscissa
    columns = [np.ones(N_BINS)] + ([x] if name == "slope" else [])
    for column in columns:
        assert base.whiten_template(1e-3 * column) == pytest.approx(0, abs=1e-8)
    design = np.stack(columns, axis=1) / problem.spectrum.depth_err[:, None]
    target = problem.spectrum.depth / problem.spectrum.depth_err
    residual = target - design @ np.linalg.lstsq(design, target, rcond=None)[0]
    white = base.whiten(problem.spectrum.depth)
    assert white @ white == pytest.approx(residual @ residual, rel=1e-8)


def test_atmosphere_frame_forgives_its_parameters():
    """A small change of any parameter disappears; a bump of the same size does not."""
    problem = problem_of(err_ppm=5.0)
    z = np.array([0.2, 0.4, -2.0, 0.0, 0.5])
    base = atmosphere_base(problem, WATER, z)

    def depth(point):
        said = problem.predict(WATER, point[None, :])
        return problem.likelihood.predicted_depth(said.mean_height, said.mean_square_height, np.ones(1))[0]

    rough = LinearBase("flat", base.depth, line_base(problem, "flat").transform)
    for k in (0, 1, 4):
        moved = depth(z + 0.1 * np.eye(5)[k]) - depth(z)
        before, after = (np.sum(frame.whiten_template(moved) ** 2) for frame in (rough, base))
        assert before > 1  # something to forgive
        assert after < 0.05 * before
    bump = np.zeros(N_BINS)
    bump[4] = 20 * PPM
    assert np.sum(base.whiten_template(bump) ** 2) > 2


def test_profile_over_error_factors_is_the_evidence():
    """Up to a constant it is the likelihood with the level integrated out, here by quadrature over the level."""
    problem = problem_of()
    depth, err = problem.spectrum.depth, problem.spectrum.depth_err
    levels = np.linspace(0.0195, 0.0207, 4001)
    found, expected = [], []
    for factor in (1.0, 1.5, 3.0):
        found.append(_ln_profile(line_base(problem, "flat", error_factor=factor), depth))
        ln_like = [
            multivariate_normal.logpdf(depth, np.full(N_BINS, level), np.diag((factor * err) ** 2))
            for level in levels
        ]
        expected.append(logsumexp(ln_like))
    assert np.diff(found) == pytest.approx(np.diff(expected), abs=1e-4)


# --- rivals


def fits_of(problem, inflate):
    """Closed-form nulls of a problem."""
    return Fits(tuple(line_fit(problem, name, 1, inflate) for name in ("flat", "slope")), {})


@pytest.mark.parametrize("inflate", [False, True])
def test_bad_bin_on_the_nulls_by_direct_integration(inflate):
    """Mean over the bins, and over flat and slope, of the evidence with that bin free; errors free where inflated."""
    problem = problem_of(seed=2)
    depth = problem.spectrum.depth.copy()
    depth[6] += 350 * PPM
    problem = problem_of(seed=2, depth=depth)
    task = ClosedFormTask(
        problem, "null", None, fits_of(problem, False), fits_of(problem, True) if inflate else None
    )
    found = next(rival for rival in run_closed_form(task) if rival.name == "one-bin")
    priors = problem.system.priors
    direct = []
    for abscissa in (None, problem.abscissa):
        by_bin = []
        for k in range(N_BINS):
            likelihood = DepthLikelihood(
                problem.spectrum,
                problem.median_depth,
                directions=np.eye(N_BINS)[:, [k]],
                direction_sd=np.array([priors.outlier_ppm * PPM]),
            )
            factors = priors.error_factor if inflate else None
            rng = np.random.default_rng(0)
            by_bin.append(
                linear_posterior(likelihood, abscissa, problem.slope_limit, factors, rng).ln_evidence
            )
        direct.append(logsumexp(by_bin) - np.log(N_BINS))
    expected = logsumexp(direct) - np.log(2)
    value = found.ln_evidence_inflated if inflate else found.ln_evidence
    assert value == pytest.approx(expected, abs=0.03)
    assert found.parameters["wavelength_um"].median == problem.spectrum.wavelength_um[6]


def test_step_is_no_rival_where_every_hypothesis_may_step():
    """A step that is a nuisance leaves no rival; named alone it is one."""
    for steps in (False, True):
        problem = problem_of(nuisances=Nuisances(steps=steps, step_um=(1.4,)))
        task = ClosedFormTask(problem, "null", None, fits_of(problem, False), None)
        names = [rival.name for rival in run_closed_form(task)]
        assert ("step" in names) is not steps


def test_name_of_the_fit_without_a_species():
    """With two species it is the other one's own."""
    assert without(("H2O", "CO"), "H2O") == "CO"
    assert without(("H2O", "CO", "CO2"), "CO") == "all-CO"


# --- what may vary in every hypothesis alike


def test_patchy_cloud_lies_between_deck_and_clear():
    """Covering all of the limb is the deck, covering nothing is as clear as its prior allows."""
    patchy = problem_of(nuisances=Nuisances(patchy=True))
    names = [p.name for p in patchy.parameters(WATER)]
    assert names[:5] == [
        "temperature_k",
        "log10_deck_pressure_bar",
        "log10_haze_strength",
        "haze_exponent",
        "cloud_fraction",
    ]
    column = {
        "temperature_k": np.full(3, 1000.0),
        "log10_deck_pressure_bar": np.array([-3.0, -3.0, 1.0]),
        "log10_haze_strength": np.full(3, -2.0),
        "haze_exponent": np.full(3, -4.0),
        "log10_vmr_H2O": np.full(3, -3.0),
    }
    mean, square = patchy.limb_heights(WATER, column | {"cloud_fraction": np.array([1.0, 0.0, 0.5])}, 3)
    deck_mean, deck_square = problem_of().limb_heights(WATER, column, 3)
    assert mean[0] == pytest.approx(deck_mean[0], rel=1e-5)
    assert mean[1] == pytest.approx(deck_mean[2], rel=1e-5)
    assert square[1] == pytest.approx(deck_square[2], rel=1e-5)
    half = dataclasses.replace(patchy)
    between, _ = half.limb_heights(WATER, column | {"cloud_fraction": np.full(3, 0.25)}, 3)
    assert between[0] == pytest.approx(0.25 * deck_mean[0] + 0.75 * deck_mean[2], rel=1e-5)


def test_star_multiplies_the_depths():
    """Without spots and faculae the star changes nothing; with them it is the published factor."""
    bare = problem_of()
    star = load_star_spectra(5.0).in_bins(
        bare.spectrum.wavelength_um, bare.spectrum.half_width_um, 3900.0, 2400.0, 4200.0
    )
    problem = problem_of(star=star)
    names = [p.name for p in problem.parameters(STAR)]
    assert names == [
        "spot_fraction",
        "spot_contrast_k",
        "facula_fraction",
        "facula_contrast_k",
        "star_grid_mix",
    ]
    quiet = np.array([[-9.0, 0.3, -9.0, 0.1, 0.0]])
    assert problem.ln_likelihood(STAR, quiet)[0] == pytest.approx(
        line_fit(bare, "flat", 1, False).ln_evidence, abs=1e-4
    )
    column = {
        "spot_fraction": np.array([0.1]),
        "spot_contrast_k": np.array([-800.0]),
        "facula_fraction": np.array([0.2]),
        "facula_contrast_k": np.array([150.0]),
        "star_grid_mix": np.array([0.0]),
    }
    f_phot, f_spot, f_fac = (
        star.photon_flux(np.array([t]), np.zeros(1))[0] for t in (3900.0, 3100.0, 4050.0)
    )
    # Rackham, Apai & Giampapa 2018, ApJ 853, 122.
    expected = 1 / (1 - 0.1 * (1 - f_spot / f_phot) - 0.2 * (1 - f_fac / f_phot))
    assert problem.star_factor(column)[0] == pytest.approx(expected, rel=1e-6)
    assert np.ptp(expected) > 0.002  # the band of the spots is there


def test_common_slope_replaces_the_null_of_a_slope():
    """With a slope in every hypothesis alike flat is the only line, and its slope is among the parameters."""
    problem = problem_of(nuisances=Nuisances(slope=True))
    assert line_names(problem) == ("flat",)
    assert line_names(problem_of()) == ("flat", "slope")
    fit = line_fit(problem, "flat", 1, False)
    design = np.column_stack([np.ones(N_BINS), problem.abscissa])
    line = least_squares(design, problem.spectrum.depth_ppm, problem.spectrum.depth_err_ppm**2)
    # The prior of ten scale heights is far wider than the error of the slope.
    assert fit.parameters["slope_ppm_per_efold"].median == pytest.approx(
        line.estimate[1], abs=0.05 * line.error[1]
    )


def test_ar1_noise_and_offsets_are_parameters():
    """Both are told with the fit."""
    problem = problem_of(nuisances=Nuisances(ar1=True), segments=2)
    fit = line_fit(problem, "slope", 1, False)
    assert 0 <= fit.parameters["ar1_coefficient"].lower < fit.parameters["ar1_coefficient"].upper <= 0.9
    assert "offset_ppm: part 1" in fit.parameters
    assert "ar1_coefficient" in [p.name for p in problem.parameters(WATER)]
    without_offsets = problem_of(nuisances=Nuisances(offsets=False), segments=2)
    assert "offset_ppm: part 1" not in line_fit(without_offsets, "flat", 1, False).parameters


def test_ar1_evidence_by_a_grid_of_correlations():
    """The line's evidence is the mean over the uniform prior of the correlation."""
    problem = problem_of(nuisances=Nuisances(ar1=True), seed=5)
    zeros = np.zeros((400, N_BINS))
    rho = 0.9 * (np.arange(400) + 0.5) / 400
    ln_like = problem.likelihood.collapse(zeros, zeros, 1.0, ar1=rho).ln_evidence
    expected = logsumexp(ln_like) - np.log(400)
    assert line_fit(problem, "flat", 1, False).ln_evidence == pytest.approx(expected, abs=1e-3)


def test_covariance_and_ar1_noise_exclude_each_other():
    """One of them has to go, and the message names both."""
    problem = problem_of(nuisances=Nuisances(ar1=True))
    spectrum = dataclasses.replace(problem.spectrum, covariance=np.diag(problem.spectrum.depth_err**2))
    with pytest.raises(SettingError, match="ar1 or the covariance"):
        _ = dataclasses.replace(problem, spectrum=spectrum).likelihood
