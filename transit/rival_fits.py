"""Rivals of the absorbers for one spectrum: the star, a detector step, a bump anywhere, a single bad bin."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import logsumexp

from transit.bases import fitted_base, median_of
from transit.fitting import Fits, Plan, run_tasks
from transit.linearised import LinearBase
from transit.opacity import load_table
from transit.problem import Problem, share_model
from transit.records import Fit, Rival
from transit.rivals import bump_rival, one_bin_rival, rivals_on, step_rival
from transit.star_rivals import star_rival, stars_on

# Error factors integrated over, in posterior standard deviations of the fit's: how far they reach, and how far they are
# apart in the mean. A rival of the nulls may do with far smaller errors than they, one on the shoulders of absorbers
# with much the same.
NULL_REACH, ABSORBER_REACH = 8.0, 4.0
FACTOR_STEP, MOST_FACTORS = 1.3, 60


def build_rivals(
    problem: Problem,
    quoted: Fits,
    grown: Fits | None,
    star: Fits,
    star_grown: Fits | None,
    plan: Plan,
) -> tuple[Rival, ...]:
    """Every rival of the absorbers, on the nulls and on the best fit without each species.

    Parameters
    ----------
    problem : Problem
    quoted : Fits
        Nulls and hypotheses with species.
    grown : Fits or None
        The same with inflated errors, where the quoted ones did not fit.
    star, star_grown : Fits
        Hypotheses with an inhomogeneous star; empty when it is not known.
    plan : Plan
        Seed and place of the fits of the star on the shoulders of absorbers.

    Returns
    -------
    tuple of Rival
        With base "null": mean evidence over the nulls as shoulders, each equally likely. With base "all-X", for each
        of two or more species: on the best fit of all others. With base "all" (or the single species): beside the
        absorbers, for what else is wrong with a spectrum must not count against them.
    """
    rivals = []
    if star.fits:
        rivals.append(star_rival(star, star_grown))
    species = problem.species
    nulls = tuple(fit.name for fit in quoted.fits if not fit.species)
    full = species[0] if len(species) == 1 else "all"
    frames = [("null", None, nulls), (full, None, (full,))]
    if len(species) > 1:
        frames += [(f"all-{x}", x, (without(species, x),)) for x in species]
    tasks = [
        ClosedFormTask(problem, base, x, _only(quoted, names), _only(grown, names))
        for base, x, names in frames
    ]
    found = {task.base: own for task, own in run_tasks(run_closed_form, tasks, plan.executor)}
    for task in tasks:  # in the order of the tasks, whichever was done first
        rivals += found[task.base]
    return tuple(rivals) + _stars(problem, full, quoted, grown, plan)


def _stars(problem: Problem, full: str, quoted: Fits, grown: Fits | None, plan: Plan) -> tuple[Rival, ...]:
    """Star beside all species, and on the fit without each species that may stand."""
    species = problem.species
    least = problem.system.thresholds.hint_ln_b
    standing = []
    if len(species) > 1:
        all_ln_z = quoted.fit("all").ln_evidence
        standing = [x for x in species if all_ln_z - quoted.fit(without(species, x)).ln_evidence >= least]
    by_name = stars_on(problem, (full, *(without(species, x) for x in standing)), quoted, grown, plan)
    if not by_name:
        return ()
    on_rest = [replace(by_name[without(species, x)], base=f"all-{x}", species=x) for x in standing]
    return (by_name[full], *on_rest)


def _only(fits: Fits | None, names: Sequence[str]) -> Fits | None:
    """Some of the fits, so that tasks stay small."""
    return None if fits is None else fits.only(lambda name: name in names)


def without(species: Sequence[str], left_out: str) -> str:
    """Name of the fit with all species but one; with two it is the other one's own."""
    if len(species) == 2:
        return next(x for x in species if x != left_out)
    return f"all-{left_out}"


# --- closed forms -------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class ClosedFormTask:
    """Step, bump and bad bin on the fits given, which are equally likely shoulders."""

    problem: Problem
    base: str
    species: str | None
    quoted: Fits
    grown: Fits | None


def run_closed_form(task: ClosedFormTask) -> list[Rival]:
    """Rivals in closed form: a pure function of the task."""
    problem = share_model(task.problem)
    plain = _found(problem, task, task.quoted)
    inflated = _found(problem, task, task.grown) if task.grown else {}
    out = []
    for name, (ln_z, ln_z_err, best) in plain.items():
        larger = inflated.get(name, (None, None, None))
        out.append(
            Rival(
                name=name,
                base=task.base,
                species=task.species,
                ln_evidence=ln_z,
                ln_evidence_err=ln_z_err,
                phrase=best.phrase,
                parameters=dict(best.parameters),
                ln_evidence_inflated=larger[0],
                ln_evidence_inflated_err=larger[1],
                counts=_counts(problem, name, best),
                chi2=best.chi2,
            )
        )
    return out


def _counts(problem: Problem, name: str, found) -> dict[str, bool]:
    """Whether a rival counts against each species: a bump inside its bands is its own feature, unnamed."""
    if name != "bump":
        return {}
    return {x: found.outside_share(load_table(x, problem.tables).bands_um) > 0.5 for x in problem.species}


def _found(problem: Problem, task: ClosedFormTask, fits: Fits) -> dict[str, tuple]:
    """ln evidence, its error and the record of each closed-form rival, errors integrated over where they are free."""
    own = fits.fits
    err = max(fit.ln_evidence_err for fit in own)
    ar1 = median_of(own[0], "ar1_coefficient", 0.0)
    factors, weights = _factor_nodes(own, NULL_REACH if task.base == "null" else ABSORBER_REACH)
    by_rival: dict[str, list] = {}
    ln_profile = []
    for factor in factors:
        bases = [fitted_base(problem, fit, fits.combined, factor, ar1) for fit in own]
        ln_profile.append([_ln_profile(base, problem.spectrum.depth) for base in bases])
        for name, found in _each_rival(problem, bases).items():
            by_rival.setdefault(name, []).append(found)
    profile = np.array(ln_profile) + np.log(weights)[:, None]
    # Each base's evidence by factor, scaled so that its sum is the fit's own: constants and the prior cancel.
    profile = profile - logsumexp(profile, axis=0) + np.array([fit.ln_evidence for fit in own])
    out = {}
    for name, founds in by_rival.items():
        gains = np.array([[b.ln_bayes_factor for b in found.by_base] for found in founds])
        by_factor = logsumexp(profile + gains, axis=1) - np.log(len(own))
        out[name] = (float(logsumexp(by_factor)), err, founds[int(np.argmax(by_factor))])
    return out


def _factor_nodes(fits: Sequence[Fit], reach: float) -> tuple[np.ndarray, np.ndarray]:
    """Error factors and their weights: Gauss-Legendre in the logarithm, in which the prior is uniform."""
    intervals = [fit.parameters["error_factor"] for fit in fits if "error_factor" in fit.parameters]
    if not intervals:
        return np.ones(1), np.ones(1)
    errors = [0.5 * np.log(i.upper / i.lower) for i in intervals]
    medians = [np.log(i.median) for i in intervals]
    low = max(min(medians) - reach * max(errors), 0.0)
    high = max(medians) + reach * max(errors)
    count = int(np.clip(np.ceil((high - low) / (FACTOR_STEP * min(errors))), 6, MOST_FACTORS))
    nodes, weights = np.polynomial.legendre.leggauss(count)
    return np.exp(0.5 * (low + high) + 0.5 * (high - low) * nodes), weights


def _ln_profile(base: LinearBase, depth: np.ndarray) -> float:
    """ln evidence of a base up to a constant that does not depend on the error factor.

    The determinant of the whitening map is that of the covariance within what is left of the data (restricted
    likelihood: Patterson & Thompson 1971, Biometrika 58, 545).
    """
    white = base.whiten(depth)
    return float(-0.5 * white @ white + 0.5 * np.linalg.slogdet(base.transform @ base.transform.T)[1])


def _each_rival(problem: Problem, bases: Sequence[LinearBase]) -> dict:
    """Closed-form rivals averaged over bases."""
    spectrum, priors = problem.spectrum, problem.system.priors
    depth = spectrum.depth
    # A step that every hypothesis may have is no rival any more.
    steps = () if problem.nuisances.steps else problem.nuisances.step_um
    largest = priors.bump_scale_heights * problem.one_scale_height
    found = {
        "one-bin": rivals_on(bases, lambda base: one_bin_rival(base, spectrum, depth, priors.outlier_ppm)),
        "step": rivals_on(bases, lambda base: step_rival(base, spectrum, depth, steps, priors.step_ppm)),
        "bump": rivals_on(bases, lambda base: bump_rival(base, spectrum, depth, largest)),
    }
    return {name: rival for name, rival in found.items() if rival is not None}
