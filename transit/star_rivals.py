"""The star as a rival: its spots and faculae alone, and on the shoulders of absorbers."""

from __future__ import annotations

import zlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from transit.bases import fitted_base
from transit.combination import CombinedEvidence, combine_runs
from transit.evidence import EvidenceRun, SamplerSettings, estimate_evidence
from transit.fitting import Fits, Plan, run_tasks
from transit.hypotheses import Hypothesis, columns, physical
from transit.linearised import LinearBase
from transit.problem import Problem
from transit.records import Rival

STAR_PHRASE = "unocculted spots or faculae of the star"
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


def star_rival(star: Fits, grown: Fits | None) -> Rival:
    """The star alone, on a planet of one depth."""
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


@dataclass(frozen=True, eq=False)
class StarTask:
    """The star's spots and faculae on the best fit of the hypothesis `base`, linear about it."""

    problem: Problem
    base: LinearBase
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

    name = f"star on {task.base.name}"
    stream = np.random.SeedSequence([task.seed, zlib.crc32(name.encode()), task.run])
    return estimate_evidence(ln_likelihood, len(parameter_set), stream, task.settings)


def stars_on(
    problem: Problem, names: Sequence[str], quoted: Fits, grown: Fits | None, plan: Plan
) -> dict[str, Rival]:
    """Star on the shoulders of fitted hypotheses.

    Parameters
    ----------
    problem : Problem
    names : sequence of str
        Hypotheses.
    quoted, grown : Fits
    plan : Plan

    Returns
    -------
    dict of Rival by the name of the hypothesis; empty when nothing is known of the star
    """
    if problem.star is None:
        return {}
    tasks, places = [], []
    for name in dict.fromkeys(names):
        for fits in (quoted, grown):
            if fits is not None:
                base = fitted_base(problem, fits.fit(name), fits.combined)
                tasks += [
                    StarTask(problem, base, plan.seed, run, plan.settings) for run in range(plan.n_runs)
                ]
                places += [(name, fits is grown)] * plan.n_runs
    runs: dict[tuple[str, bool], list[EvidenceRun]] = {}
    found = {id(task): run for task, run in run_tasks(run_star, tasks, plan.executor)}
    for task, place in zip(tasks, places, strict=True):
        runs.setdefault(place, []).append(found[id(task)])
    n_dim = len(problem.parameters(STAR))
    gains = {place: combine_runs(own, n_dim) for place, own in runs.items()}
    return {name: _star_on(name, quoted, grown, gains) for name in dict.fromkeys(names)}


def _star_on(
    name: str, quoted: Fits, grown: Fits | None, gains: dict[tuple[str, bool], CombinedEvidence]
) -> Rival:
    evidences = []
    for fits, gain in ((quoted, gains[name, False]), (grown, gains.get((name, True)))):
        if fits is None:
            evidences.append((None, None))
            continue
        fit = fits.fit(name)
        err = float(np.hypot(fit.ln_evidence_err, gain.ln_evidence_err))
        evidences.append((fit.ln_evidence + gain.ln_evidence, err))
    return Rival("star", name, None, *evidences[0], STAR_PHRASE, {}, *evidences[1])
