"""Rivals of the absorbers for one spectrum: the star, a detector step, a bump anywhere, a single bad bin."""

from __future__ import annotations

import zlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import logsumexp

from transit.bases import atmosphere_base, line_base
from transit.combination import CombinedEvidence, combine_runs
from transit.evidence import EvidenceRun, SamplerSettings, estimate_evidence
from transit.fitting import Fits, Plan, run_tasks
from transit.hypotheses import Hypothesis, columns, physical
from transit.linearised import LinearBase
from transit.opacity import load_table
from transit.problem import Problem, share_model
from transit.records import Fit, Rival
from transit.rivals import bump_rival, one_bin_rival, rivals_on, step_rival

STAR_PHRASE = "unocculted spots or faculae of the star"
# Error factors integrated over, in posterior standard deviations of the fit's: how far they reach, and how far they are
# apart in the mean. A rival of the nulls may do with far smaller errors than they, one on the shoulders of absorbers
# with much the same.
NULL_REACH, ABSORBER_REACH = 8.0, 4.0
FACTOR_STEP, MOST_FACTORS = 1.3, 60
STAR_MARGIN = 10.0
STAR = Hypothesis("star", (), atmosphere=False, star=True)


def star_with_absorbers(problem: Problem) -> Hypothesis:
    """Inhomogeneous star and an atmosphere with every species together."""
    species = problem.species
    full = species[0] if len(species) == 1 else "all"
    return Hypothesis(f"star+{full}", species, star=True)


def star_is_close(quoted: Fits, star: Fits) -> bool:
    """Whether the star comes near the best hypothesis with species, so that both together have to be weighed.

    Elsewhere that costly fit could change no word: it only strengthens what already beats the star.
    """
    if not star.fits:
        return False
    best = max(fit.ln_evidence for fit in quoted.fits if fit.species)
    return best - star.fit("star").ln_evidence < STAR_MARGIN


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
        of two or more species: on the best fit of all others.
    """
    rivals = []
    if star.fits:
        rivals.append(_star_rival(star, star_grown))
    nulls = tuple(fit.name for fit in quoted.fits if not fit.species)
    tasks = [ClosedFormTask(problem, "null", None, _only(quoted, nulls), _only(grown, nulls))]
    if len(problem.species) > 1:
        for species in problem.species:
            names = (without(problem.species, species),)
            fits = _only(quoted, names), _only(grown, names)
            tasks.append(ClosedFormTask(problem, f"all-{species}", species, *fits))
    found = {task.base: own for task, own in run_tasks(run_closed_form, tasks, plan.executor)}
    for task in tasks:  # in the order of the tasks, whichever was done first
        rivals += found[task.base]
    if len(problem.species) > 1:
        rivals += _stars_on_absorbers(problem, quoted, grown, plan)
    return tuple(rivals)


def _only(fits: Fits | None, names: Sequence[str]) -> Fits | None:
    """Some of the fits, so that tasks stay small."""
    return None if fits is None else fits.only(lambda name: name in names)


def without(species: Sequence[str], left_out: str) -> str:
    """Name of the fit with all species but one; with two it is the other one's own."""
    if len(species) == 2:
        return next(x for x in species if x != left_out)
    return f"all-{left_out}"


def _star_rival(star: Fits, grown: Fits | None) -> Rival:
    fit = star.fit("star")
    inflated = grown.fit("star") if grown else None
    return Rival(
        name="star",
        base="null",
        species=None,
        ln_evidence=fit.ln_evidence,
        ln_evidence_err=fit.ln_evidence_err,
        phrase=STAR_PHRASE,
        parameters=dict(fit.parameters),
        ln_evidence_inflated=inflated.ln_evidence if inflated else None,
        ln_evidence_inflated_err=inflated.ln_evidence_err if inflated else None,
        chi2=fit.chi2,
    )


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
    ar1 = _median(own[0], "ar1_coefficient", 0.0)
    factors, weights = _factor_nodes(own, NULL_REACH if task.species is None else ABSORBER_REACH)
    by_rival: dict[str, list] = {}
    ln_profile = []
    for factor in factors:
        bases = [_base(problem, fit, fits, factor, ar1) for fit in own]
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


def _median(fit: Fit, name: str, default: float) -> float:
    interval = fit.parameters.get(name)
    return default if interval is None else interval.median


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


def _base(problem: Problem, fit: Fit, fits: Fits, factor: float, ar1: float) -> LinearBase:
    if fit.name not in fits.combined:
        return line_base(problem, fit.name, fit.ln_evidence, factor, ar1)
    hypothesis = Hypothesis(fit.name, fit.species)
    best_z = fits.combined[fit.name].best_z
    return atmosphere_base(problem, hypothesis, best_z, fit.ln_evidence, factor, ar1)


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


# --- the star on the shoulders of absorbers -----------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class StarTask:
    """The star's spots and faculae on the best fit without one species, linear about it."""

    problem: Problem
    base: LinearBase
    species: str
    seed: int
    run: int
    settings: SamplerSettings


def run_star(task: StarTask) -> EvidenceRun:
    """Gain of the star over a base hypothesis: a pure function of the task."""
    parameter_set = task.problem.parameters(STAR)
    data = task.base.whiten(task.problem.spectrum.depth)

    def ln_likelihood(z):
        column = columns(physical(z, parameter_set), parameter_set)
        factor = task.problem.star_factor(column)
        template = task.base.whiten_template(task.base.depth * (factor - 1))
        return template @ data - 0.5 * np.einsum("wm,wm->w", template, template)

    name = f"star on all-{task.species}"
    stream = np.random.SeedSequence([task.seed, zlib.crc32(name.encode()), task.run])
    return estimate_evidence(ln_likelihood, len(parameter_set), stream, task.settings)


def _stars_on_absorbers(problem: Problem, quoted: Fits, grown: Fits | None, plan: Plan) -> list[Rival]:
    """Star on the best fit without each species that the other rivals leave standing."""
    if problem.star is None:
        return []
    tasks = []
    for species in problem.species:
        if _left_out(problem.species, species, quoted) < problem.system.thresholds.hint_ln_b:
            continue
        for fits in (quoted, grown):
            if fits is None:
                continue
            fit = fits.fit(without(problem.species, species))
            factor = _median(fit, "error_factor", 1.0)
            base = _base(problem, fit, fits, factor, _median(fit, "ar1_coefficient", 0.0))
            tasks += [
                StarTask(problem, base, species, plan.seed, run, plan.settings) for run in range(plan.n_runs)
            ]
    runs: dict[str, dict[int, list[EvidenceRun]]] = {}
    found = {id(task): run for task, run in run_tasks(run_star, tasks, plan.executor)}
    for task in tasks:
        by_base = runs.setdefault(task.species, {})
        by_base.setdefault(id(task.base), []).append(found[id(task)])
    out = []
    for species, by_base in runs.items():
        gains = [combine_runs(own, len(problem.parameters(STAR))) for own in by_base.values()]
        out.append(_star_on(problem, species, quoted, grown, gains))
    return out


def _left_out(species, left_out, fits: Fits) -> float:
    return fits.fit("all").ln_evidence - fits.fit(without(species, left_out)).ln_evidence


def _star_on(problem, species, quoted, grown, gains: Sequence[CombinedEvidence]) -> Rival:
    base = quoted.fit(without(problem.species, species))
    inflated = (None, None)
    if grown is not None:
        larger = grown.fit(base.name)
        inflated = (
            larger.ln_evidence + gains[1].ln_evidence,
            float(np.hypot(larger.ln_evidence_err, gains[1].ln_evidence_err)),
        )
    return Rival(
        name="star",
        base=f"all-{species}",
        species=species,
        ln_evidence=base.ln_evidence + gains[0].ln_evidence,
        ln_evidence_err=float(np.hypot(base.ln_evidence_err, gains[0].ln_evidence_err)),
        phrase=STAR_PHRASE,
        ln_evidence_inflated=inflated[0],
        ln_evidence_inflated_err=inflated[1],
    )
