"""The likelihood against brute force: quadrature over the reference radius and the offsets, dense covariances."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from transit.likelihood import DepthLikelihood
from transit.records import DepthSpectrum
from transit.units import PPM

MEDIAN = 0.0146
OFFSET_PPM = 80.0
N_BINS = 12
NODES, WEIGHTS = np.polynomial.legendre.leggauss(400)


def made_up(seed=1, n_bins=N_BINS, segments=1, err_ppm=40.0, covariance=None, level=1.0):
    """A spectrum with a slow wave, and heights (3, N) of three atmospheres."""
    rng = np.random.default_rng([31, seed])
    wavelength = np.linspace(1.1, 1.7, n_bins)
    err = err_ppm * PPM * rng.uniform(0.7, 1.4, n_bins)
    wave = 150 * PPM * np.sin(6 * wavelength)
    depth = MEDIAN * level + wave + err * rng.standard_normal(n_bins)
    segment = np.arange(n_bins) * segments // n_bins
    spectrum = DepthSpectrum(
        wavelength,
        np.full(n_bins, 0.02),
        depth,
        err,
        segment=segment,
        segment_names=tuple(f"part {k}" for k in range(segments)),
        covariance=covariance,
    )
    mean = rng.uniform(-0.01, 0.03, (3, n_bins))
    return spectrum, mean, mean**2 + rng.uniform(0, 1e-4, (3, n_bins))


def ln_gaussian(residual, covariance):
    """ln of a multivariate normal density at residuals (..., N), covariance (N, N)."""
    factor = np.linalg.cholesky(covariance)
    white = np.linalg.solve(factor, np.moveaxis(residual, -1, 0).reshape(len(covariance), -1))
    chi2 = np.sum(white**2, axis=0).reshape(residual.shape[:-1])
    return -0.5 * chi2 - np.log(np.diag(factor)).sum() - 0.5 * len(covariance) * np.log(2 * np.pi)


def dense_covariance(spectrum, factor=1.0, offset_ppm=OFFSET_PPM):
    """f^2 C0 plus a common variance in each segment after the first."""
    base = np.diag(spectrum.depth_err**2) if spectrum.covariance is None else spectrum.covariance
    total = factor**2 * base
    for k in range(1, len(spectrum.segment_names)):
        mark = (spectrum.segment == k).astype(float)
        total = total + (offset_ppm * PPM) ** 2 * np.outer(mark, mark)
    return total


def by_quadrature(spectrum, mean, square, covariance, fraction=0.2, factor=1.0, extra=0.0):
    """ln of the likelihood averaged over u uniform in 1 -/+ fraction, for one atmosphere."""

    def ln_like(u):
        depth = MEDIAN * (u[:, None] ** 2 + 2 * u[:, None] * mean + square) * factor + extra
        return ln_gaussian(spectrum.depth - depth, covariance)

    coarse = np.linspace(1 - fraction, 1 + fraction, 20001)
    centre = coarse[np.argmax(ln_like(coarse))]
    low, high = max(1 - fraction, centre - 0.012), min(1 + fraction, centre + 0.012)
    u = low + (high - low) * (NODES + 1) / 2
    value = ln_like(u)
    peak = value.max()
    return peak + np.log(np.exp(value - peak) @ WEIGHTS * (high - low) / 2 / (2 * fraction))


@pytest.mark.parametrize("err_ppm", [10.0, 40.0, 150.0])
def test_radius_integral(err_ppm):
    """The integral over the reference radius is right to 1e-5 for independent errors."""
    spectrum, mean, square = made_up(err_ppm=err_ppm)
    found = DepthLikelihood(spectrum, MEDIAN).collapse(mean, square).ln_evidence
    for k in range(3):
        expected = by_quadrature(spectrum, mean[k], square[k], dense_covariance(spectrum))
        assert found[k] == pytest.approx(expected, abs=1e-5)


def test_radius_posterior():
    """Best radius, width and chi-square are those of the direct likelihood."""
    spectrum, mean, square = made_up(2)
    found = DepthLikelihood(spectrum, MEDIAN).collapse(mean[:1], square[:1])
    u = np.linspace(found.radius[0] - 0.005, found.radius[0] + 0.005, 20001)
    depth = MEDIAN * (u[:, None] ** 2 + 2 * u[:, None] * mean[0] + square[0])
    chi2 = np.sum(((spectrum.depth - depth) / spectrum.depth_err) ** 2, axis=1)
    posterior = np.exp(-0.5 * (chi2 - chi2.min()))
    centre = posterior @ u / posterior.sum()
    width = np.sqrt(posterior @ (u - centre) ** 2 / posterior.sum())
    assert found.radius[0] == pytest.approx(u[np.argmin(chi2)], abs=1e-6)
    assert found.radius_err[0] == pytest.approx(width, rel=1e-3)
    assert found.chi2[0] == pytest.approx(chi2.min(), abs=1e-4)


@pytest.mark.parametrize("level", [0.6, 1.5])
def test_radius_beyond_its_prior(level):
    """Where the data want a radius outside the prior, the integral is cut at the prior's edge."""
    spectrum, _, _ = made_up(3, level=level)
    zeros = np.zeros((1, N_BINS))
    found = DepthLikelihood(spectrum, MEDIAN).collapse(zeros, zeros)
    expected = by_quadrature(spectrum, zeros[0], zeros[0], dense_covariance(spectrum))
    assert abs(found.radius[0] - 1) == pytest.approx(0.2, abs=1e-9)
    assert found.ln_evidence[0] == pytest.approx(expected, rel=1e-6)


def test_offsets_by_dense_covariance():
    """Normal offsets of two later segments are a common variance in each: f^2 C0 + s^2 P P^T."""
    spectrum, mean, square = made_up(4, segments=3)
    found = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM).collapse(mean, square).ln_evidence
    for k in range(3):
        expected = by_quadrature(spectrum, mean[k], square[k], dense_covariance(spectrum))
        assert found[k] == pytest.approx(expected, abs=1e-5)


def test_offset_by_explicit_marginalisation():
    """Averaging over the offset of a second segment, one value at a time, gives the same."""
    spectrum, mean, square = made_up(5, segments=2)
    found = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM).collapse(mean, square).ln_evidence
    mark = (spectrum.segment == 1) * 1.0
    nodes, weights = np.polynomial.hermite_e.hermegauss(120)
    diagonal = np.diag(spectrum.depth_err**2)
    values = [
        by_quadrature(spectrum, mean[0], square[0], diagonal, extra=OFFSET_PPM * PPM * node * mark)
        for node in nodes
    ]
    expected = np.logaddexp.reduce(np.array(values) + np.log(weights / np.sqrt(2 * np.pi)))
    assert found[0] == pytest.approx(expected, abs=1e-5)


@pytest.mark.parametrize("segments", [1, 3])
def test_error_inflation(segments):
    """Inflation multiplies the quoted errors, not the prior of the offsets; one value for each atmosphere."""
    spectrum, mean, square = made_up(6, segments=segments)
    factors = np.array([1.0, 1.7, 6.0])
    likelihood = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM)
    found = likelihood.collapse(mean, square, factors).ln_evidence
    for k, factor in enumerate(factors):
        expected = by_quadrature(spectrum, mean[k], square[k], dense_covariance(spectrum, factor))
        assert found[k] == pytest.approx(expected, abs=1e-5)


def correlated(spectrum, rho=0.6):
    """AR(1) covariance with the spectrum's errors."""
    lag = np.abs(np.subtract.outer(np.arange(spectrum.n_bins), np.arange(spectrum.n_bins)))
    return rho**lag * np.outer(spectrum.depth_err, spectrum.depth_err)


def test_full_covariance():
    """Correlated errors, offsets and inflation together agree with the dense formula."""
    plain, mean, square = made_up(7, segments=2)
    spectrum, _, _ = made_up(7, segments=2, covariance=correlated(plain))
    likelihood = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM)
    for factor in (1.0, 2.0):
        found = likelihood.collapse(mean, square, factor).ln_evidence
        for k in range(3):
            dense = dense_covariance(spectrum, factor)
            expected = by_quadrature(spectrum, mean[k], square[k], dense)
            assert found[k] == pytest.approx(expected, abs=1e-5)


def test_diagonal_covariance_is_no_covariance():
    """A covariance without correlations changes nothing."""
    plain, mean, square = made_up(8, segments=2)
    full, _, _ = made_up(8, segments=2, covariance=np.diag(plain.depth_err**2))
    one = DepthLikelihood(plain, MEDIAN).collapse(mean, square, 1.3)
    two = DepthLikelihood(full, MEDIAN).collapse(mean, square, 1.3)
    assert two.ln_evidence == pytest.approx(one.ln_evidence, abs=1e-9)
    assert two.radius == pytest.approx(one.radius, abs=1e-12)


def test_bin_factor():
    """A factor on the depth of each bin multiplies the whole model depth there."""
    spectrum, mean, square = made_up(9)
    factor = np.random.default_rng(9).uniform(0.98, 1.04, (3, N_BINS))
    found = DepthLikelihood(spectrum, MEDIAN).collapse(mean, square, bin_factor=factor).ln_evidence
    for k in range(3):
        expected = by_quadrature(spectrum, mean[k], square[k], dense_covariance(spectrum), factor=factor[k])
        assert found[k] == pytest.approx(expected, abs=1e-5)


def test_extra_depth_is_not_multiplied():
    """Added depth comes on top of the factor's result."""
    spectrum, mean, square = made_up(10)
    factor, extra = np.full((3, N_BINS), 1.02), np.full((3, N_BINS), 30 * PPM)
    likelihood = DepthLikelihood(spectrum, MEDIAN)
    found = likelihood.collapse(mean, square, 1.0, extra, factor).ln_evidence
    expected = by_quadrature(
        spectrum, mean[0], square[0], dense_covariance(spectrum), factor=1.02, extra=30 * PPM
    )
    assert found[0] == pytest.approx(expected, abs=1e-5)
    predicted = likelihood.predicted_depth(mean, square, np.full(3, 1.01), extra, factor)
    assert predicted == pytest.approx(MEDIAN * (1.01**2 + 2.02 * mean + square) * 1.02 + 30 * PPM)


def test_infinite_error_is_leaving_out():
    """A bin with an enormous error does not change ln B, and all others stay as without it."""
    spectrum, mean, square = made_up(11)
    blind = spectrum.depth_err.copy()
    blind[4] = 1e3
    keep = np.arange(N_BINS) != 4
    wide = DepthSpectrum(spectrum.wavelength_um, spectrum.half_width_um, spectrum.depth, blind)
    without = DepthSpectrum(
        *(getattr(spectrum, n)[keep] for n in ("wavelength_um", "half_width_um", "depth", "depth_err"))
    )
    one = DepthLikelihood(wide, MEDIAN).collapse(mean, square)
    two = DepthLikelihood(without, MEDIAN).collapse(mean[:, keep], square[:, keep])
    assert np.diff(one.ln_evidence) == pytest.approx(np.diff(two.ln_evidence), abs=1e-6)
    assert one.radius == pytest.approx(two.radius, abs=1e-9)


def test_depth_scale_drops_out():
    """Depths, errors, offsets and reference depth times c shift ln Z by -N ln c: ln B stays."""
    spectrum, mean, square = made_up(12, segments=2)
    c = 0.07
    scaled = DepthSpectrum(
        spectrum.wavelength_um,
        spectrum.half_width_um,
        c * spectrum.depth,
        c * spectrum.depth_err,
        segment=spectrum.segment,
        segment_names=spectrum.segment_names,
    )
    one = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM).collapse(mean, square).ln_evidence
    two = DepthLikelihood(scaled, c * MEDIAN, 0.2, c * OFFSET_PPM).collapse(mean, square).ln_evidence
    assert two == pytest.approx(one - N_BINS * np.log(c), abs=1e-8)


def test_inflated_errors_are_larger_errors():
    """Inflation by f of quoted errors equals errors f times as large."""
    spectrum, mean, square = made_up(13)
    larger = DepthSpectrum(
        spectrum.wavelength_um, spectrum.half_width_um, spectrum.depth, 2.5 * spectrum.depth_err
    )
    one = DepthLikelihood(spectrum, MEDIAN).collapse(mean, square, 2.5)
    two = DepthLikelihood(larger, MEDIAN).collapse(mean, square)
    assert one.ln_evidence == pytest.approx(two.ln_evidence, abs=1e-9)
    assert one.chi2 == pytest.approx(two.chi2, abs=1e-9)


def test_prior_of_the_radius_is_normalised():
    """A prior twice as wide costs ln 2 where the posterior lies inside both."""
    spectrum, mean, square = made_up(14)
    narrow = DepthLikelihood(spectrum, MEDIAN, 0.1).collapse(mean, square).ln_evidence
    wide = DepthLikelihood(spectrum, MEDIAN, 0.2).collapse(mean, square).ln_evidence
    assert narrow - wide == pytest.approx([np.log(2)] * 3, abs=1e-9)


def test_posterior_mean_of_the_offsets():
    """Offsets added to a model are their posterior means, a ridge regression of the residuals."""
    spectrum, mean, square = made_up(15, segments=3)
    likelihood = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM)
    depth = likelihood.predicted_depth(mean, square, np.ones(3))
    for factor in (1.0, 2.0):
        found = likelihood.with_offsets(depth, np.full(3, factor))
        marks = np.stack([spectrum.segment == 1, spectrum.segment == 2], axis=1) * 1.0
        weight = 1 / (factor * spectrum.depth_err) ** 2
        normal = marks.T * weight @ marks + np.eye(2) / (OFFSET_PPM * PPM) ** 2
        offsets = np.linalg.solve(normal, marks.T * weight @ (spectrum.depth - depth).T)
        assert found == pytest.approx(depth + (marks @ offsets).T, abs=1e-12)


@given(
    seed=st.integers(0, 10_000),
    n_bins=st.integers(3, 25),
    segments=st.integers(1, 3),
    factor=st.floats(1.0, 5.0),
    dense=st.booleans(),
)
@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow], derandomize=True)
def test_order_of_the_bins_does_not_matter(seed, n_bins, segments, factor, dense):
    """Reordering bins with all that belongs to them changes nothing."""
    plain, mean, square = made_up(seed, n_bins, segments)
    covariance = correlated(plain) if dense else None
    order = np.random.default_rng(seed).permutation(n_bins)

    def built(index):
        return DepthSpectrum(
            np.full(n_bins, 1.4),  # centres may repeat, so any order is allowed
            plain.half_width_um,
            plain.depth[index],
            plain.depth_err[index],
            segment=plain.segment[index],
            segment_names=plain.segment_names,
            covariance=None if covariance is None else covariance[np.ix_(index, index)],
        )

    straight = DepthLikelihood(built(np.arange(n_bins)), MEDIAN).collapse(mean, square, factor)
    mixed = DepthLikelihood(built(order), MEDIAN).collapse(mean[:, order], square[:, order], factor)
    assert mixed.ln_evidence == pytest.approx(straight.ln_evidence, rel=1e-9, abs=1e-7)
    assert mixed.radius == pytest.approx(straight.radius, abs=1e-9)


@given(seed=st.integers(0, 10_000))
@settings(max_examples=20, deadline=None, derandomize=True)
def test_inputs_are_not_changed(seed):
    """Heights and spectra come back as they were."""
    spectrum, mean, square = made_up(seed, segments=2)
    kept = mean.copy(), square.copy(), spectrum.depth.copy()
    DepthLikelihood(spectrum, MEDIAN).collapse(mean, square, 1.2, extra_depth=np.zeros_like(mean))
    for before, after in zip(kept, (mean, square, spectrum.depth), strict=True):
        assert np.array_equal(before, after)


def test_level_and_scale_heights_do_not_bias_each_other():
    """Data made from a model at a known radius give that radius back, on average over noise."""
    spectrum, mean, square = made_up(16)
    truth = 1.013
    depth = MEDIAN * (truth**2 + 2 * truth * mean[0] + square[0])
    pulls = []
    for k in range(400):
        noisy = depth + spectrum.depth_err * np.random.default_rng([16, k]).standard_normal(N_BINS)
        made = DepthSpectrum(spectrum.wavelength_um, spectrum.half_width_um, noisy, spectrum.depth_err)
        found = DepthLikelihood(made, MEDIAN).collapse(mean[:1], square[:1])
        pulls.append((found.radius[0] - truth) / found.radius_err[0])
    assert abs(np.mean(pulls)) < 5 / np.sqrt(400)
    assert np.std(pulls) == pytest.approx(1, abs=5 / np.sqrt(800))


# --- correlated noise and further directions


def ar1_covariance(spectrum, rho, factor=1.0):
    """Covariance of AR(1) noise within each segment, bin by bin from its definition."""
    n = spectrum.n_bins
    place = {}
    for k in range(n):
        place[k] = sum(spectrum.segment[j] == spectrum.segment[k] for j in range(k))
    out = np.zeros((n, n))
    for i in range(n):
        for j in range(n):
            if spectrum.segment[i] == spectrum.segment[j]:
                out[i, j] = rho ** abs(place[i] - place[j])
    return factor**2 * np.outer(spectrum.depth_err, spectrum.depth_err) * out


@pytest.mark.parametrize("segments", [1, 3])
@pytest.mark.parametrize("rho", [0.0, 0.3, 0.8])
def test_ar1_noise(rho, segments):
    """Whitening by differences of neighbours is the dense covariance of its definition."""
    spectrum, mean, square = made_up(segments=segments)
    likelihood = DepthLikelihood(spectrum, MEDIAN, offset_ppm=OFFSET_PPM)
    factor = np.array([1.0, 1.3, 2.0])
    found = likelihood.collapse(mean, square, factor, ar1=np.full(3, rho)).ln_evidence
    for k in range(3):
        offsets = dense_covariance(spectrum) - dense_covariance(spectrum, offset_ppm=0.0)
        total = ar1_covariance(spectrum, rho, factor[k]) + offsets
        assert found[k] == pytest.approx(by_quadrature(spectrum, mean[k], square[k], total), abs=1e-5)
        assert likelihood.covariance(factor[k], rho) == pytest.approx(total, rel=1e-12)


def test_ar1_without_correlation_is_white():
    """Both ways to the same numbers."""
    spectrum, mean, square = made_up(segments=2)
    likelihood = DepthLikelihood(spectrum, MEDIAN, offset_ppm=OFFSET_PPM)
    white = likelihood.collapse(mean, square, 1.2)
    links = likelihood.collapse(mean, square, 1.2, ar1=np.zeros(3))
    assert links.ln_evidence == pytest.approx(white.ln_evidence, abs=1e-9)
    depth = np.full((3, N_BINS), MEDIAN)
    assert likelihood.offsets(depth, 1.2, np.zeros(3)) == pytest.approx(likelihood.offsets(depth, 1.2))


def test_correlation_weakens_a_step_and_sharpens_a_spike():
    """Golden values with AR(1), rho = 0.5: z of a broad band falls from 4.41 to 3.69 (recomputed from the formula)."""
    wavelength = np.array([1.10, 1.16, 1.22, 1.28, 1.34, 1.40, 1.46, 1.52, 1.58, 1.64])
    depth = np.array([14980, 15010, 14990, 15020, 15075, 15110, 15090, 15040, 15000, 14985.0])
    band = np.array([0, 0, 0, 0, 0.5, 1, 1, 0.5, 0, 0])
    spectrum = DepthSpectrum(wavelength, np.full(10, 0.03), depth * PPM, np.full(10, 30 * PPM))
    likelihood = DepthLikelihood(spectrum, 0.015)
    amplitude = np.linspace(0, 200, 401)
    extra = amplitude[:, None] * PPM * band
    zeros = np.zeros_like(extra)
    for rho, best, err in ((None, 104.6875, 23.7171), (0.5, 99.00, 26.83)):
        chi2 = likelihood.collapse(
            zeros, zeros, 1.0, extra, ar1=None if rho is None else np.full(401, rho)
        ).chi2
        curve = np.polyfit(amplitude, chi2, 2)
        assert -curve[1] / (2 * curve[0]) == pytest.approx(best, abs=0.02)
        assert 1 / np.sqrt(curve[0]) == pytest.approx(err, abs=0.01)


@pytest.mark.parametrize("ar1", [None, 0.4])
def test_directions_are_marginalised(ar1):
    """A slope and a step with normal priors are low-rank terms of the covariance."""
    spectrum, mean, square = made_up(segments=2)
    x = np.log(spectrum.wavelength_um)
    directions = np.stack([x - x.mean(), (spectrum.wavelength_um > 1.42).astype(float)], axis=1)
    sd = np.array([300.0, 150.0]) * PPM
    likelihood = DepthLikelihood(spectrum, MEDIAN, 0.2, OFFSET_PPM, directions, sd)
    rho = None if ar1 is None else np.full(3, ar1)
    found = likelihood.collapse(mean, square, 1.5, ar1=rho).ln_evidence
    base = dense_covariance(spectrum, 1.5)
    if ar1 is not None:
        base = base - 1.5**2 * np.diag(spectrum.depth_err**2) + ar1_covariance(spectrum, ar1, 1.5)
    total = base + (directions * sd**2) @ directions.T
    for k in range(3):
        assert found[k] == pytest.approx(by_quadrature(spectrum, mean[k], square[k], total), abs=1e-5)
    # Posterior mean of the amplitudes: S D^T C^-1 r.
    all_directions = np.column_stack([spectrum.segment == 1, directions])
    all_sd = np.array([OFFSET_PPM * PPM, *sd])
    residual = spectrum.depth - MEDIAN
    expected = all_sd**2 * (all_directions.T @ np.linalg.solve(total, residual))
    depth = np.full((3, N_BINS), MEDIAN)
    assert likelihood.offsets(depth, 1.5, rho)[0] == pytest.approx(expected, rel=1e-8)
