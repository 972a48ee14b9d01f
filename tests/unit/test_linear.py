import numpy as np
import pytest

from transit.likelihood import DepthLikelihood
from transit.linear import least_squares, linear_posterior
from transit.records import DepthSpectrum
from transit.units import PPM

MEDIAN = 0.0146
FRACTION = 0.2
N_BINS = 15
RNG_SEED = 7


def made_up(seed=1, slope_ppm=0.0, covariance=None, err_ppm=40.0):
    """A sloped spectrum, its likelihood, and ln wavelength less its mean."""
    rng = np.random.default_rng([71, seed])
    wavelength = np.geomspace(0.6, 2.0, N_BINS)
    x = np.log(wavelength)
    x = x - x.mean()
    err = err_ppm * PPM * rng.uniform(0.7, 1.4, N_BINS)
    depth = MEDIAN + slope_ppm * PPM * x + err * rng.standard_normal(N_BINS)
    spectrum = DepthSpectrum(wavelength, np.full(N_BINS, 0.02), depth, err, covariance=covariance)
    return spectrum, DepthLikelihood(spectrum, MEDIAN, FRACTION), x


def ln_gaussian_peak(solution, covariance):
    """ln of the integral of the likelihood over all coefficients of a linear model, without priors."""
    n = len(covariance)
    k = len(solution.estimate)
    ln_norm = -0.5 * n * np.log(2 * np.pi) - 0.5 * np.linalg.slogdet(covariance)[1]
    ln_volume = 0.5 * k * np.log(2 * np.pi) + 0.5 * np.linalg.slogdet(solution.covariance)[1]
    return ln_norm - 0.5 * solution.chi2 + ln_volume


def ln_radius_prior(level):
    """ln of the prior density of the level D = q u^2 for u uniform: du/dD / (2 fraction)."""
    return -np.log(2 * FRACTION * 2 * np.sqrt(MEDIAN * level))


# --- least squares


def test_least_squares_against_the_normal_equations():
    """Estimate, covariance and chi-square of a full covariance are those of the textbook formula."""
    rng = np.random.default_rng(1)
    root = rng.normal(size=(8, 8))
    covariance = root @ root.T + np.eye(8)
    design, depth = rng.normal(size=(8, 3)), rng.normal(size=8)
    found = least_squares(design, depth, covariance)
    inverse = np.linalg.inv(covariance)
    expected = np.linalg.inv(design.T @ inverse @ design)
    assert found.covariance == pytest.approx(expected)
    assert found.estimate == pytest.approx(expected @ design.T @ inverse @ depth)
    residual = depth - design @ found.estimate
    assert found.chi2 == pytest.approx(residual @ inverse @ residual)
    assert found.dof == 5
    assert found.z == pytest.approx(found.estimate / np.sqrt(np.diag(expected)))


def test_least_squares_takes_variances():
    """A vector of variances is a diagonal covariance."""
    rng = np.random.default_rng(2)
    design, depth, variance = rng.normal(size=(6, 2)), rng.normal(size=6), rng.uniform(1, 2, 6)
    one, two = least_squares(design, depth, variance), least_squares(design, depth, np.diag(variance))
    assert one.estimate == pytest.approx(two.estimate)
    assert one.chi2 == pytest.approx(two.chi2)


@pytest.mark.parametrize(("inside", "total", "expected"), [(5, 20, 25.820), (10, 20, 22.361)])
def test_error_of_a_band_amplitude(inside, total, expected):
    """sigma sqrt(1/n1 + 1/n0) for a box: 25.820 ppm for 5 of 20 bins at 50 ppm."""
    box = (np.arange(total) < inside) * 1.0
    found = least_squares(np.column_stack([np.ones(total), box]), np.zeros(total), np.full(total, 2500.0))
    assert found.error[1] == pytest.approx(expected, abs=5e-4)


# --- flat spectra


def test_flat_evidence_is_gaussian():
    """Closed form: the Gaussian integral over the level times the prior density there."""
    spectrum, likelihood, _ = made_up()
    found = linear_posterior(likelihood, None, 1.0, None, np.random.default_rng(RNG_SEED))
    covariance = np.diag(spectrum.depth_err**2)
    line = least_squares(np.ones((N_BINS, 1)), spectrum.depth, covariance)
    expected = ln_gaussian_peak(line, covariance) + ln_radius_prior(line.estimate[0])
    assert found.ln_evidence == pytest.approx(expected, abs=1e-6)
    assert found.chi2 == pytest.approx(line.chi2, abs=1e-6)
    assert MEDIAN * found.best[1] ** 2 == pytest.approx(line.estimate[0], abs=1e-9)
    assert np.all(found.slope == 0)
    assert np.all(found.error_factor == 1)


def test_flat_evidence_with_correlated_errors():
    """The same closed form with a full covariance."""
    plain, _, _ = made_up()
    lag = np.abs(np.subtract.outer(np.arange(N_BINS), np.arange(N_BINS)))
    covariance = 0.5**lag * np.outer(plain.depth_err, plain.depth_err)
    spectrum, likelihood, _ = made_up(covariance=covariance)
    found = linear_posterior(likelihood, None, 1.0, None, np.random.default_rng(RNG_SEED))
    line = least_squares(np.ones((N_BINS, 1)), spectrum.depth, covariance)
    expected = ln_gaussian_peak(line, covariance) + ln_radius_prior(line.estimate[0])
    assert found.ln_evidence == pytest.approx(expected, abs=1e-6)


def test_flat_evidence_with_inflation():
    """Against a dense sum over ln f of the closed form at each error factor."""
    spectrum, likelihood, _ = made_up(2)
    found = linear_posterior(likelihood, None, 1.0, (1.0, 10.0), np.random.default_rng(RNG_SEED))
    covariance = np.diag(spectrum.depth_err**2)
    nodes = (np.arange(4000) + 0.5) / 4000 * np.log(10)
    values = []
    for factor in np.exp(nodes):
        line = least_squares(np.ones((N_BINS, 1)), spectrum.depth, factor**2 * covariance)
        values.append(ln_gaussian_peak(line, factor**2 * covariance) + ln_radius_prior(line.estimate[0]))
    expected = np.logaddexp.reduce(values) - np.log(4000)
    assert found.ln_evidence == pytest.approx(expected, abs=1e-5)
    assert 1 <= found.error_factor.min() < found.error_factor.max() <= 10


# --- sloped spectra


@pytest.mark.parametrize("slope_ppm", [0.0, 400.0])
def test_slope_evidence_is_gaussian(slope_ppm):
    """Closed form well inside the prior: the bivariate Gaussian times both prior densities."""
    spectrum, likelihood, x = made_up(3, slope_ppm)
    limit = 2000 * PPM
    found = linear_posterior(likelihood, x, limit, None, np.random.default_rng(RNG_SEED), 4000)
    covariance = np.diag(spectrum.depth_err**2)
    line = least_squares(np.column_stack([np.ones(N_BINS), x]), spectrum.depth, covariance)
    expected = ln_gaussian_peak(line, covariance) + ln_radius_prior(line.estimate[0]) - np.log(2 * limit)
    assert found.ln_evidence == pytest.approx(expected, abs=1e-5)
    assert found.slope.mean() == pytest.approx(line.estimate[1], abs=5 * line.error[1] / np.sqrt(4000))


@pytest.mark.parametrize(
    ("slope_ppm", "limit_ppm"),
    [(400.0, 2000.0), (400.0, 390.0), (400.0, 300.0), (-400.0, 250.0), (0.0, 20.0)],
)
def test_slope_evidence_by_dense_quadrature(slope_ppm, limit_ppm):
    """On a plain grid over slope and radius, also where the prior cuts the posterior."""
    spectrum, likelihood, x = made_up(4, slope_ppm)
    limit = limit_ppm * PPM
    found = linear_posterior(likelihood, x, limit, None, np.random.default_rng(RNG_SEED))
    nodes, weights = np.polynomial.legendre.leggauss(600)
    slope = limit * nodes
    u = 1 + 0.01 * nodes
    depth = MEDIAN * u[:, None, None] ** 2 + slope[None, :, None] * x
    chi2 = np.sum(((spectrum.depth - depth) / spectrum.depth_err) ** 2, axis=2)
    ln_norm = -0.5 * N_BINS * np.log(2 * np.pi) - np.log(spectrum.depth_err).sum()
    peak = chi2.min()
    integral = weights @ np.exp(-0.5 * (chi2 - peak)) @ weights * 0.01 / (2 * FRACTION) / 2
    assert found.ln_evidence == pytest.approx(ln_norm - 0.5 * peak + np.log(integral), abs=1e-4)
    assert np.abs(found.slope).max() <= limit


def test_slope_evidence_with_inflation():
    """Against a dense sum over ln f of the closed form with a slope."""
    spectrum, likelihood, x = made_up(5, 300.0)
    limit = 40_000 * PPM  # no factor makes the posterior reach it
    found = linear_posterior(likelihood, x, limit, (1.0, 10.0), np.random.default_rng(RNG_SEED))
    covariance = np.diag(spectrum.depth_err**2)
    values = []
    for factor in np.exp((np.arange(4000) + 0.5) / 4000 * np.log(10)):
        line = least_squares(np.column_stack([np.ones(N_BINS), x]), spectrum.depth, factor**2 * covariance)
        values.append(ln_gaussian_peak(line, factor**2 * covariance) + ln_radius_prior(line.estimate[0]))
    expected = np.logaddexp.reduce(values) - np.log(4000) - np.log(2 * limit)
    assert found.ln_evidence == pytest.approx(expected, abs=1e-4)


def test_draws_follow_the_posterior():
    """Draws of level and slope have the moments of the bivariate Gaussian, within five of their own errors."""
    spectrum, likelihood, x = made_up(6, 200.0)
    n_draws = 20_000
    found = linear_posterior(likelihood, x, 3000 * PPM, None, np.random.default_rng(RNG_SEED), n_draws)
    covariance = np.diag(spectrum.depth_err**2)
    line = least_squares(np.column_stack([np.ones(N_BINS), x]), spectrum.depth, covariance)
    level = MEDIAN * found.radius**2
    for draws, estimate, error in zip((level, found.slope), line.estimate, line.error, strict=True):
        assert draws.mean() == pytest.approx(estimate, abs=5 * error / np.sqrt(n_draws))
        assert draws.std() == pytest.approx(error, rel=5 / np.sqrt(2 * n_draws))
    expected = line.covariance[0, 1] / np.prod(line.error)
    assert np.corrcoef(level, found.slope)[0, 1] == pytest.approx(expected, abs=5 / np.sqrt(n_draws))


def test_same_generator_same_draws():
    """All randomness comes from the generator handed in."""
    _, likelihood, x = made_up(7)
    one = linear_posterior(likelihood, x, 1e-3, None, np.random.default_rng(3))
    two = linear_posterior(likelihood, x, 1e-3, None, np.random.default_rng(3))
    assert np.array_equal(one.slope, two.slope)
    assert np.array_equal(one.radius, two.radius)
