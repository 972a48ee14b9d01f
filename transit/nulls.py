"""How often noise alone would look as striking as the data: false-alarm probabilities of ln B by simulation."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass

import numpy as np

from transit.bases import atmosphere_base, line_base
from transit.combination import CombinedEvidence
from transit.errors import SettingError
from transit.hypotheses import Hypothesis, columns, physical, vmr_range
from transit.library import (
    Library,
    Statistic,
    atmosphere_dim,
    evaluate,
    feature_library,
    focus_weights,
    line_statistic,
    model_depths,
    name_key,
    prior_library,
    whitened,
)
from transit.linearised import LinearBase
from transit.mixtures import Mixture, choose_mixture
from transit.problem import Problem, share_model
from transit.records import FalseAlarms, Fit
from transit.tails import (
    N_CHUNKS,
    REPEATS,
    is_bound,
    largest_chance,
    run_in_order,
    simulate_nulls,
    tails_of,
)
from transit.units import PPM

TABLE_LN_B = (0.0, 1.0, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0, 12.0)
SMALLEST_P = 1e-8

N_FEATURES = 256  # templates of a species' features alone, to plant
FOCUS_DRAWS, FOCUS_SIZES, FOCUS_WIDENING = 2000, (1, 2, 4), 1.3


def false_alarms(
    problem: Problem,
    species: Sequence[str],
    fits: Sequence[Fit],
    combined: Mapping[str, CombinedEvidence],
    *,
    seed: int,
    n_simulations: int = 20_000,
    n_templates: int = 4096,
    error_factor: float = 1.0,
    ar1: float = 0.0,
    executor: Executor | None = None,
    left_out: bool = True,
) -> FalseAlarms:
    """Null distributions of ln B for one spectrum, and where its own ln B lie in them.

    Parameters
    ----------
    problem : Problem
    species : sequence of str
        Species tried.
    fits : sequence of Fit
        The slope's draws are the slopes of the null with a slope.
    combined : mapping of str to CombinedEvidence
        Posterior of the continuum, and of `all-X` (of the other one where there are two species) for `left_out`.
    seed : int
    n_simulations : int
        Of each null.
    n_templates : int
        Prior draws of each hypothesis.
    error_factor, ar1 : float
        Factor on the quoted errors and correlation of neighbouring bins, the same in all simulations.
    executor : concurrent.futures.Executor, optional
        Where to simulate; the numbers do not depend on it.
    left_out : bool
        Whether to simulate each species left out of the full model as well.

    Returns
    -------
    FalseAlarms

    Raises
    ------
    SettingError
        If there are too few simulations for the chunks they are made in.

    Notes
    -----
    ln B comes from a fixed library of weighted prior draws, for the data and for the simulations alike
    (`library.evaluate`); half of the draws lie about the fits of continuum and species (`posterior_focus`).
    The nulls are flat, a slope and a continuum, the latter two drawn from their posteriors (a parametric bootstrap:
    Efron & Tibshirani 1993, chapter 6). Of their p the largest is quoted.

    The far tail is reached by importance sampling: most simulations hold a planted shape g on top of noise n, and
    a simulation with e = n + g has the weight of its density without planting over that with it,
    1/[0.2 + 0.8 mean_j exp(e.g_j - |g_j|^2/2)], which is at most 5 (a defensive mixture: Hesterberg 1995,
    Technometrics 37, 185).
    """
    species = tuple(species)
    n_means = n_simulations // (REPEATS * N_CHUNKS)
    if n_means < 2:
        raise SettingError(
            f"{n_simulations} simulations were asked for, expected at least {2 * REPEATS * N_CHUNKS} of each null."
        )
    base = line_base(problem, "flat", error_factor=error_factor, ar1=ar1)
    n_continuum = atmosphere_dim(problem)
    about_continuum = posterior_focus(combined, "continuum", n_continuum, seed)
    tasks = []
    for name in ("continuum", *species):
        own = () if name == "continuum" else posterior_focus(combined, name, n_continuum + 1, seed)
        focuses = (*about_continuum, *own)
        tasks.append(LibraryTask(problem, name, n_templates, seed, error_factor, ar1, focuses))
    (continuum, _), *own = run_in_order(build_libraries, tasks, executor)
    statistic = line_statistic(problem, base, continuum, tuple(library for library, _ in own))
    data = base.whiten(problem.spectrum.depth)[None, :]
    observed = tuple(part[0] for part in evaluate(statistic, data, np.zeros((1, data.shape[1]))))

    means = null_means(problem, base, fits, combined, n_means * N_CHUNKS, seed)
    draws = simulate_nulls(statistic, [features for _, features in own], means, seed, executor)
    found = _observed(species, observed, draws)
    table = _table(species, draws)
    out = {}
    if left_out and len(species) > 1:
        settings = (n_simulations, max(n_templates // 2, 1), seed, error_factor, ar1)
        tasks = [left_out_task(problem, species, x, combined, *settings) for x in species]
        out = dict(zip(species, run_in_order(run_left_out, tasks, executor), strict=True))
    return FalseAlarms(
        ln_bayes_factor=np.array(TABLE_LN_B),
        observed=found,
        left_out=out,
        n_simulations=n_means * N_CHUNKS * REPEATS,
        error_factor=error_factor,
        smallest_p=SMALLEST_P,
        **table,
    )


# --- what is simulated -------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class LibraryTask:
    """Library of one hypothesis (a species, or "continuum"), built where the model is at hand."""

    problem: Problem
    name: str
    n_templates: int
    seed: int
    error_factor: float
    ar1: float
    focuses: tuple[Mixture, ...] = ()


def build_libraries(task: LibraryTask) -> tuple[Library, Library | None]:
    """Library of a hypothesis, and for a species a smaller one of its features alone."""
    problem = share_model(task.problem)
    base = line_base(problem, "flat", error_factor=task.error_factor, ar1=task.ar1)
    is_null = task.name == "continuum"
    hypothesis = Hypothesis(task.name, () if is_null else (task.name,))
    whole = prior_library(problem, hypothesis, base, task.n_templates, task.seed, task.focuses)
    if is_null:
        return whole, None
    n_features = min(N_FEATURES, task.n_templates)
    return whole, feature_library(problem, task.name, base, n_features, task.seed, task.focuses[:1])


def posterior_focus(
    combined: Mapping[str, CombinedEvidence], name: str, n_dim: int, seed: int
) -> tuple[Mixture, ...]:
    """Mixture of t distributions about a posterior; empty where that was not fitted.

    Parameters
    ----------
    combined : mapping of str to CombinedEvidence
    name : str
        Hypothesis.
    n_dim : int
        How many of its coordinates, counted from the first.
    seed : int

    Returns
    -------
    tuple of Mixture
        One or none.

    Notes
    -----
    Species are weighed as additions to the fitted continuum, in simulations as in the data, and the species' own fit
    is what the data ask for: templates have to be dense at both.
    """
    if name not in combined:
        return ()
    rng = np.random.default_rng([seed, name_key("focus"), name_key(name)])
    draws = combined[name].draws_z[:, :n_dim]
    draws = draws[rng.permutation(len(draws))[:FOCUS_DRAWS]]
    mixture = choose_mixture(draws, np.ones(len(draws)), rng, sizes=FOCUS_SIZES)
    return (mixture.widened(FOCUS_WIDENING),)


def null_means(problem: Problem, base, fits, combined, n_means: int, seed: int) -> dict[str, np.ndarray]:
    """Whitened means of each null by name, (n_means, M), drawn from the posteriors of slope and continuum."""
    means = {"flat": np.zeros((n_means, len(base.transform)))}
    rng = np.random.default_rng([seed, name_key("means")])
    for fit in fits:
        if fit.name == "slope":
            slope = fit.draws[:, fit.draw_names.index("slope_ppm_per_efold")] * PPM
            line = base.whiten_template(problem.abscissa)
            means["slope"] = rng.choice(slope, n_means)[:, None] * line
    if "continuum" in combined:
        hypothesis = Hypothesis("continuum", ())
        z = rng.choice(combined["continuum"].draws_z, n_means)[:, : len(problem.parameters(hypothesis))]
        means["continuum"] = base.whiten_template(model_depths(problem, hypothesis, z))
    return means


# --- from simulations to probabilities ----------------------------------------------------------------------


def _observed(species, observed, draws) -> dict[str, dict]:
    """Where the data lie, by species and "" for the best."""
    ln_b, delta_chi2 = observed
    best_ln_b, best_chi2 = tails_of(draws, "ln_b", None), tails_of(draws, "delta_chi2", None)
    out = {}
    for k, name in enumerate((*species, "")):
        is_best = name == ""
        value = float(ln_b.max() if is_best else ln_b[k])
        gain = float(delta_chi2.max() if is_best else delta_chi2[k])
        of_best, of_best_err, of_best_null = largest_chance(best_ln_b, value)
        entry = {"ln_bayes_factor": value, "delta_chi2": gain, "p_best_of_n": of_best}
        entry["p_is_bound"] = is_bound(best_ln_b, value, of_best_null)
        if is_best:
            entry |= {"p_err": of_best_err, "p_null": of_best_null}
            entry["p_delta_chi2"] = largest_chance(best_chi2, gain)[0]
        else:
            named, err, by_null = largest_chance(tails_of(draws, "ln_b", k), value, best_ln_b)
            entry |= {"p_named": named, "p_err": err, "p_null": by_null}
            entry["p_is_bound"] = is_bound(tails_of(draws, "ln_b", k), value, by_null)
            entry["p_delta_chi2"] = largest_chance(tails_of(draws, "delta_chi2", k), gain, best_chi2)[0]
        out[name] = entry
    return out


def _table(species, draws) -> dict:
    """p and errors at the ln B of the table."""
    of_best = tails_of(draws, "ln_b", None)
    named, named_err = {}, {}
    for k, name in enumerate(species):
        named[name], named_err[name] = _column(tails_of(draws, "ln_b", k), of_best)
    best, best_err = _column(of_best, None)
    return dict(p_named=named, p_named_err=named_err, p_best_of_n=best, p_best_of_n_err=best_err)


def _column(tails, of_best) -> tuple[np.ndarray, np.ndarray]:
    found = np.array([largest_chance(tails, value, of_best)[:2] for value in TABLE_LN_B])
    return found[:, 0], found[:, 1]


# --- one species left out of all ---------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class LeftOutTask:
    """What it takes to ask whether a species adds anything to the best fit without it.

    `draws_z` (J, D) are posterior draws of the hypothesis without the species, `best_z` its best point; `full` is the
    hypothesis with it, and `full_z` (K, E) are draws of its posterior that stand, with `full_weight` (K,), for the
    prior of the abundance.
    """

    problem: Problem
    base: Hypothesis
    species: str
    best_z: np.ndarray
    draws_z: np.ndarray
    n_simulations: int
    seed: int
    error_factor: float
    ar1: float
    full: Hypothesis | None = None
    full_z: np.ndarray | None = None
    full_weight: np.ndarray | None = None


def left_out_task(
    problem: Problem,
    species: Sequence[str],
    name: str,
    combined: Mapping[str, CombinedEvidence],
    n_simulations: int,
    n_templates: int,
    seed: int,
    error_factor: float,
    ar1: float,
) -> LeftOutTask:
    """Task of the species `name`, with draws from the posteriors without it and of all species."""
    others = tuple(x for x in species if x != name)
    base = Hypothesis(others[0] if len(others) == 1 else f"all-{name}", others)
    fitted = combined[base.name]
    rng = np.random.default_rng([seed, name_key(base.name), 3])
    # Each draw once where there are enough: with replacement some would count twice.
    replace = n_templates > len(fitted.draws_z)
    draws = rng.choice(fitted.draws_z, n_templates, replace=replace)
    full = Hypothesis("all", tuple(species))
    full_z = full_weight = None
    place = [p.name for p in problem.parameters(full)].index(f"log10_vmr_{name}")
    if full.name in combined:
        n_dim = len(problem.parameters(full))
        full_z = rng.choice(combined[full.name].draws_z, n_templates, replace=replace)[:, :n_dim]
        about = choose_mixture(full_z[:, [place]], np.ones(n_templates), rng, sizes=FOCUS_SIZES)
        full_weight = focus_weights(full_z[:, [place]], (about.widened(FOCUS_WIDENING),), normalised=False)
    return LeftOutTask(
        problem, base, name, fitted.best_z, draws, n_simulations, seed, error_factor, ar1, full, full_z, full_weight
    )  # fmt: skip


def run_left_out(task: LeftOutTask) -> dict:
    """ln B of a species over the hypothesis without it, and how often noise about that one does as well.

    Parameters
    ----------
    task : LeftOutTask

    Returns
    -------
    dict
        ln_bayes_factor, p_named, p_err, p_null {base: p}.

    Notes
    -----
    The frame is linear about the best fit without the species; templates are what the species adds, with the
    abundances of its prior, to posterior draws of that hypothesis. Where the species is needed badly, what it adds to
    a fit without it is not what it adds to one with it: half of the weight goes to posterior draws of the full
    hypothesis, each with the prior density of the abundance over its posterior density. All other parameters are paid
    for by the frame, in which they move freely within their priors.
    """
    problem = share_model(task.problem)
    base = atmosphere_base(problem, task.base, task.best_z, error_factor=task.error_factor, ar1=task.ar1)
    library = left_out_library(problem, base, task)
    statistic = Statistic((library,))
    data = base.whiten(problem.spectrum.depth)[None, :]
    observed = float(evaluate(statistic, data, np.zeros((1, data.shape[1])))[0][0, 0])
    n_means = task.n_simulations // (REPEATS * N_CHUNKS) * N_CHUNKS
    means = {task.base.name: np.zeros((n_means, data.shape[1]))}
    seed = name_key(f"{task.seed} {task.species}")
    tails = tails_of(simulate_nulls(statistic, (), means, seed), "ln_b", 0)
    named, err, by_null = largest_chance(tails, observed)
    found = {"ln_bayes_factor": observed, "p_named": named, "p_err": err, "p_null": by_null}
    return found | {"p_is_bound": is_bound(tails, observed, by_null)}


def left_out_library(problem: Problem, base: LinearBase, task: LeftOutTask) -> Library:
    """Templates of a species left out, see `run_left_out`."""
    added = whitened(base, added_depths(problem, task))
    if task.full_z is None:
        return Library(task.species, added)
    about = whitened(base, fitted_depths(problem, task.full, task.full_z) - base.depth)
    n_added, n_about = len(added), len(about)
    half = 0.5 * (n_added + n_about)
    # The weights of `full_z` count on as many draws from the prior, which are left out: they could only add.
    weight = np.concatenate([np.full(n_added, half / n_added), half / n_about * 0.5 * task.full_weight])
    return Library(task.species, np.concatenate([added, about]), weight.astype(np.float32))


def fitted_depths(problem: Problem, hypothesis: Hypothesis, z: np.ndarray) -> np.ndarray:
    """Depths (fraction), shape (J, N), at sampler coordinates, each with the reference radius that fits the data."""
    said = problem.predict(hypothesis, z)
    radius = problem.likelihood.collapse(said.mean_height, said.mean_square_height).radius
    return problem.likelihood.predicted_depth(said.mean_height, said.mean_square_height, radius)


def added_depths(problem: Problem, task: LeftOutTask) -> np.ndarray:
    """What the species adds to the depths of each draw, fraction, shape (J, N)."""
    parameter_set = problem.parameters(task.base)
    column = columns(physical(task.draws_z[:, : len(parameter_set)], parameter_set), parameter_set)
    low, high = vmr_range(problem.system.priors, task.species)
    rng = np.random.default_rng([task.seed, name_key(task.species), 4])
    n_draws = len(task.draws_z)
    # Stratified over the prior, in random order: the draws come in none that the abundances could follow.
    share = (rng.permutation(n_draws) + rng.random(n_draws)) / n_draws
    column[f"log10_vmr_{task.species}"] = low + (high - low) * share
    with_it = Hypothesis("with", (*task.base.species, task.species))
    one = np.ones(n_draws)
    without, whole = (
        problem.likelihood.predicted_depth(*problem.limb_heights(hypothesis, column, n_draws), one)
        for hypothesis in (task.base, with_it)
    )
    return whole - without
