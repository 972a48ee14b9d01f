"""Rivals as evidence: mean Bayes factor of one under the base, honest odds, and planted faults found in their place."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import expit, logsumexp

from transit.bumps import bump_cells, bump_gains, bump_products, bump_shapes, find_bump
from transit.linearised import LinearBase, whitening
from transit.records import DepthSpectrum
from transit.rivals import bump_rival, ln_gain_joint, ln_gain_normal, one_bin_rival, step_rival
from transit.units import PPM

N_BINS = 28
LEVEL = 0.0146
ERR = 60 * PPM
N_DRAWS = 20_000
EDGES_UM = np.geomspace(1.1, 1.7, N_BINS + 1)
CENTRE_UM, HALF_UM = (EDGES_UM[1:] + EDGES_UM[:-1]) / 2, np.diff(EDGES_UM) / 2
STEPS_UM = (1.25, 1.5)
SEGMENT = (CENTRE_UM > 1.42).astype(int)
DIRECTIONS = np.array([*(um < CENTRE_UM for um in STEPS_UM), SEGMENT], float)
SPAN = np.log(EDGES_UM[-1] / EDGES_UM[0])


def spectrum_of(depth):
    return DepthSpectrum(
        CENTRE_UM, HALF_UM, depth, np.full(N_BINS, ERR), segment=SEGMENT, segment_names=("blue", "red")
    )


SPECTRUM = spectrum_of(np.full(N_BINS, LEVEL))
# Level and slope free, an offset of the second segment in the covariance, neighbours that correlate.
PLACE = np.arange(N_BINS)
COVARIANCE = ERR**2 * 0.3 ** np.abs(PLACE[:, None] - PLACE) + (100 * PPM) ** 2 * np.outer(SEGMENT, SEGMENT)
FREE = np.column_stack((np.ones(N_BINS), np.log(CENTRE_UM)))
BASE = LinearBase("slope", np.full(N_BINS, LEVEL), whitening(COVARIANCE, FREE))


def ln_b_of(name, white, size, fineness=1.0):
    """ln B of many whitened spectra (S, M) for a prior of the amplitude of `size` ppm."""
    if name == "one-bin":
        gains = ln_gain_normal(white @ BASE.transform, np.sum(BASE.transform**2, axis=0), size * PPM)
        return logsumexp(gains, axis=1) - np.log(N_BINS)
    if name == "step":
        templates = BASE.whiten_template(DIRECTIONS)
        return ln_gain_joint(white @ templates.T, templates @ templates.T, size * PPM)
    cells = bump_cells(SPECTRUM, fineness)
    along, square = bump_products(BASE, SPECTRUM, white, cells)
    return logsumexp(bump_gains(along, square, size * PPM) + cells.ln_prior, axis=1)


def planted(name, n, size, rng):
    """Depths (n, N) drawn from the prior of a rival, as its documentation states it."""
    if name == "one-bin":
        added = np.zeros((n, N_BINS))
        added[np.arange(n), rng.integers(0, N_BINS, n)] = size * PPM * rng.standard_normal(n)
        return added
    if name == "step":
        return size * PPM * rng.standard_normal((n, len(DIRECTIONS))) @ DIRECTIONS
    ln_centre = np.log(EDGES_UM[0]) + SPAN * rng.uniform(size=n)
    narrowest, widest = SPAN / N_BINS / 2, SPAN / 3
    ln_width = np.log(narrowest) + np.log(widest / narrowest) * rng.uniform(size=n)
    return size * PPM * rng.uniform(size=(n, 1)) * bump_shapes(SPECTRUM, ln_centre, ln_width)


@pytest.mark.parametrize(("name", "size"), [("one-bin", 45.0), ("step", 20.0), ("bump", 80.0)])
def test_mean_bayes_factor_is_one_under_the_base(name, size):
    """The mean over the base's data of a ratio of densities is one, exactly (a proper evidence; common practice).

    Priors are narrow here, so that B has a variance and its mean a standard error.
    """
    white = np.random.default_rng([81, len(name)]).standard_normal((N_DRAWS, len(BASE.transform)))
    b = np.exp(ln_b_of(name, white, size, fineness=0.4))  # the mean is one for any cells
    error = b.std(ddof=1) / np.sqrt(N_DRAWS)
    assert error < 0.02
    assert b.std() > 0.05  # a constant would pass the next line
    assert abs(b.mean() - 1) < 3.5 * error


@pytest.mark.parametrize(("name", "size"), [("one-bin", 500.0), ("step", 300.0), ("bump", 1500.0)])
def test_odds_are_honest_for_wide_priors(name, size):
    """Half the spectra have the rival: its posterior probability must be right on average, weighted in any way.

    The residual label - p has mean zero under every weight that depends on the data alone (calibration: Dawid 1982,
    J. Am. Stat. Assoc. 77, 605).
    """
    rng = np.random.default_rng([83, len(name)])
    half = N_DRAWS // 2
    label = np.repeat([0.0, 1.0], half)
    added = BASE.whiten_template(planted(name, half, size, rng))
    white = rng.standard_normal((N_DRAWS, len(BASE.transform)))
    white[half:] += added
    ln_b = ln_b_of(name, white, size)
    p = expit(ln_b)
    assert ln_b[:half].mean() < -0.3 < 0.3 < ln_b[half:].mean()
    for weight in (np.ones(N_DRAWS), np.clip(ln_b, -5, 5), p > 0.9, np.abs(ln_b) < 1, ln_b < -1):
        terms = (label - p) * weight
        assert abs(terms.mean()) < 3.5 * terms.std(ddof=1) / np.sqrt(N_DRAWS)


def test_adaptive_cells_keep_the_odds_honest():
    """The same for the bump as it is used, its cells adapted to each spectrum: 400 spectra."""
    rng = np.random.default_rng(85)
    n, size = 400, 1500.0
    label = np.repeat([0.0, 1.0], n // 2)
    white = rng.standard_normal((n, len(BASE.transform)))
    white[n // 2 :] += BASE.whiten_template(planted("bump", n // 2, size, rng))
    ln_b = np.array([find_bump(BASE, SPECTRUM, y, size * PPM).ln_bayes_factor for y in white])
    for weight in (np.ones(n), np.clip(ln_b, -5, 5)):
        terms = (label - expit(ln_b)) * weight
        assert abs(terms.mean()) < 3.5 * terms.std(ddof=1) / np.sqrt(n)


def test_posterior_intervals_cover_what_was_planted():
    """68 per cent intervals hold 68 per cent of bumps and bad bins that were drawn from the prior (200 of each)."""
    rng = np.random.default_rng(87)
    n, inside = 200, {"bump": 0, "one-bin": 0}
    narrowest, widest = SPAN / N_BINS / 2, SPAN / 3
    noise = np.linalg.cholesky(COVARIANCE)
    for _ in range(n):
        ln_centre = np.log(EDGES_UM[0]) + SPAN * rng.uniform()
        ln_width = np.log(narrowest) + np.log(widest / narrowest) * rng.uniform()
        height = 1500 * PPM * rng.uniform()
        shape = bump_shapes(SPECTRUM, np.array([ln_centre]), np.array([ln_width]))[0]
        depth = LEVEL + noise @ rng.standard_normal(N_BINS) + height * shape
        found = bump_rival(BASE, SPECTRUM, depth, 1500 * PPM).parameters
        for name, truth in (("wavelength_um", np.exp(ln_centre)), ("amplitude_ppm", height / PPM)):
            inside["bump"] += found[name].lower <= truth <= found[name].upper
        amplitude = 500 * rng.standard_normal()
        depth = LEVEL + noise @ rng.standard_normal(N_BINS)
        depth[rng.integers(N_BINS)] += amplitude * PPM
        interval = one_bin_rival(BASE, SPECTRUM, depth, 500.0).parameters["amplitude_ppm"]
        inside["one-bin"] += interval.lower <= amplitude <= interval.upper
    # Centre and height of one bump are not independent: at worst their count has twice the binomial variance.
    for name, trials, spread in (("bump", 2 * n, 2.0), ("one-bin", n, 1.0)):
        error = np.sqrt(spread * trials * 0.68 * 0.32)
        assert abs(inside[name] - 0.68 * trials) < 3.5 * error, name


def rivals_of(depth):
    spectrum = spectrum_of(depth)
    return {
        "one-bin": one_bin_rival(BASE, spectrum, depth, 500.0),
        "step": step_rival(BASE, spectrum, depth, STEPS_UM, 300.0),
        "bump": bump_rival(BASE, spectrum, depth, 1500 * PPM),
    }


@pytest.mark.parametrize("seed", range(5))
def test_a_planted_fault_is_found_in_its_place(seed):
    """A bad bin, a step and a bump, each about ten errors strong: found, in place, and ahead of the two others."""
    noise = np.linalg.cholesky(COVARIANCE) @ np.random.default_rng([89, seed]).standard_normal(N_BINS)
    bump = bump_shapes(SPECTRUM, np.log([1.36]), np.log([0.03]))[0]
    truths = {
        "one-bin": -600 * PPM * (PLACE == 9),
        "step": 500 * PPM * (CENTRE_UM > 1.25),
        "bump": 500 * PPM * bump,
    }
    for name, added in truths.items():
        found = rivals_of(LEVEL + noise + added)
        gains = {key: rival.ln_bayes_factor for key, rival in found.items()}
        assert gains[name] > 5
        assert max(gains, key=gains.get) == name
        if name == "one-bin":
            place = found[name].parameters["wavelength_um"]
            assert place.lower == place.median == place.upper == CENTRE_UM[9]
            assert found[name].phrase == f"a single bad bin at {CENTRE_UM[9]:.2f} um"
        if name == "step":
            step = found[name].parameters["step_ppm: 1.25 um"]
            error = (step.upper - step.lower) / 2
            assert abs(step.median - 500) < 4 * error
            assert found[name].phrase == "a step at 1.25 um"
        if name == "bump":
            place = found[name].parameters["wavelength_um"]
            assert abs(place.median - 1.36) < 2 * (place.upper - place.lower)
            assert found[name].outside_share([(1.30, 1.42)]) < 0.01
        # Best model against the truth, in the directions that the base leaves: within the noise.
        left = BASE.whiten_template(found[name].depth - BASE.depth - added)
        assert left @ left < 30
