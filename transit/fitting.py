"""Every hypothesis fitted to one problem with independent seeds, in this process or in several."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import Executor, as_completed
from dataclasses import dataclass

import numpy as np

from transit.combination import CombinedEvidence, combine_runs
from transit.evidence import SamplerSettings
from transit.fit_records import line_fit, sampled_fit
from transit.hypotheses import Hypothesis
from transit.problem import FitTask, Problem, run_fit
from transit.records import Fit

Progress = Callable[[int, int, str], None]

RERUN_ROUNDS = 2  # how often fits that have not converged are made again (never in a quick run)


@dataclass(frozen=True, eq=False)
class Fits:
    """Fits of one set of hypotheses, nulls first, and what the samplers found, by name."""

    fits: tuple[Fit, ...]
    combined: dict[str, CombinedEvidence]

    def fit(self, name: str) -> Fit:
        """Return the fit of a hypothesis."""
        return next(fit for fit in self.fits if fit.name == name)

    def only(self, wanted: Callable[[str], bool]) -> Fits:
        """Those whose name is wanted."""
        return Fits(
            tuple(fit for fit in self.fits if wanted(fit.name)),
            {name: c for name, c in self.combined.items() if wanted(name)},
        )

    def joined(self, other: Fits) -> Fits:
        """These and others."""
        return Fits(self.fits + other.fits, self.combined | other.combined)


@dataclass(frozen=True, eq=False)
class Plan:
    """How hypotheses are fitted: seeds, settings, place, and who is told how far it is."""

    seed: int
    n_runs: int
    settings: SamplerSettings
    executor: Executor | None = None
    progress: Progress | None = None


def line_names(problem: Problem) -> tuple[str, ...]:
    """Closed-form nulls; with a slope in every hypothesis alike, `slope` would be `flat` again."""
    return ("flat",) if problem.nuisances.slope else ("flat", "slope")


def fit_hypotheses(
    problem: Problem, hypotheses: Sequence[Hypothesis], plan: Plan, inflate: bool = False
) -> Fits:
    """Fit the nulls in closed form and every hypothesis by sampling, in a fixed order.

    Parameters
    ----------
    problem : Problem
    hypotheses : sequence of Hypothesis
    plan : Plan
    inflate : bool
        Whether the errors may grow.

    Returns
    -------
    Fits
    """
    runs = _first_runs(problem, hypotheses, plan, inflate)
    spent = {name: sum(run.likelihood_calls for run in own) for name, own in runs.items()}
    reruns = dict.fromkeys(runs, 0)
    for round_number in range(1, (RERUN_ROUNDS if plan.n_runs > 1 else 0) + 1):
        tasks = _reruns(problem, hypotheses, runs, plan, round_number, inflate)
        if not tasks:
            break
        for task, run in _run_with_progress(tasks, plan, inflate, "again "):
            name = task.hypothesis.name
            place = task.run % plan.n_runs
            if _is_better(run, runs[name][place]):
                runs[name][place] = run
            spent[name] += run.likelihood_calls
            reruns[name] += 1
    fits = [line_fit(problem, name, plan.seed, inflate) for name in line_names(problem)]
    combined = {}
    for hypothesis in hypotheses:
        name = hypothesis.name
        combined[name] = combine_runs(runs[name], len(problem.parameters(hypothesis, inflate)))
        combined[name].sampling["likelihood_calls"] = spent[name]
        combined[name].sampling["reruns"] = reruns[name]
        fits.append(sampled_fit(problem, hypothesis, combined[name], plan.seed, inflate))
    return Fits(tuple(fits), combined)


def _first_runs(problem, hypotheses, plan, inflate) -> dict[str, list]:
    """Runs of every hypothesis with every independent seed, by name."""
    # The largest models first: they take longest, so the processes finish together.
    tasks = sorted(
        (
            FitTask(problem, hypothesis, plan.seed, run, plan.settings, inflate)
            for hypothesis in hypotheses
            for run in range(plan.n_runs)
        ),
        key=lambda task: -len(problem.parameters(task.hypothesis)),
    )
    runs = {hypothesis.name: [None] * plan.n_runs for hypothesis in hypotheses}
    for task, run in _run_with_progress(tasks, plan, inflate):
        runs[task.hypothesis.name][task.run] = run
    return runs


def _is_better(run, old) -> bool:
    """Whether a run made again takes the place of the old one: by its weights, never by what it finds.

    An old run without a flag was made again because it disagrees with another seed: the new one, which starts with
    the best points of both, always replaces it.
    """
    return not old.flags or len(run.flags) < len(old.flags) or run.ess > old.ess


def _reruns(problem, hypotheses, runs, plan, round_number, inflate) -> list[FitTask]:
    """Tasks for the runs of hypotheses that have not converged: fresh draws, knowing the best points of all runs.

    A run with a flag is made again; where only the seeds disagree, the one with less evidence is, because a run
    that misses a region finds too little.
    """
    tasks = []
    for hypothesis in hypotheses:
        own = runs[hypothesis.name]
        if combine_runs(own, len(problem.parameters(hypothesis, inflate))).sampling["converged"]:
            continue
        doubtful = [k for k, run in enumerate(own) if run.flags]
        if not doubtful:
            doubtful = [int(np.argmin([run.ln_evidence for run in own]))]
        starts = np.stack([run.best_z for run in own])
        first = round_number * plan.n_runs
        tasks += [
            FitTask(problem, hypothesis, plan.seed, first + k, plan.settings, inflate, starts)
            for k in doubtful
        ]
    return tasks


def _run_with_progress(tasks, plan, inflate, prefix=""):
    """Pairs of task and run as they come, telling how far things are."""
    for done, (task, run) in enumerate(run_tasks(run_fit, tasks, plan.executor), start=1):
        if plan.progress is not None:
            label = prefix + task.hypothesis.name + (", inflated errors" if inflate else "")
            plan.progress(done, len(tasks), label)
        yield task, run


def run_tasks(function, tasks, executor: Executor | None):
    """Pairs of task and result as they come; in this process when there is no executor."""
    if executor is None:
        for task in tasks:
            yield task, function(task)
        return
    futures = {executor.submit(function, task): task for task in tasks}
    for future in as_completed(futures):
        yield futures[future], future.result()
