"""What a spectrum could show of each species: from its bins, errors and priors alone, before any depth is looked at."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.optimize import isotonic_regression

from transit.bases import line_base
from transit.hypotheses import Hypothesis
from transit.library import evaluate, line_statistic, model_depths, name_key, prior_library, prior_points
from transit.problem import Problem
from transit.records import Sensitivity
from transit.thresholds import Thresholds

# Truths are picked evenly in ln amplitude above this many scale heights, so that rare strong ones count as well.
SMALLEST_SCALE_HEIGHTS = 0.01
N_STRATA = 24
MOST_REPEATS = 4  # noise realisations of one truth
# A detection rate needs this many truths at and above its amplitude: fewer may all be seen by luck.
FEWEST_TRUTHS = 40
BOOTSTRAPS = 100


def sensitivity(
    problem: Problem,
    species: Sequence[str],
    *,
    seed: int,
    thresholds: Thresholds,
    n_simulations: int = 4096,
    n_templates: int = 4096,
) -> dict[str, Sensitivity]:
    """Smallest features that would show as present with the chance `thresholds.sensitivity_chance`.

    Parameters
    ----------
    problem : Problem
        Only the median of its depths is used, as the level.
    species : sequence of str
    seed : int
    thresholds : Thresholds
        `present_ln_b` is the ln B that counts as a detection.
    n_simulations : int
        Spectra simulated for each species.
    n_templates : int
        Prior draws of each hypothesis in the statistic, and as many more to draw truths from.

    Returns
    -------
    dict of Sensitivity by species

    Notes
    -----
    Truths are draws from the prior of the hypothesis with the species, their spectra get noise of the quoted errors,
    and ln B against the best null comes from a library of other prior draws (`library.evaluate`). The chance to
    detect is taken to grow with the amplitude (isotonic regression: Barlow et al. 1972, Statistical Inference under
    Order Restrictions); it is an average over all that the prior allows at that amplitude.
    """
    base = line_base(problem, "flat")
    continuum = prior_library(problem, Hypothesis("continuum", ()), base, n_templates, seed)
    atmosphere = problem.parameters(Hypothesis("continuum", ()))
    points = prior_points(len(atmosphere) + len(species), n_templates, [seed, name_key("truths")])
    bare = model_depths(problem, Hypothesis("continuum", ()), points[:, : len(atmosphere)])
    out = {}
    for k, name in enumerate(species):
        hypothesis = Hypothesis(name, (name,))
        library = prior_library(problem, hypothesis, base, n_templates, seed)
        statistic = line_statistic(problem, base, continuum, (library,))
        truth = model_depths(problem, hypothesis, _coordinates(problem, hypothesis, points, k))
        amplitude = np.ptp(truth - bare, axis=1) / problem.one_scale_height
        rng = np.random.default_rng([seed, name_key(name), 5])
        chosen = stratified_truths(amplitude, n_simulations, rng)
        mean = base.whiten_template(truth[chosen])
        ln_b = evaluate(statistic, mean, rng.standard_normal(mean.shape, dtype=np.float32))[0][:, 0]
        found, err = crossing_with_error(
            amplitude, chosen, ln_b >= thresholds.present_ln_b, thresholds.sensitivity_chance, rng
        )
        largest = float(amplitude.max())
        out[name] = Sensitivity(
            amplitude_scale_heights=found,
            amplitude_err=err,
            largest_scale_heights=largest,
            chance=thresholds.sensitivity_chance,
            ln_bayes_factor=thresholds.present_ln_b,
            sentence=_sentence(name, found, largest, thresholds.sensitivity_chance),
        )
    return out


def _coordinates(problem: Problem, hypothesis: Hypothesis, points: np.ndarray, column: int) -> np.ndarray:
    """Sampler coordinates of one species on the continuum of shared points (J, D + n_species).

    One continuum serves all species, so that it is computed once.
    """
    names = [p.name for p in problem.parameters(Hypothesis("continuum", ()))]
    columns = {name: points[:, k] for k, name in enumerate(names)}
    abundance = points[:, len(names) + column]
    return np.stack([columns.get(p.name, abundance) for p in problem.parameters(hypothesis)], axis=1)


def stratified_truths(amplitude: np.ndarray, n_simulations: int, rng: np.random.Generator) -> np.ndarray:
    """Indices of truths, about evenly spread in ln amplitude.

    Parameters
    ----------
    amplitude : ndarray, shape (J,)
        Scale heights.
    n_simulations : int
    rng : numpy.random.Generator

    Returns
    -------
    ndarray of int, shape (S,)
        S is `n_simulations` or less: no truth is used more than `MOST_REPEATS` times.
    """
    usable = np.flatnonzero(amplitude >= SMALLEST_SCALE_HEIGHTS)
    if not len(usable):
        return np.zeros(0, int)
    edges = np.geomspace(SMALLEST_SCALE_HEIGHTS, amplitude.max() * (1 + 1e-9), N_STRATA + 1)
    stratum = np.digitize(amplitude[usable], edges[1:-1])
    wanted = -(-n_simulations // len(np.unique(stratum)))
    picked = []
    for k in np.unique(stratum):
        members = usable[stratum == k]
        pool = np.concatenate([rng.permutation(members) for _ in range(MOST_REPEATS)])
        picked.append(pool[:wanted])
    return np.concatenate(picked)


def crossing_with_error(
    amplitude: np.ndarray,
    chosen: np.ndarray,
    detected: np.ndarray,
    chance: float,
    rng: np.random.Generator,
) -> tuple[float | None, float | None]:
    """Amplitude at which the chance to detect reaches a value, and its error by a bootstrap over truths.

    Parameters
    ----------
    amplitude : ndarray, shape (J,)
        Of the truths.
    chosen : ndarray of int, shape (S,)
        Truth of each simulation.
    detected : ndarray of bool, shape (S,)
    chance : float
    rng : numpy.random.Generator

    Returns
    -------
    (float, float) or (None, None)
        None where no amplitude reaches the chance.
    """
    ln_amplitude = np.log(amplitude[chosen])
    order = np.argsort(ln_amplitude, kind="stable")
    ln_amplitude, truth, seen = ln_amplitude[order], chosen[order], detected[order].astype(float)
    found = crossing(ln_amplitude, seen, np.ones(len(seen)), chance)
    if found is None:
        return None, None
    # Noise realisations of one truth go together: they share its cloud and its shape.
    repeated, used = [], np.unique(truth)
    for _ in range(BOOTSTRAPS):
        times = np.bincount(rng.choice(used, len(used)), minlength=len(amplitude))
        own = crossing(ln_amplitude, seen, times[truth].astype(float), chance)
        if own is not None:
            repeated.append(np.exp(own))
    err = float(np.std(repeated, ddof=1)) if len(repeated) > 1 else None
    return float(np.exp(found)), err


def crossing(ln_amplitude: np.ndarray, seen: np.ndarray, weight: np.ndarray, chance: float) -> float | None:
    """ln amplitude at which a rate that grows with it reaches a value; None where it never does.

    Parameters
    ----------
    ln_amplitude : ndarray, shape (S,)
        Sorted.
    seen : ndarray, shape (S,)
        1 where detected, 0 elsewhere.
    weight : ndarray, shape (S,)
    chance : float

    Returns
    -------
    float or None
    """
    used = weight > 0
    ln_amplitude, seen, weight = ln_amplitude[used], seen[used], weight[used]
    if not len(seen):
        return None
    fit = isotonic_regression(seen, weights=weight)
    if fit.x[-1] < chance:
        return None
    # Between the centres of two steps the rate is taken to be a line: the steps themselves are noise.
    starts = fit.blocks[:-1]
    centre = np.add.reduceat(weight * ln_amplitude, starts) / fit.weights
    height = fit.x[starts]
    above = int(np.argmax(height >= chance))
    if above == 0:
        return float(ln_amplitude[0])
    place = float(np.interp(chance, height[above - 1 : above + 1], centre[above - 1 : above + 1]))
    n_truths = 1 + np.count_nonzero(np.diff(ln_amplitude[ln_amplitude >= place]))
    return place if n_truths >= FEWEST_TRUTHS else None


def _sentence(species: str, amplitude: float | None, largest: float, chance: float) -> str:
    """State the sensitivity."""
    percent = f"{100 * chance:.0f} % chance"
    if amplitude is None:
        return (
            f"No {species} feature that the priors allow (up to {largest:.2g} scale heights) would show as present "
            f"with {percent}."
        )
    return f"{species} of {amplitude:.1f} scale heights or more would show as present with {percent}."
