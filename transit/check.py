"""The main job: fit every hypothesis to one spectrum, weigh its rivals and the noise, and judge."""

from __future__ import annotations

import multiprocessing
import signal
import time
from concurrent.futures import Executor, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import asdict, dataclass, replace
from itertools import pairwise
from pathlib import Path

from transit.atmosphere import background_molecular_weight, scale_height_m
from transit.errors import SettingError, WorkerError
from transit.evidence import SamplerSettings
from transit.fit_records import with_fine_models
from transit.fitting import Fits, Plan, Progress, fit_hypotheses
from transit.hypotheses import sampled_hypotheses
from transit.nulls import false_alarms
from transit.opacity import load_table
from transit.problem import Problem, share_model
from transit.records import CheckResult, DepthSpectrum, Fit, Nuisances, Sensitivity, System
from transit.rival_fits import build_rivals
from transit.sensitivity import sensitivity as find_sensitivity
from transit.species import Selection, select_species
from transit.star import StarInBins, StarSpectra, load_star_spectra
from transit.star_rivals import STAR, star_is_close, star_with_absorbers
from transit.units import JUPITER_RADIUS_M, PPM
from transit.verdict import build_comparisons, judge

FEWEST_BINS = 3
NULL_SIMULATIONS, QUICK_NULL_SIMULATIONS = 20_000, 4_000
# Dwarfs below this temperature have log g near 5, those above near 4.5 (Pecaut & Mamajek 2013, ApJS 208, 9: masses
# and radii of the dwarf sequence).
COOL_DWARF_K = 4000.0
COOL_DWARF_LOG_G, WARM_DWARF_LOG_G = 5.0, 4.5
COOLEST_SPOT_K = 1500.0  # the shipped spectra of stars begin here


@dataclass(frozen=True, eq=False)
class Prepared:
    """A spectrum ready to be fitted, and why it is fitted with these species."""

    problem: Problem
    selection: Selection
    notes: tuple[str, ...]


def prepare(
    spectrum: DepthSpectrum,
    system: System,
    *,
    species: tuple[str, ...] | None = None,
    tables: Path | None = None,
    nuisances: Nuisances | None = None,
    star_spectra: StarSpectra | None = None,
) -> Prepared:
    """Choose the species and put spectrum, model, priors and star together.

    Parameters
    ----------
    spectrum, system, species, tables, nuisances, star_spectra
        As `check_spectrum`.

    Returns
    -------
    Prepared

    Raises
    ------
    SettingError
        If a species is unknown, the priors cannot hold, or nothing can be tested.
    InputFileError
        If the user's spectra of the star miss the bins or the temperatures.
    """
    if spectrum.n_bins < FEWEST_BINS:
        raise SettingError(f"The spectrum has {spectrum.n_bins} bins; at least {FEWEST_BINS} are needed.")
    selection = select_species(spectrum, system, species, tables)
    if not selection.species:
        raise SettingError(_nothing_to_test(selection))
    system, star, notes = _star_of(spectrum, system, star_spectra)
    problem = Problem(
        spectrum,
        system,
        selection.species,
        selection.temperature_range_k,
        tables,
        nuisances or Nuisances(),
        star,
    )
    return Prepared(share_model(problem), selection, notes)


def _star_of(
    spectrum: DepthSpectrum, system: System, spectra: StarSpectra | None
) -> tuple[System, StarInBins | None, tuple[str, ...]]:
    """Spectra of the star over the bins, with the prior of its spots cut to what the spectra hold."""
    teff_k = system.star_teff_k
    if teff_k is None:
        if spectra is not None:
            raise SettingError("Spectra of the star were given, but [star] teff_k is missing; add it.")
        return system, None, ("The star was not tested as a rival: [star] teff_k is missing.",)
    priors, notes = system.priors, ()
    if spectra is None:
        spectra = load_star_spectra(COOL_DWARF_LOG_G if teff_k < COOL_DWARF_K else WARM_DWARF_LOG_G)
        coolest = COOLEST_SPOT_K - teff_k
        if priors.spot_contrast_k[0] < coolest:
            lowest = min(coolest, priors.spot_contrast_k[1] - 1.0)
            priors = replace(priors, spot_contrast_k=(lowest, priors.spot_contrast_k[1]))
            notes = (f"Spots are no cooler than {COOLEST_SPOT_K:.0f} K, where the spectra of stars begin.",)
    star = spectra.in_bins(
        spectrum.wavelength_um,
        spectrum.half_width_um,
        teff_k,
        teff_k + priors.spot_contrast_k[0],
        teff_k + priors.facula_contrast_k[1],
    )
    return replace(system, priors=priors), star, (*notes, *star.notes)


def sensitivity_of(prepared: Prepared, seed: int = 1) -> dict[str, Sensitivity]:
    """What a spectrum could show of each species, before anything is fitted.

    Parameters
    ----------
    prepared : Prepared
    seed : int

    Returns
    -------
    dict of Sensitivity by species
    """
    problem = prepared.problem
    return find_sensitivity(problem, problem.species, seed=seed, thresholds=problem.system.thresholds)


def check_spectrum(
    spectrum: DepthSpectrum,
    system: System,
    *,
    species: tuple[str, ...] | None = None,
    seed: int = 1,
    workers: int = 2,
    quick: bool = False,
    tables: Path | None = None,
    nuisances: Nuisances | None = None,
    star_spectra: StarSpectra | None = None,
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
        One rough fit in place of two thorough ones, and fewer simulations; `settings["skipped"]` says what is
        left out.
    tables : Path, optional
        Folder of opacity tables in place of the shipped ones.
    nuisances : Nuisances, optional
        What may vary in every hypothesis alike; by default the offsets of segments.
    star_spectra : StarSpectra, optional
        The user's spectra of the star in place of the shipped ones.
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
    InputFileError
        If the user's spectra of the star miss the bins or the temperatures.
    WorkerError
        If a worker process died.
    OpacityTableError
        If a table is missing or altered.
    """
    clock = {"start": time.perf_counter()}
    prepared = prepare(
        spectrum, system, species=species, tables=tables, nuisances=nuisances, star_spectra=star_spectra
    )
    problem, selection = prepared.problem, prepared.selection
    thresholds = system.thresholds
    _ = problem.likelihood  # refuses what cannot be combined before anything is computed
    clock["prepared"] = time.perf_counter()
    reach = sensitivity_of(prepared, seed)
    clock["sensitivity"] = time.perf_counter()

    hypotheses = sampled_hypotheses(selection.species)
    star_alone = (STAR,) if problem.star is not None else ()
    with _pool(executor, workers) as own_executor:
        plan = Plan(
            seed,
            1 if quick else 2,
            SamplerSettings.quick() if quick else SamplerSettings.standard(),
            own_executor,
            progress,
        )
        quoted, star_fits = _split(fit_hypotheses(problem, (*hypotheses, *star_alone), plan))
        clock["fitted"] = time.perf_counter()
        grown = star_grown = None
        fits_well = _best((*quoted.fits, *star_fits.fits)).p_chi2 >= thresholds.poor_fit_p
        if not (fits_well or problem.nuisances.inflation):
            grown, star_grown = _split(
                fit_hypotheses(problem, (*hypotheses, *star_alone), plan, inflate=True)
            )
            clock["inflated"] = time.perf_counter()
        close = star_is_close(quoted, star_fits) or (grown and star_is_close(grown, star_grown))
        if close and not quick:
            both = (star_with_absorbers(problem),)
            star_fits = star_fits.joined(_split(fit_hypotheses(problem, both, plan))[1])
            if grown:
                star_grown = star_grown.joined(_split(fit_hypotheses(problem, both, plan, inflate=True))[1])
            clock["star and absorbers"] = time.perf_counter()
        rivals = build_rivals(problem, quoted, grown, star_fits, star_grown, plan)
        clock["rivals"] = time.perf_counter()
        alarms = false_alarms(
            problem,
            problem.species,
            (grown or quoted).fits,
            (grown or quoted).combined,
            seed=seed,
            n_simulations=QUICK_NULL_SIMULATIONS if quick else NULL_SIMULATIONS,
            error_factor=_typical(grown or quoted, "error_factor", 1.0),
            ar1=_typical(quoted, "ar1_coefficient", 0.0),
            executor=own_executor,
            left_out=not quick,
        )
        clock["false alarms"] = time.perf_counter()

    inflated = grown.fits if grown else ()
    comparisons = build_comparisons(
        quoted.fits,
        inflated,
        selection.species,
        rivals,
        alarms,
        with_star=star_fits.fits,
        with_star_inflated=star_grown.fits if star_grown else (),
    )
    verdict = judge(
        comparisons,
        selection.species,
        selection.untested,
        quoted.fits,
        inflated,
        thresholds=thresholds,
        sensitivity=reach,
        rivals=rivals,
        star_teff_k=system.star_teff_k,
    )
    fine_um, fits = with_fine_models(problem, hypotheses, quoted.fits)
    clock["drawn"] = time.perf_counter()
    height = scale_height_m(
        system.equilibrium_temperature_k, background_molecular_weight(system.background), problem.gravity
    )
    stages = list(clock)
    return CheckResult(
        spectrum=spectrum,
        system=problem.system,
        settings=_settings(problem, selection, seed, quick),
        fits=fits,
        inflated=inflated,
        comparisons=comparisons,
        verdict=verdict,
        scale_height_km=height / 1e3,
        scale_height_ppm=problem.one_scale_height / PPM,
        fine_wavelength_um=fine_um,
        bands_um={
            name: tuple((low, high) for low, high in load_table(name, tables).bands_um)
            for name in selection.species
        },
        warnings=selection.notes + prepared.notes + _warnings(problem, fits, bool(inflated)),
        timing={b: clock[b] - clock[a] for a, b in pairwise(stages)},
        rivals=rivals,
        false_alarms=alarms,
        sensitivity=reach,
        with_star=star_fits.fits,
    )


@contextmanager
def _pool(executor: Executor | None, workers: int):
    """The executor given, or one of our own for more than one worker, closed whatever happens."""
    own = None
    if executor is None and workers > 1:
        executor = own = ProcessPoolExecutor(workers, initializer=_leave_quietly)
    try:
        yield executor
    except BrokenProcessPool as error:
        raise WorkerError(
            "A worker process died while fitting, perhaps for want of memory. Run again with --workers 1."
        ) from error
    except KeyboardInterrupt:
        for child in multiprocessing.active_children():
            child.terminate()
        raise
    finally:
        if own is not None:
            own.shutdown(cancel_futures=True)


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


def _split(everything: Fits) -> tuple[Fits, Fits]:
    """Fits of the planet alone, and those with an inhomogeneous star."""
    return everything.only(lambda name: not name.startswith("star")), everything.only(
        lambda name: name.startswith("star")
    )


def _typical(fits: Fits, name: str, default: float) -> float:
    """Posterior median of a noise parameter in the best fit."""
    interval = _best(fits.fits).parameters.get(name)
    return default if interval is None else interval.median


# --- what surrounds the fits -------------------------------------------------------------------------------


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
        "nuisances": asdict(problem.nuisances),
        "skipped": _skipped(problem, quick),
        "gravity_m_s2": problem.gravity,
        "reference_pressure_bar": 0.01,
        "n_fine_points": problem.model.grid.n_points,
    }


def _skipped(problem: Problem, quick: bool) -> list[str]:
    """Sentences on what a quick run leaves out."""
    if not quick:
        return []
    out = ["one seed in place of two, with fewer draws: the scatter between seeds is unknown"]
    if problem.star is not None:
        out.append("star and absorbers together")
    if len(problem.species) > 1:
        out.append("false-alarm probabilities of species left out of the full model")
    out.append(f"{QUICK_NULL_SIMULATIONS} in place of {NULL_SIMULATIONS} simulations of each null")
    return out


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
