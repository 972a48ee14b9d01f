"""Closed-form rivals against published numbers, numerical integration of the same likelihood, and finer grids."""

from __future__ import annotations

import json
from itertools import product
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import logsumexp

from transit.bumps import bump_cells, bump_gains, bump_products, bump_shapes, find_bump
from transit.errors import SettingError
from transit.linearised import LinearBase, whitening
from transit.records import DepthSpectrum
from transit.rivals import (
    bump_rival,
    check_steps,
    ln_gain_joint,
    ln_gain_normal,
    one_bin_rival,
    rivals_on,
    step_rival,
)
from transit.units import PPM

CASE = json.loads((Path(__file__).parents[1] / "reference/cases/golden_set.json").read_text())
GOLDEN_UM = np.array(CASE["wavelength_um"])
GOLDEN_DEPTH = np.array(CASE["depth_ppm"], float) * PPM
GOLDEN_ERR = float(CASE["depth_err_ppm"]) * PPM
TEMPLATE = np.array(CASE["template"], float)
LEVEL = 0.014
NORMAL_84 = 0.994458  # the 84 per cent point of the normal distribution: Abramowitz & Stegun 1964, table 26.1


def spectrum_of(n_bins=28, low_um=1.1, high_um=1.7, err_ppm=50.0, n_segments=1, added=0.0, seed=1):
    """Flat noise (and something added) on bins that touch, evenly spaced in ln wavelength."""
    edges = np.geomspace(low_um, high_um, n_bins + 1)
    rng = np.random.default_rng([71, seed, n_bins])
    noise = err_ppm * PPM * rng.standard_normal(n_bins)
    return DepthSpectrum(
        (edges[1:] + edges[:-1]) / 2,
        np.diff(edges) / 2,
        LEVEL + noise + added,
        np.full(n_bins, err_ppm * PPM),
        segment=np.arange(n_bins) * n_segments // n_bins,
        segment_names=tuple(f"part {k}" for k in range(n_segments)),
    )


def flat_base(spectrum, free=(), covariance=None, ln_evidence=0.0, depth=LEVEL):
    """Base with the level, and further directions, taken out."""
    n = spectrum.n_bins
    covariance = np.diag(spectrum.depth_err**2) if covariance is None else covariance
    transform = whitening(covariance, np.stack([np.ones(n), *free], axis=1))
    return LinearBase("flat", np.full(n, depth), transform, ln_evidence)


def golden():
    spectrum = DepthSpectrum(GOLDEN_UM, np.full(10, 0.03), GOLDEN_DEPTH, np.full(10, GOLDEN_ERR))
    return spectrum, flat_base(spectrum, depth=0.015)


def bump_of(spectrum, centre_um, width_ln):
    return bump_shapes(spectrum, np.log([centre_um]), np.log([width_ln]))[0]


# --- published and tabulated numbers ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("z", "values"),
    [(3.0, (1.903, 2.899, 2.148, 1.093, -0.106)), (5.0, (5.903, 10.099, 10.069, 9.084, 7.894))],
)
def test_normal_amplitude_against_the_methods_table(z, values):
    """Methods 6.8: ln B of an amplitude z errors from zero, prior 1, 3, 10, 30, 100 errors wide."""
    found = [float(ln_gain_normal(np.array(z), np.array(1.0), width)) for width in (1, 3, 10, 30, 100)]
    assert found == pytest.approx(values, abs=6e-4)
    joint = [float(ln_gain_joint(np.array([z]), np.eye(1), width)) for width in (1, 3, 10, 30, 100)]
    assert joint == pytest.approx(values, abs=6e-4)


def test_uniform_amplitude_against_the_methods_table():
    """Methods 6.8: z of 3 with the prior from 0 to 10 or 100 errors."""
    found = [float(bump_gains(np.array(3.0), np.array(1.0), width)) for width in (10.0, 100.0)]
    assert found == pytest.approx([3.115, 0.812], abs=6e-4)


@pytest.mark.parametrize("largest_ppm", list(CASE["ln_bayes_factor_by_amplitude_prior_ppm"]))
def test_golden_set_band(largest_ppm):
    """ln B of the golden set's band by the range of its height; computed by quadrature apart from the package."""
    _, base = golden()
    template = base.whiten_template(TEMPLATE)
    along, square = template @ base.whiten(GOLDEN_DEPTH), template @ template
    found = bump_gains(along, square, float(largest_ppm) * PPM)
    assert found == pytest.approx(CASE["ln_bayes_factor_by_amplitude_prior_ppm"][largest_ppm], abs=6e-5)


def test_golden_set_step():
    """Step beyond 1.43 um beside the band: -15.5 +/- 19.6 ppm (golden set), here with a very wide prior."""
    spectrum, _ = golden()
    base = flat_base(spectrum, [TEMPLATE], depth=0.015)
    found = step_rival(base, spectrum, GOLDEN_DEPTH, (1.43,), 1e5)
    step = found.parameters["step_ppm: 1.43 um"]
    assert step.median == pytest.approx(-15.5, abs=0.06)
    assert (step.upper - step.lower) / 2 == pytest.approx(19.6 * NORMAL_84, rel=5e-3)
    assert step.unit == "ppm"
    assert found.phrase == "a step at 1.43 um"


# --- numerical integration of the same likelihood -----------------------------------------------------------


def correlated(spectrum):
    """Covariance with neighbours that correlate by 0.4, and errors that differ."""
    place = np.arange(spectrum.n_bins)
    err = spectrum.depth_err * (1 + 0.3 * np.sin(place))
    return np.outer(err, err) * 0.4 ** np.abs(place[:, None] - place)


def ln_likelihood(residual, inverse):
    """Gaussian likelihood of residuals (..., N) up to a constant, integrated over a level without a prior."""
    ones = np.ones(len(inverse))
    weight = inverse @ ones
    level = residual @ weight / weight.sum()
    left = residual - level[..., None]
    return -0.5 * np.einsum("...i,ij,...j->...", left, inverse, left)


def test_one_bin_against_quadrature():
    spectrum = spectrum_of(7, added=np.array([0, 0, 0, 160, 0, 0, 0]) * PPM)
    covariance, sd = correlated(spectrum), 300 * PPM
    inverse = np.linalg.inv(covariance)
    residual = spectrum.depth - LEVEL
    none = ln_likelihood(residual, inverse)

    def integrand(x, k):
        bad = residual.copy()
        bad[k] -= x * PPM
        return np.exp(ln_likelihood(bad, inverse) - none - 0.5 * (x * PPM / sd) ** 2)

    norm = np.sqrt(2 * np.pi) * sd / PPM
    by_bin = [quad(integrand, -2500, 2500, (k,), epsabs=0, points=[0.0, 200.0])[0] / norm for k in range(7)]
    found = one_bin_rival(flat_base(spectrum, covariance=covariance), spectrum, spectrum.depth, 300.0)
    assert found.ln_bayes_factor == pytest.approx(np.log(np.mean(by_bin)), abs=1e-7)
    assert found.spreads["wavelength_um"].weights == pytest.approx(by_bin / np.sum(by_bin), abs=1e-7)


def test_steps_against_dense_sums():
    """Two named steps and the offset of a segment, their prior added to that of the base."""
    spectrum = spectrum_of(12, n_segments=2, added=np.repeat([0, 150.0, 60.0], 4) * PPM)
    marks = np.array(
        [spectrum.wavelength_um > 1.27, spectrum.wavelength_um > 1.5, spectrum.segment == 1], float
    )
    offset, sd = 100 * PPM, 200 * PPM
    covariance = correlated(spectrum) + offset**2 * np.outer(marks[2], marks[2])
    inverse = np.linalg.inv(covariance)
    axis = np.linspace(-1400, 1400, 81) * PPM  # seven prior widths: beyond lie 8e-12 of it
    grid = np.stack(np.meshgrid(axis, axis, axis, indexing="ij"), axis=-1).reshape(-1, 3)
    residual = spectrum.depth - LEVEL
    ln_prior = -0.5 * np.sum((grid / sd) ** 2, axis=1)
    ln_like = ln_likelihood(residual - grid @ marks, inverse) - ln_likelihood(residual, inverse)
    # Sums at even steps are exact for Gaussians that are wider than a step (trapezium rule).
    ln_weight = ln_like + ln_prior
    expected = logsumexp(ln_weight) - logsumexp(ln_prior)
    found = step_rival(
        flat_base(spectrum, covariance=covariance), spectrum, spectrum.depth, (1.27, 1.5), 200.0
    )
    assert found.ln_bayes_factor == pytest.approx(expected, abs=1e-6)
    mean = np.exp(ln_weight - logsumexp(ln_weight)) @ grid / PPM
    names = ["step_ppm: 1.27 um", "step_ppm: 1.5 um", "step_ppm: part 1"]
    assert [found.parameters[name].median for name in names] == pytest.approx(mean, abs=0.5)


def brute_force_bump(spectrum, covariance, largest, n_centres=160, n_widths=48, n_heights=241):
    """ln B and posterior quantiles of a bump: sums over its prior, bins averaged over sub-points."""
    low, high = (np.log(spectrum.wavelength_um + s * spectrum.half_width_um) for s in (-1, 1))
    sub = low[:, None] + (high - low)[:, None] * (np.arange(40) + 0.5) / 40
    span = high.max() - low.min()
    centres = low.min() + span * (np.arange(n_centres) + 0.5) / n_centres
    ln_widths = np.linspace(np.log(np.median(high - low) / 2), np.log(span / 3), 2 * n_widths + 1)[1::2]
    heights = np.linspace(0, largest, n_heights)
    trapezium = np.full(n_heights, 1.0)
    trapezium[[0, -1]] = 0.5
    inverse = np.linalg.inv(covariance)
    residual = spectrum.depth - LEVEL
    none = ln_likelihood(residual, inverse)
    ln_like = np.empty((n_widths, n_centres, n_heights))
    for i, ln_width in enumerate(ln_widths):
        shapes = np.exp(-0.5 * ((sub - centres[:, None, None]) / np.exp(ln_width)) ** 2).mean(axis=2)
        models = heights[None, :, None] * shapes[:, None, :]
        ln_like[i] = ln_likelihood(residual - models, inverse) - none
    weight = np.exp(ln_like - ln_like.max()) * trapezium
    ln_b = np.log(weight.sum() / (trapezium.sum() * n_widths * n_centres)) + ln_like.max()
    quantiles = {}
    for name, values, axes in (
        ("wavelength_um", np.exp(centres), (0, 2)),
        ("width_ln", np.exp(ln_widths), (1, 2)),
        ("amplitude_ppm", heights / PPM, (0, 1)),
    ):
        share = weight.sum(axis=axes)
        reached = (np.cumsum(share) - share / 2) / share.sum()
        quantiles[name] = np.interp([0.5, 0.16, 0.84], reached, values)
    return ln_b, quantiles


@pytest.mark.parametrize("height_ppm", [0.0, 100.0, 300.0])
def test_bump_against_dense_sums(height_ppm):
    spectrum = spectrum_of(14)
    spectrum = spectrum_of(14, added=height_ppm * PPM * bump_of(spectrum, 1.33, 0.04))
    covariance, largest = correlated(spectrum), 900 * PPM
    ln_b, quantiles = brute_force_bump(spectrum, covariance, largest)
    found = bump_rival(flat_base(spectrum, covariance=covariance), spectrum, spectrum.depth, largest)
    assert found.ln_bayes_factor == pytest.approx(ln_b, abs=0.02)
    for name, (median, lower, upper) in quantiles.items():
        interval = found.parameters[name]
        spread = upper - lower
        assert interval.median == pytest.approx(median, abs=0.05 * spread), name
        assert interval.lower == pytest.approx(lower, abs=0.05 * spread), name
        assert interval.upper == pytest.approx(upper, abs=0.05 * spread), name


@pytest.mark.parametrize(("z", "largest"), [(2.0, 6.0), (-12.0, 5.0), (60.0, 8.0), (45.0, 90.0), (0.0, 1e-8)])
def test_heights_against_quadrature(z, largest):
    """Quantiles of a truncated normal, far out on either side and where the data say nothing."""
    from transit.bumps import NODES, _height_quantiles

    found = _height_quantiles(np.array([z]), np.array([1.0]), largest)[0]
    fine = np.linspace(0, largest, 400_001)
    density = np.exp(-0.5 * (fine - z) ** 2 + 0.5 * np.min((fine - z) ** 2))
    reached = np.append(0, np.cumsum((density[1:] + density[:-1]) / 2))
    assert found == pytest.approx(np.interp(NODES, reached / reached[-1], fine), rel=2e-4, abs=2e-5 * largest)


# --- the cells of the bump ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("n_bins", "signal"),
    list(product((10, 28, 100), ((0, 0.1), (5, 0.05), (20, 0.02), (100, 0.05), (300, 0.02)))),
)
def test_finer_cells_change_nothing(n_bins, signal):
    """Cells of half and of a quarter the size move ln B by less than 0.02, from pure noise to 300 errors."""
    over_noise, width_ln = signal
    plain = spectrum_of(n_bins, high_um=1.7 if n_bins < 50 else 5.3)
    shape = bump_of(plain, 1.31, width_ln)
    base = flat_base(plain)
    height = over_noise / np.linalg.norm(base.whiten_template(shape))
    white, largest = base.whiten(plain.depth + height * shape), max(3 * height, 1000 * PPM)
    own, half, quarter = (find_bump(base, plain, white, largest, f).ln_bayes_factor for f in (1.0, 2.0, 4.0))
    assert half == pytest.approx(own, abs=0.02)
    assert quarter == pytest.approx(own, abs=0.02)


@pytest.mark.parametrize("seed", range(12))
def test_finer_cells_change_nothing_about_bases_that_imitate_bumps(seed):
    """Random bumps of 8 to 1000 errors about bases that may also bend, or have a bump of their own."""
    rng = np.random.default_rng([73, seed])
    plain = spectrum_of(int(rng.choice([12, 28, 60])), 1.0, 3.0, seed=seed)
    x = np.log(plain.wavelength_um)
    base = flat_base(plain, [x, x**2, bump_of(plain, 1.65, 0.05)][: rng.integers(0, 4)])
    ln_half = np.log(np.median(plain.half_width_um / plain.wavelength_um))
    shape = bump_of(plain, 3 ** rng.uniform(), np.exp(rng.uniform(ln_half, np.log(np.log(3) / 3))))
    height = rng.choice([8, 15, 60, 200, 1000]) / np.linalg.norm(base.whiten_template(shape))
    white, largest = base.whiten(plain.depth + height * shape), height * rng.choice([0.7, 1.5, 4.0])
    own, finer = (find_bump(base, plain, white, largest, f).ln_bayes_factor for f in (1.0, 2.0))
    assert finer == pytest.approx(own, abs=0.02)


def test_cells_cover_the_prior():
    """The prior's mass in all cells is one, and halving keeps it and the area."""
    cells = bump_cells(spectrum_of(28))
    quarters = cells.quarters()
    for part in (cells, quarters):
        assert np.exp(logsumexp(part.ln_prior)) == pytest.approx(1.0, rel=1e-12)
        area = np.sum(part.half_centre * part.half_width)
        assert area == pytest.approx(np.sum(cells.half_centre * cells.half_width), rel=1e-12)
    assert np.exp(cells.ln_width.min() - cells.half_width[0]) == pytest.approx(
        np.log(1.7 / 1.1) / 56, rel=1e-3
    )
    assert np.exp(cells.ln_width.max() + cells.half_width[-1]) == pytest.approx(
        np.log(1.7 / 1.1) / 3, rel=1e-12
    )


def test_three_wide_bins():
    """Where bins are so wide that half of one is a third of the spectrum, a range of widths is left."""
    spectrum = spectrum_of(3, low_um=3.0, high_um=5.0)
    found = bump_rival(flat_base(spectrum), spectrum, spectrum.depth, 1000 * PPM)
    assert np.isfinite(found.ln_bayes_factor)
    assert found.parameters["width_ln"].upper < np.log(5 / 3) / 3


def test_a_bump_that_the_base_imitates_says_nothing():
    spectrum = spectrum_of(20)
    shape = bump_of(spectrum, 1.3, 0.05)
    base = flat_base(spectrum, [shape])
    along, square = (np.array([x]) for x in (0.3, 1e-30))
    assert bump_gains(along, square, 1000 * PPM) == pytest.approx([0.3 * 500 * PPM])
    cells = bump_cells(spectrum).take(np.array([0]))
    cells.ln_centre[0], cells.ln_width[0] = np.log(1.3), np.log(0.05)
    along, square = bump_products(base, spectrum, base.whiten(spectrum.depth + 300 * PPM * shape), cells)
    assert bump_gains(along, square, 1000 * PPM) == pytest.approx([0.0], abs=1e-8)


# --- what every rival has in common ---------------------------------------------------------------------------


def test_level_and_free_directions_do_not_matter():
    """ln B stays when what the base may do anyway is added to the data."""
    spectrum = spectrum_of(20, n_segments=2)
    slope = np.log(spectrum.wavelength_um)
    base = flat_base(spectrum, [slope])
    other = spectrum.depth + 400 * PPM + 900 * PPM * slope
    for rival, options in (
        (one_bin_rival, (500.0,)),
        (step_rival, ((1.3,), 300.0)),
        (bump_rival, (2000 * PPM,)),
    ):
        one, two = (rival(base, spectrum, data, *options) for data in (spectrum.depth, other))
        assert two.ln_bayes_factor == pytest.approx(one.ln_bayes_factor, abs=1e-6)
        assert two.chi2 == pytest.approx(one.chi2, abs=1e-6)


def test_chi_square_is_that_of_the_best_model():
    """chi-square of the record by fitting the base's level and slope to what its best model leaves."""
    spectrum = spectrum_of(20, n_segments=2, added=np.where(np.arange(20) == 5, 400 * PPM, 0))
    slope = np.log(spectrum.wavelength_um)
    base = flat_base(spectrum, [slope])
    design = np.column_stack((np.ones(20), slope)) / spectrum.depth_err[:, None]
    for rival, options in (
        (one_bin_rival, (500.0,)),
        (step_rival, ((1.3,), 300.0)),
        (bump_rival, (2000 * PPM,)),
    ):
        found = rival(base, spectrum, spectrum.depth, *options)
        left = (spectrum.depth - found.depth) / spectrum.depth_err
        _, chi2, _, _ = np.linalg.lstsq(design, left, rcond=None)
        assert found.chi2 == pytest.approx(chi2[0], rel=1e-6)


def test_enormous_signals_do_not_overflow():
    spectrum = spectrum_of(20)
    base = flat_base(spectrum)
    for data in (LEVEL + 0.2 * bump_of(spectrum, 1.3, 0.05), np.where(np.arange(20) == 4, 0.5, LEVEL)):
        for found in (
            one_bin_rival(base, spectrum, data, 500.0),
            step_rival(base, spectrum, data, (1.3,), 300.0),
            bump_rival(base, spectrum, data, 1000 * PPM),
            bump_rival(base, spectrum, data, 0.5),
        ):
            assert np.isfinite(found.ln_bayes_factor)
            assert all(np.all(np.isfinite((i.median, i.lower, i.upper))) for i in found.parameters.values())


def test_average_over_bases():
    """Mean evidence of three bases; the mixture's parameters; a base without a chance adds nothing to them."""
    spectrum = spectrum_of(20, added=np.where(np.arange(20) == 5, 300 * PPM, 0))
    slope = np.log(spectrum.wavelength_um)
    bases = [
        flat_base(spectrum, ln_evidence=100.0),
        flat_base(spectrum, [slope], ln_evidence=101.0),
        flat_base(spectrum, [slope, slope**2], ln_evidence=-1000.0),
    ]
    alone = [one_bin_rival(base, spectrum, spectrum.depth, 500.0) for base in bases]
    both = rivals_on(bases, lambda base: one_bin_rival(base, spectrum, spectrum.depth, 500.0))
    ln_z = [base.ln_evidence + rival.ln_bayes_factor for base, rival in zip(bases, alone, strict=True)]
    assert both.ln_evidence == pytest.approx(np.log(np.sum(np.exp(ln_z)) / 3), abs=1e-12)
    assert [rival.ln_bayes_factor for rival in both.by_base] == [rival.ln_bayes_factor for rival in alone]
    share = 1 / (1 + np.exp(ln_z[1] - ln_z[0]))
    place = both.spreads["wavelength_um"]
    expected = share * alone[0].spreads["wavelength_um"].weights
    assert place.weights[:20] == pytest.approx(expected, rel=1e-12)
    assert place.weights.sum() == pytest.approx(1.0, rel=1e-12)
    means = [np.average(rival.spreads["amplitude_ppm"].values, weights=rival.spreads["amplitude_ppm"].weights)
             for rival in (alone[0], alone[1], both)]  # fmt: skip
    assert means[2] == pytest.approx(share * means[0] + (1 - share) * means[1], rel=1e-9)
    assert rivals_on(bases, lambda base: step_rival(base, spectrum, spectrum.depth, (), 300.0)) is None


def test_share_outside_bands():
    """The posterior of the centre, split at its median, lies half outside; all of it outside nothing."""
    plain = spectrum_of(28)
    spectrum = spectrum_of(28, added=250 * PPM * bump_of(plain, 1.4, 0.03))
    found = bump_rival(flat_base(spectrum), spectrum, spectrum.depth, 2000 * PPM)
    median = found.parameters["wavelength_um"].median
    assert found.outside_share([]) == pytest.approx(1.0)
    assert found.outside_share([(1.0, median)]) == pytest.approx(0.5, abs=0.03)
    assert found.outside_share([(1.0, 1.3), (1.3, 1.8)]) == pytest.approx(0.0, abs=1e-12)
    interval = found.parameters["wavelength_um"]
    assert found.outside_share([(interval.lower, interval.upper)]) == pytest.approx(0.32, abs=0.03)


def test_steps_that_cannot_be_seen():
    spectrum = spectrum_of(10)
    first, last = spectrum.wavelength_um[[0, -1]]
    for um in (0.8, first - 0.001, last, last + 0.001, 9.0, float("nan")):
        with pytest.raises(SettingError, match=f"{first:.4g} to {last:.4g} um"):
            check_steps(spectrum, (1.3, um))
    with pytest.raises(SettingError, match="no bin between them"):
        check_steps(spectrum, (1.3, 1.4, 1.3))
    with pytest.raises(SettingError, match="leaves no bin"):
        step_rival(flat_base(spectrum), spectrum, spectrum.depth, (5.0,), 300.0)
    check_steps(spectrum, ())
    check_steps(spectrum, (first, 1.3, 1.4))
    assert step_rival(flat_base(spectrum), spectrum, spectrum.depth, (), 300.0) is None
