"""The main job: fit every hypothesis to one spectrum, compare them, and judge."""

from __future__ import annotations

import multiprocessing
import signal
import time
from collections.abc import Callable
from concurrent.futures import Executor, ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from dataclasses import asdict, replace
from itertools import pairwise
from pathlib import Path

import numpy as np
from scipy.special import chdtrc

from transit.atmosphere import background_molecular_weight, scale_height_depth, scale_height_m
from transit.errors import SettingError, WorkerError
from transit.evidence import CombinedEvidence, SamplerSettings, combine_runs
from transit.hypotheses import Hypothesis, limb_state, physical, sampled_hypotheses
from transit.linear import linear_posterior
from transit.opacity import load_table
from transit.problem import FitTask, Problem, run_fit, share_model
from transit.records import CheckResult, DepthSpectrum, Fit, Interval, System, offset_name
from transit.species import Selection, select_species
from transit.units import JUPITER_RADIUS_M, PPM
from transit.verdict import best_null, build_comparisons, judge

Progress = Callable[[int, int, str], None]

POOR_FIT_P = (
    0.001  # below this the best hypothesis does not fit, and all are fitted again with inflated errors
)
RERUN_ROUNDS = 2  # how often fits that have not converged are made again (never in a quick run)
MODEL_DRAWS = 300
FINE_RESOLVING_POWER = 120
FEWEST_BINS = 3


def check_spectrum(
    spectrum: DepthSpectrum,
    system: System,
    *,
    species: tuple[str, ...] | None = None,
    seed: int = 1,
    workers: int = 2,
    quick: bool = False,
    tables: Path | None = None,
    progress: Progress | None = None,
    executor: Executor | None = None,
) -> CheckResult:
    """Say whether a spectrum holds a feature, and which species explains it.

    Parameters
    ----------
    spectrum : DepthSpectrum
    system : System
    species : tuple of str, optional
        Species to ask about; by default those with trusted bands inside the spectrum.
    seed : int
        The same seed gives the same numbers, whatever the number of workers.
    workers : int
        Processes to fit in; 1 fits in this process.
    quick : bool
        One rough fit in place of two thorough ones.
    tables : Path, optional
        Folder of opacity tables in place of the shipped ones.
    progress : callable, optional
        Called with (fits done, fits in all, what was done).
    executor : concurrent.futures.Executor, optional
        Where to run the fits, in place of `workers` processes.

    Returns
    -------
    CheckResult

    Raises
    ------
    SettingError
        If a species is unknown, the priors cannot hold, or nothing can be tested.
    WorkerError
        If a worker process died.
    OpacityTableError
        If a table is missing or altered.
    """
    clock = {"start": time.perf_counter()}
    if spectrum.n_bins < FEWEST_BINS:
        raise SettingError(f"The spectrum has {spectrum.n_bins} bins; at least {FEWEST_BINS} are needed.")
    selection = select_species(spectrum, system, species, tables)
    if not selection.species:
        raise SettingError(_nothing_to_test(selection))
    problem = share_model(Problem(spectrum, system, selection.species, selection.temperature_range_k, tables))
    clock["prepared"] = time.perf_counter()
    settings = SamplerSettings.quick() if quick else SamplerSettings.standard()
    n_runs = 1 if quick else 2
    hypotheses = sampled_hypotheses(selection.species)

    own_pool = None
    if executor is None and workers > 1:
        executor = own_pool = ProcessPoolExecutor(workers, initializer=_leave_quietly)
    try:
        fits = _fit_all(problem, hypotheses, seed, n_runs, settings, False, executor, progress)
        clock["fitted"] = time.perf_counter()
        inflated: tuple[Fit, ...] = ()
        if _best(fits).p_chi2 < POOR_FIT_P:
            inflated = _fit_all(problem, hypotheses, seed, n_runs, settings, True, executor, progress)
            clock["inflated"] = time.perf_counter()
    except BrokenProcessPool as error:
        raise WorkerError(
            "A worker process died while fitting, perhaps for want of memory. Run again with --workers 1."
        ) from error
    except KeyboardInterrupt:
        for child in multiprocessing.active_children():
            child.terminate()
        raise
    finally:
        if own_pool is not None:
            own_pool.shutdown(cancel_futures=True)

    comparisons = build_comparisons(fits, inflated, selection.species)
    verdict = judge(comparisons, selection.species, selection.untested, fits, inflated)
    fine_um, fits = _with_fine_models(problem, hypotheses, fits)
    height = scale_height_m(
        system.equilibrium_temperature_k, background_molecular_weight(system.background), problem.gravity
    )
    stages = list(clock)
    return CheckResult(
        spectrum=spectrum,
        system=system,
        settings=_settings(problem, selection, seed, quick),
        fits=fits,
        inflated=inflated,
        comparisons=comparisons,
        verdict=verdict,
        scale_height_km=height / 1e3,
        scale_height_ppm=scale_height_depth(problem.reference_radius_m, height, system.star_radius_rsun)
        / PPM,
        fine_wavelength_um=fine_um,
        bands_um={
            name: tuple((low, high) for low, high in load_table(name, tables).bands_um)
            for name in selection.species
        },
        warnings=selection.notes + _warnings(problem, fits, bool(inflated)),
        timing={b: clock[b] - clock[a] for a, b in pairwise(stages)},
    )


def _leave_quietly() -> None:
    """Let an interrupt end a worker without a traceback; the parent process reports it."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def _nothing_to_test(selection: Selection) -> str:
    if selection.untested:
        return "No species can be tested. " + " ".join(selection.untested.values())
    return (
        "No species has a trusted band inside the spectrum at the planet's temperature; name one with --species to "
        "learn why."
    )


def _best(fits: tuple[Fit, ...]) -> Fit:
    return max(fits, key=lambda fit: fit.ln_evidence)


# --- fitting -----------------------------------------------------------------------------------------------


def _fit_all(problem, hypotheses, seed, n_runs, settings, inflate, executor, progress) -> tuple[Fit, ...]:
    """Fits of the nulls and of every sampled hypothesis, in a fixed order."""
    runs = _first_runs(problem, hypotheses, seed, n_runs, settings, inflate, executor, progress)
    spent = {name: sum(run.likelihood_calls for run in own) for name, own in runs.items()}
    reruns = dict.fromkeys(runs, 0)
    for round_number in range(1, (RERUN_ROUNDS if n_runs > 1 else 0) + 1):
        tasks = _reruns(problem, hypotheses, runs, seed, round_number * n_runs, settings, inflate)
        if not tasks:
            break
        for task, run in _run_with_progress(tasks, executor, progress, inflate, "again "):
            name = task.hypothesis.name
            place = task.run % n_runs
            if _is_better(run, runs[name][place]):
                runs[name][place] = run
            spent[name] += run.likelihood_calls
            reruns[name] += 1
    fits = [_linear_fit(problem, name, seed, inflate) for name in ("flat", "slope")]
    for hypothesis in hypotheses:
        n_dim = len(problem.parameters(hypothesis, inflate))
        combined = combine_runs(runs[hypothesis.name], n_dim)
        combined.sampling["likelihood_calls"] = spent[hypothesis.name]
        combined.sampling["reruns"] = reruns[hypothesis.name]
        fits.append(_sampled_fit(problem, hypothesis, combined, seed, inflate))
    return tuple(fits)


def _first_runs(problem, hypotheses, seed, n_runs, settings, inflate, executor, progress) -> dict[str, list]:
    """Runs of every hypothesis with every independent seed, by name."""
    # The largest models first: they take longest, so the processes finish together.
    tasks = sorted(
        (
            FitTask(problem, hypothesis, seed, run, settings, inflate)
            for hypothesis in hypotheses
            for run in range(n_runs)
        ),
        key=lambda task: -len(task.hypothesis.species),
    )
    runs = {hypothesis.name: [None] * n_runs for hypothesis in hypotheses}
    for task, run in _run_with_progress(tasks, executor, progress, inflate):
        runs[task.hypothesis.name][task.run] = run
    return runs


def _is_better(run, old) -> bool:
    """Whether a run made again takes the place of the old one: by its weights, never by what it finds.

    An old run without a flag was made again because it disagrees with another seed: the new one, which starts with
    the best points of both, always replaces it.
    """
    return not old.flags or len(run.flags) < len(old.flags) or run.ess > old.ess


def _reruns(problem, hypotheses, runs, seed, first_run, settings, inflate) -> list[FitTask]:
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
        tasks += [
            FitTask(problem, hypothesis, seed, first_run + k, settings, inflate, starts) for k in doubtful
        ]
    return tasks


def _run_with_progress(tasks, executor, progress, inflate, prefix=""):
    """Pairs of task and run as they come, telling how far things are."""
    for done, (task, run) in enumerate(_run(tasks, executor), start=1):
        if progress is not None:
            label = prefix + task.hypothesis.name + (", inflated errors" if inflate else "")
            progress(done, len(tasks), label)
        yield task, run


def _run(tasks, executor):
    if executor is None:
        for task in tasks:
            yield task, run_fit(task)
        return
    futures = {executor.submit(run_fit, task): task for task in tasks}
    for future in as_completed(futures):
        yield futures[future], future.result()


def _linear_fit(problem: Problem, name: str, seed: int, inflate: bool) -> Fit:
    """Fit of a flat or sloped spectrum."""
    spectrum, priors = problem.spectrum, problem.system.priors
    x = np.log(spectrum.wavelength_um)
    x = x - x.mean()
    height = scale_height_m(
        problem.system.equilibrium_temperature_k,
        background_molecular_weight(problem.system.background),
        problem.gravity,
    )
    one_height = scale_height_depth(problem.reference_radius_m, height, problem.system.star_radius_rsun)
    posterior = linear_posterior(
        problem.likelihood,
        x if name == "slope" else None,
        priors.slope_scale_heights * one_height,
        priors.error_factor if inflate else None,
        np.random.default_rng([seed, 7 if name == "slope" else 3]),
    )
    zeros = np.zeros((len(posterior.radius), spectrum.n_bins))
    extra = posterior.slope[:, None] * x
    depth = problem.likelihood.predicted_depth(zeros, zeros, posterior.radius, extra)
    columns = {"reference_radius_rjup": posterior.radius * problem.reference_radius_m / JUPITER_RADIUS_M}
    columns["level_ppm"] = problem.median_depth * posterior.radius**2 / PPM
    units = {"reference_radius_rjup": "Jupiter radii", "level_ppm": "ppm"}
    n_free = 1
    if name == "slope":
        columns["slope_ppm_per_efold"] = posterior.slope / PPM
        units["slope_ppm_per_efold"] = "ppm per e-fold of wavelength"
        n_free += 1
    if inflate:
        columns["error_factor"] = posterior.error_factor
        units["error_factor"] = ""
        n_free += 1
    few = slice(MODEL_DRAWS)
    offset_depth = problem.likelihood.with_offsets(depth[few], posterior.error_factor[few])
    _add_offsets(problem, columns, units, depth, posterior.error_factor)
    return _assemble(
        problem, name, (), n_free, posterior.ln_evidence, 0.0, posterior.chi2, columns, units, offset_depth,
        {"steps": 0, "walkers": 0, "autocorr_steps": 0.0, "ess": float(len(posterior.radius)),
         "likelihood_calls": 0, "flags": [], "converged": True},
    )  # fmt: skip


def _sampled_fit(
    problem: Problem, hypothesis: Hypothesis, combined: CombinedEvidence, seed: int, inflate: bool
) -> Fit:
    """Fit of an atmosphere from its combined runs."""
    parameter_set = problem.parameters(hypothesis, inflate)
    rng = np.random.default_rng([seed, 11])
    best = problem.heights(hypothesis, combined.best_z[None, :], inflate)
    chi2 = float(problem.likelihood.collapse(best[0], best[1], 1.0).chi2[0])
    mean, square, factor = problem.heights(hypothesis, combined.draws_z, inflate)
    collapsed = problem.likelihood.collapse(mean, square, factor)
    radius = collapsed.radius + collapsed.radius_err * rng.standard_normal(len(mean))
    values = physical(combined.draws_z, parameter_set)
    columns = {p.name: values[:, k] for k, p in enumerate(parameter_set)}
    units = {p.name: p.unit for p in parameter_set}
    if inflate:
        columns["error_factor"] = np.exp(columns.pop("ln_error_factor"))
        units["error_factor"] = ""
    columns["reference_radius_rjup"] = radius * problem.reference_radius_m / JUPITER_RADIUS_M
    units["reference_radius_rjup"] = "Jupiter radii at 10 mbar"
    factor = np.broadcast_to(factor, len(mean))
    few = slice(MODEL_DRAWS)
    depth = problem.likelihood.predicted_depth(mean, square, radius)
    _add_offsets(problem, columns, units, depth, factor)
    depth = problem.likelihood.with_offsets(depth[few], factor[few])
    return _assemble(
        problem, hypothesis.name, hypothesis.species, len(parameter_set) + 1, combined.ln_evidence,
        combined.ln_evidence_err, chi2, columns, units, depth, combined.sampling,
    )  # fmt: skip


def _add_offsets(problem: Problem, columns: dict, units: dict, depth: np.ndarray, factor: np.ndarray) -> None:
    """Add the offset of each segment after the first, integrated analytically in the fit, to the parameters."""
    names = problem.spectrum.segment_names[1:]
    for name, offset in zip(names, problem.likelihood.offsets(depth, factor).T, strict=False):
        columns[offset_name(name)] = offset / PPM
        units[offset_name(name)] = "ppm, over the first segment"


def _assemble(problem, name, species, n_free, ln_z, ln_z_err, chi2, columns, units, depth, sampling) -> Fit:
    n = problem.spectrum.n_bins
    dof = n - n_free
    lower, median, upper = np.percentile(depth, [16, 50, 84], axis=0)
    quantiles = {key: np.percentile(value, [50, 16, 84]) for key, value in columns.items()}
    return Fit(
        name=name,
        species=species,
        n_free=n_free,
        ln_evidence=float(ln_z),
        ln_evidence_err=float(ln_z_err),
        chi2=chi2,
        dof=dof,
        p_chi2=float(chdtrc(dof, chi2)) if dof > 0 else float("nan"),
        bic=chi2 + n_free * np.log(n),
        parameters={key: Interval(*(float(v) for v in q), unit=units[key]) for key, q in quantiles.items()},
        model_lower=lower,
        model_median=median,
        model_upper=upper,
        draws=np.column_stack(list(columns.values())),
        draw_names=tuple(columns),
        sampling=sampling,
    )


# --- what surrounds the fits -------------------------------------------------------------------------------


def _with_fine_models(problem: Problem, hypotheses, fits: tuple[Fit, ...]):
    """Models of the best null and the two best hypotheses with species on a dense grid, for drawing."""
    low = (problem.spectrum.wavelength_um - problem.spectrum.half_width_um).min()
    high = (problem.spectrum.wavelength_um + problem.spectrum.half_width_um).max()
    count = int(np.clip(np.log(high / low) * FINE_RESOLVING_POWER, 60, 400))
    edges = np.geomspace(low, high, count + 1)
    fine_um = np.sqrt(edges[1:] * edges[:-1])
    with_species = sorted((fit for fit in fits if fit.species), key=lambda fit: -fit.ln_evidence)
    wanted = {fit.name for fit in (best_null(fits), *with_species[:2])}
    by_name = {hypothesis.name: hypothesis for hypothesis in hypotheses}
    model = problem.model_on(fine_um, 0.5 * np.diff(edges)) if wanted & set(by_name) else None
    out = []
    for fit in fits:
        if fit.name in wanted:
            depth = _fine_depth(problem, by_name.get(fit.name), fit, fine_um, model)
            lower, median, upper = np.percentile(depth, [16, 50, 84], axis=0)
            fit = replace(fit, fine_lower=lower, fine_median=median, fine_upper=upper)
        out.append(fit)
    return fine_um, tuple(out)


def _fine_depth(problem, hypothesis, fit, fine_um, model):
    column = {name: fit.draws[:MODEL_DRAWS, k] for k, name in enumerate(fit.draw_names)}
    radius = column["reference_radius_rjup"] * JUPITER_RADIUS_M / problem.reference_radius_m
    if hypothesis is None:
        zeros = np.zeros((len(radius), len(fine_um)))
        x = np.log(fine_um) - np.log(problem.spectrum.wavelength_um).mean()
        extra = column["slope_ppm_per_efold"][:, None] * PPM * x if "slope_ppm_per_efold" in column else None
        return problem.likelihood.predicted_depth(zeros, zeros, radius, extra)
    parameter_set = problem.parameters(hypothesis)
    values = np.column_stack([column[p.name] for p in parameter_set])
    state, _ = limb_state(values, parameter_set, hypothesis, problem.system.background)
    use = np.array([problem.species.index(name) for name in hypothesis.species], int)
    mean, square = model.heights(state, use)
    return problem.likelihood.predicted_depth(mean, square, radius)


def _settings(problem: Problem, selection: Selection, seed: int, quick: bool) -> dict:
    priors = asdict(problem.system.priors)
    priors["temperature_k"] = list(problem.temperature_range_k)
    tables = {}
    for name in problem.species:
        header = load_table(name, problem.tables).header
        tables[name] = {key: header[key] for key in ("trusted", "sources", "method", "values_sha256")}
        tables[name].update(selection.coverage[name])
    return {
        "seed": seed,
        "species": list(problem.species),
        "species_reasons": selection.reasons,
        "untested": selection.untested,
        "priors": priors,
        "quick": quick,
        "tables": tables,
        "gravity_m_s2": problem.gravity,
        "reference_pressure_bar": 0.01,
        "n_fine_points": problem.model.grid.n_points,
    }


def _warnings(problem: Problem, fits: tuple[Fit, ...], inflated: bool) -> tuple[str, ...]:
    out = []
    if problem.model.grid.too_fine:
        out.append(
            f"{problem.model.grid.too_fine} bins are narrower than the bands of the opacity tables "
            "(resolving power 400): features inside them cannot be told."
        )
    best = _best(fits)
    if inflated:
        out.append(
            f"The best hypothesis ({best.name}) does not fit the quoted errors (p = {best.p_chi2:.1g}): all were "
            "fitted again with free error inflation, and words follow the smaller ln B."
        )
    radius_ratio = problem.reference_radius_m / (problem.system.planet_radius_rjup * JUPITER_RADIUS_M)
    if abs(radius_ratio - 1) > 0.05:
        out.append(
            f"The measured depth gives {radius_ratio:.2f} times the radius of the system file; the measured one is "
            "used."
        )
    return tuple(out)
