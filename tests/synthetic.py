"""A made-up `CheckResult` with known numbers, for the tests of everything that comes after the fits."""

from __future__ import annotations

import numpy as np

from transit.records import (
    CheckResult,
    DepthSpectrum,
    FalseAlarms,
    Fit,
    Interval,
    Rival,
    Sensitivity,
    System,
)
from transit.thresholds import Thresholds
from transit.verdict import best_null, build_comparisons, judge

BANDS_UM = {
    "H2O": ((1.10, 1.20), (1.32, 1.50), (1.75, 2.05), (2.50, 3.00), (5.0, 7.5)),
    "CO2": ((1.95, 2.10), (2.65, 2.85), (4.15, 4.50)),
    "CO": ((2.28, 2.45), (4.45, 4.95)),
    "CH4": ((1.13, 1.20), (1.60, 1.80), (2.15, 2.45), (3.15, 3.50)),
    "NH3": ((1.47, 1.56), (1.90, 2.05), (2.85, 3.10)),
    "HCN": ((1.51, 1.56), (2.95, 3.10)),
}
SCALE_HEIGHT_PPM = 180.0
MEDIAN_DEPTH = 0.0146
LN_EVIDENCE_LEVEL = 200.0


def fit_record(
    name: str,
    species: tuple[str, ...],
    ln_evidence: float,
    *,
    ln_evidence_err: float = 0.03,
    chi2: float = 25.0,
    converged: bool = True,
    n_bins: int = 3,
    model: np.ndarray | None = None,
    fine: np.ndarray | None = None,
    inflated: bool = False,
) -> Fit:
    """One fit; the arrays are constant unless given."""
    model = np.full(n_bins, MEDIAN_DEPTH) if model is None else model
    n_free = 1 + 3 * bool(species) + len(species) + inflated
    parameters = {"reference_radius_rjup": Interval(1.25, 1.24, 1.26, "RJup")}
    parameters |= {f"log10_vmr_{x}": Interval(-3.0, -4.0, -2.5) for x in species}
    if inflated:
        parameters["error_factor"] = Interval(1.4, 1.2, 1.7)
    rng = np.random.default_rng(len(name))
    spread = 0.3 * SCALE_HEIGHT_PPM * 1e-6
    sampled = dict(steps=800, walkers=64, autocorr_steps=31.0, ess=4200.0, likelihood_calls=90_000, flags=[])
    return Fit(
        name=name,
        species=species,
        n_free=n_free,
        ln_evidence=ln_evidence,
        ln_evidence_err=ln_evidence_err,
        chi2=chi2,
        dof=n_bins - n_free,
        p_chi2=0.31,
        bic=chi2 + n_free * np.log(n_bins),
        parameters=parameters,
        model_lower=model - spread,
        model_median=model,
        model_upper=model + spread,
        draws=rng.normal(size=(50, len(parameters))),
        draw_names=tuple(parameters),
        sampling=sampled | {"converged": converged} if species else {"converged": converged},
        fine_lower=None if fine is None else fine - spread,
        fine_median=fine,
        fine_upper=None if fine is None else fine + spread,
    )


def hypotheses(species: tuple[str, ...]) -> dict[str, tuple[str, ...]]:
    """Names of all hypotheses that a check of these species fits, each with its species."""
    names = {"flat": (), "slope": (), "continuum": ()} | {x: (x,) for x in species}
    if len(species) > 1:
        names["all"] = species
    if len(species) > 2:
        names |= {f"all-{x}": tuple(y for y in species if y != x) for x in species}
    return names


def fits_from(ln_evidences: dict[str, float], species: tuple[str, ...], **options) -> tuple[Fit, ...]:
    """Fits of all hypotheses at given ln evidences (0 where none is given)."""
    return tuple(
        fit_record(name, members, ln_evidences.get(name, 0.0), **options)
        for name, members in hypotheses(species).items()
    )


PHRASES = {
    "star": "unocculted spots or faculae of the star",
    "step": "a step at 1.40 um",
    "bump": "a bump at 1.25 um",
    "one-bin": "a single bad bin at 1.41 um",
}


def rival_record(
    name: str,
    ln_evidence: float,
    ln_evidence_inflated: float | None = None,
    *,
    species: str | None = None,
    counts: dict[str, bool] | None = None,
    ln_evidence_err: float = 0.03,
    chi2: float | None = None,
    base: str | None = None,
) -> Rival:
    """A rival on the nulls, on the best fit without `species`, or on a base that is named."""
    return Rival(
        name=name,
        base=base or ("null" if species is None else f"all-{species}"),
        species=species,
        ln_evidence=ln_evidence,
        ln_evidence_err=ln_evidence_err,
        phrase=PHRASES[name],
        parameters={"amplitude_ppm": Interval(120.0, 90.0, 150.0, "ppm")},
        ln_evidence_inflated=ln_evidence_inflated,
        ln_evidence_inflated_err=None if ln_evidence_inflated is None else 0.03,
        counts=counts or {},
        chi2=chi2,
    )


def sensitivity_record(amplitude_scale_heights: float | None) -> Sensitivity:
    """What a spectrum could show, from a made-up amplitude (None: nothing up to 12 scale heights)."""
    return Sensitivity(
        amplitude_scale_heights=amplitude_scale_heights,
        amplitude_err=None if amplitude_scale_heights is None else 0.1,
        largest_scale_heights=12.0,
        chance=0.8,
        ln_bayes_factor=5.0,
        sentence="A made-up sentence.",
    )


def false_alarms_record(
    p_named: dict[str, float], p_best_of_n: float, p_left_out: dict[str, float] | None = None, **options
) -> FalseAlarms:
    """False alarms with the p of the observed ln B given, and a table whose p is exp(-1.5 ln B) / 10."""
    ln_b = np.array([0.0, 1.0, 2.5, 5.0, 8.0, 12.0])
    p = 0.1 * np.exp(-1.5 * ln_b)
    nulls = {"flat": 0.5, "slope": 1.0}
    observed = {
        x: {
            "ln_bayes_factor": 4.0,
            "delta_chi2": 14.0,
            "p_named": value,
            "p_best_of_n": min(1.0, 2 * value),
            "p_err": value / 20,
            "p_null": {name: share * value for name, share in nulls.items()},
            "p_delta_chi2": value,
        }
        for x, value in p_named.items()
    }
    observed[""] = {
        "ln_bayes_factor": 4.0,
        "delta_chi2": 14.0,
        "p_best_of_n": p_best_of_n,
        "p_err": p_best_of_n / 20,
    }
    left_out = {
        x: {"ln_bayes_factor": 3.0, "p_named": value, "p_err": value / 20, "p_null": {f"all-{x}": value}}
        for x, value in (p_left_out or {}).items()
    }
    return FalseAlarms(
        ln_bayes_factor=ln_b,
        p_named={x: p / 3 for x in p_named},
        p_named_err={x: p / 60 for x in p_named},
        p_best_of_n=p,
        p_best_of_n_err=p / 20,
        observed=observed,
        left_out=left_out,
        n_simulations=20_000,
        error_factor=options.get("error_factor", 1.0),
        smallest_p=1e-8,
    )


def shape(wavelength_um: np.ndarray, species: tuple[str, ...]) -> np.ndarray:
    """Depth with smooth bumps of a few scale heights where the species absorb."""
    wavelength_um = np.asarray(wavelength_um, float)
    height = np.zeros_like(wavelength_um)
    for index, name in enumerate(species):
        for lower, upper in BANDS_UM[name]:
            centre, width = (lower + upper) / 2, (upper - lower) / 2.5
            height += (3.0 - 0.35 * index) * np.exp(-0.5 * ((wavelength_um - centre) / width) ** 2)
    return MEDIAN_DEPTH + height * SCALE_HEIGHT_PPM * 1e-6


def spectrum_record(
    lower_um: float = 1.1,
    upper_um: float = 1.7,
    n_bins: int = 28,
    *,
    truth: tuple[str, ...] = ("H2O",),
    err_ppm: float = 70.0,
    wide_points_um: tuple[tuple[float, float], ...] = (),
    seed: int = 3,
) -> DepthSpectrum:
    """Spectrum with log-spaced bins; `wide_points_um` (centre, half width) are segments of their own."""
    edges = np.geomspace(lower_um, upper_um, n_bins + 1)
    centre, half = (edges[1:] + edges[:-1]) / 2, np.diff(edges) / 2
    segment = np.zeros(n_bins, int)
    for index, (wide_um, wide_half_um) in enumerate(wide_points_um, start=1):
        centre, half = np.append(centre, wide_um), np.append(half, wide_half_um)
        segment = np.append(segment, index)
    err = np.full(len(centre), err_ppm * 1e-6) * (1 + 0.6 * (centre / centre.max()) ** 3)
    depth = shape(centre, truth) + err * np.random.default_rng(seed).normal(size=len(centre))
    return DepthSpectrum(
        wavelength_um=centre,
        half_width_um=half,
        depth=depth,
        depth_err=err,
        segment=segment,
        segment_names=("grism", *(f"point {i}" for i in range(1, len(wide_points_um) + 1))),
        source="made-up.csv",
        sha256="0" * 64,
        notes=("Read 28 rows; depths were given in ppm.",),
    )


def check_result(
    species: tuple[str, ...] = ("H2O",),
    *,
    ln_evidences: dict[str, float] | None = None,
    ln_evidences_inflated: dict[str, float] | None = None,
    spectrum: DepthSpectrum | None = None,
    truth: tuple[str, ...] = ("H2O",),
    untested: dict[str, str] | None = None,
    warnings: tuple[str, ...] = (),
    quick: bool = False,
    fine: bool = True,
    n_bands: int | None = None,
    planet_name: str = "Example-1 b",
    rivals: tuple[Rival, ...] = (),
    false_alarms: FalseAlarms | None = None,
    sensitivity: dict[str, Sensitivity] | None = None,
    thresholds: Thresholds | None = None,
    star_teff_k: float = 5500.0,
    skipped: tuple[str, ...] = (),
) -> CheckResult:
    """Result of a check that was never run, self-consistent enough to be drawn, printed and written.

    Evidences are over an arbitrary level of `LN_EVIDENCE_LEVEL`, which those of rivals must include.
    """
    thresholds, sensitivity = thresholds or Thresholds(), sensitivity or {}
    spectrum = spectrum_record(truth=truth) if spectrum is None else spectrum
    ln_evidences = {"H2O": 9.0, "all": 8.5} if ln_evidences is None else ln_evidences
    low, high = spectrum.wavelength_um.min() * 0.97, spectrum.wavelength_um.max() * 1.03
    fine_um = np.geomspace(low, high, 600)

    def curve(name, grid):
        members = hypotheses(species)[name]
        slope = 40e-6 * np.log(grid / np.median(grid)) if name == "slope" else 0.0
        return shape(grid, tuple(x for x in members if x in truth)) + slope + (0 if members else 60e-6)

    def fits(values, grown):
        out = []
        for name, members in hypotheses(species).items():
            model = curve(name, spectrum.wavelength_um)
            chi2 = float(np.sum(((spectrum.depth - model) / spectrum.depth_err) ** 2))
            options = {"model": model, "chi2": chi2, "n_bins": spectrum.n_bins, "inflated": grown}
            dense = curve(name, fine_um) if fine else None
            out.append(
                fit_record(name, members, LN_EVIDENCE_LEVEL + values.get(name, 0.0), fine=dense, **options)
            )
        return tuple(out)

    quoted = fits(ln_evidences, False)
    inflated = () if ln_evidences_inflated is None else fits(ln_evidences_inflated, True)
    untested = untested or {}
    comparisons = build_comparisons(quoted, inflated, species, rivals, false_alarms)
    assert best_null(quoted).name in {"flat", "slope", "continuum"}
    return CheckResult(
        spectrum=spectrum,
        system=System(
            star_radius_rsun=1.12,
            planet_radius_rjup=1.27,
            planet_mass_mjup=0.96,
            equilibrium_temperature_k=1120.0,
            star_teff_k=star_teff_k,
            planet_name=planet_name,
            errors=(("planet_mass_mjup", 0.05),),
            source="example.toml",
            notes=("The equilibrium temperature was computed for zero albedo.",),
            thresholds=thresholds,
        ),
        settings={
            "seed": 1,
            "quick": quick,
            "skipped": list(skipped),
            "species": list(species),
            "species_reasons": {x: "asked for" for x in species},
            "untested": dict(untested),
            "priors": {
                "temperature_k": [560.0, 1344.0],
                "log10_deck_pressure_bar": [-6.0, 1.0],
                "log10_vmr": [-12.0, -1.0],
                "log10_haze_strength": [-2.0, 5.0],
                "haze_exponent": [-8.0, 0.0],
                "reference_radius_rjup": [1.0, 1.5],
                "slope_ppm_per_efold": [-1800.0, 1800.0],
                "error_factor": [1.0, 10.0],
            },
            "tables": {x: {"trusted": True, "sha256": "ab" * 32} for x in species},
        },
        fits=quoted,
        inflated=inflated,
        comparisons=comparisons,
        verdict=judge(
            comparisons,
            species,
            untested,
            quoted,
            inflated,
            thresholds=thresholds,
            sensitivity=sensitivity,
            rivals=rivals,
            star_teff_k=star_teff_k,
        ),
        scale_height_km=610.0,
        scale_height_ppm=SCALE_HEIGHT_PPM,
        fine_wavelength_um=fine_um,
        bands_um={x: BANDS_UM[x][:n_bands] for x in species},
        warnings=warnings,
        timing={"read": 0.01, "fits": 61.3},
        rivals=rivals,
        false_alarms=false_alarms,
        sensitivity=sensitivity,
    )
