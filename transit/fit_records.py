"""From a posterior to the record of a fit: intervals, model bands, chi-square; and fine models for the figure."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy.special import chdtrc

from transit.combination import CombinedEvidence
from transit.comparisons import best_null
from transit.hypotheses import Hypothesis, physical
from transit.linear import linear_posterior
from transit.problem import Problem
from transit.records import Fit, Interval
from transit.units import JUPITER_RADIUS_M, PPM

MODEL_DRAWS = 300
FINE_RESOLVING_POWER = 120


def line_fit(problem: Problem, name: str, seed: int, inflate: bool) -> Fit:
    """Fit of a flat or sloped spectrum.

    Parameters
    ----------
    problem : Problem
    name : {"flat", "slope"}
    seed : int
        Of the posterior draws.
    inflate : bool
        Whether the errors may grow.

    Returns
    -------
    Fit
    """
    priors, nuisances = problem.system.priors, problem.nuisances
    inflate = inflate or nuisances.inflation
    posterior = linear_posterior(
        problem.likelihood,
        problem.abscissa if name == "slope" else None,
        problem.slope_limit,
        priors.error_factor if inflate else None,
        np.random.default_rng([seed, 7 if name == "slope" else 3]),
        ar1_range=priors.ar1_coefficient if nuisances.ar1 else None,
    )
    zeros = np.zeros((len(posterior.radius), problem.spectrum.n_bins))
    extra = posterior.slope[:, None] * problem.abscissa
    depth = problem.likelihood.predicted_depth(zeros, zeros, posterior.radius, extra)
    columns = {"reference_radius_rjup": posterior.radius * problem.reference_radius_m / JUPITER_RADIUS_M}
    columns["level_ppm"] = problem.median_depth * posterior.radius**2 / PPM
    units = {"reference_radius_rjup": "Jupiter radii", "level_ppm": "ppm"}
    n_free = 1
    if name == "slope":
        columns["slope_ppm_per_efold"] = posterior.slope / PPM
        units["slope_ppm_per_efold"] = "ppm per e-fold of wavelength"
        n_free += 1
    if nuisances.ar1:
        columns["ar1_coefficient"] = posterior.ar1
        units["ar1_coefficient"] = ""
        n_free += 1
    if inflate:
        columns["error_factor"] = posterior.error_factor
        units["error_factor"] = ""
        n_free += 1
    depth = _add_directions(problem, columns, units, depth, posterior.error_factor, posterior.ar1)
    sampling = {"steps": 0, "walkers": 0, "autocorr_steps": 0.0, "ess": float(len(posterior.radius))}
    sampling |= {"likelihood_calls": 0, "flags": [], "converged": True}
    return _assemble(
        problem,
        name,
        (),
        n_free,
        posterior.ln_evidence,
        0.0,
        posterior.chi2,
        columns,
        units,
        depth[:MODEL_DRAWS],
        sampling,
    )


def sampled_fit(
    problem: Problem, hypothesis: Hypothesis, combined: CombinedEvidence, seed: int, inflate: bool
) -> Fit:
    """Fit of a sampled hypothesis from its combined runs.

    Parameters
    ----------
    problem : Problem
    hypothesis : Hypothesis
    combined : CombinedEvidence
    seed : int
        Of the draws of the reference radius.
    inflate : bool
        Whether the errors might grow.

    Returns
    -------
    Fit
    """
    parameter_set = problem.parameters(hypothesis, inflate)
    rng = np.random.default_rng([seed, 11])
    best = problem.predict(hypothesis, combined.best_z[None, :], inflate)
    chi2 = problem.likelihood.collapse(
        best.mean_height, best.mean_square_height, 1.0, bin_factor=best.bin_factor, ar1=best.ar1
    ).chi2[0]
    said = problem.predict(hypothesis, combined.draws_z, inflate)
    collapsed = problem.likelihood.collapse(
        said.mean_height, said.mean_square_height, said.error_factor, bin_factor=said.bin_factor, ar1=said.ar1
    )
    radius = collapsed.radius + collapsed.radius_err * rng.standard_normal(len(combined.draws_z))
    values = physical(combined.draws_z, parameter_set)
    columns = {p.name: values[:, k] for k, p in enumerate(parameter_set)}
    units = {p.name: p.unit for p in parameter_set}
    if "ln_error_factor" in columns:
        columns["error_factor"] = np.exp(columns.pop("ln_error_factor"))
        units["error_factor"] = ""
    columns["reference_radius_rjup"] = radius * problem.reference_radius_m / JUPITER_RADIUS_M
    units["reference_radius_rjup"] = "Jupiter radii at 10 mbar"
    depth = problem.likelihood.predicted_depth(
        said.mean_height, said.mean_square_height, radius, bin_factor=said.bin_factor
    )
    depth = _add_directions(problem, columns, units, depth, said.error_factor, said.ar1)
    return _assemble(
        problem,
        hypothesis.name,
        hypothesis.species,
        len(parameter_set) + 1,
        combined.ln_evidence,
        combined.ln_evidence_err,
        float(chi2),
        columns,
        units,
        depth[:MODEL_DRAWS],
        combined.sampling,
    )


def _add_directions(problem: Problem, columns: dict, units: dict, depth, factor, ar1) -> np.ndarray:
    """Add what the likelihood integrates analytically (offsets, steps, slope) to parameters and depths (W, N)."""
    amplitudes = problem.likelihood.offsets(depth, factor, ar1)
    for name, amplitude in zip(problem.direction_names, amplitudes.T, strict=True):
        columns[name] = amplitude / PPM
        units[name] = "ppm, over the first segment" if name.startswith("offset") else "ppm"
    if "slope_ppm_per_efold" in problem.direction_names:
        units["slope_ppm_per_efold"] = "ppm per e-fold of wavelength"
    return depth + amplitudes @ problem.likelihood.directions.T


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


# --- for the figure ----------------------------------------------------------------------------------------


def with_fine_models(
    problem: Problem, hypotheses: Sequence[Hypothesis], fits: tuple[Fit, ...]
) -> tuple[np.ndarray, tuple[Fit, ...]]:
    """Models of the best null and the two best hypotheses with species on a dense grid, for drawing.

    Parameters
    ----------
    problem : Problem
    hypotheses : sequence of Hypothesis
    fits : tuple of Fit

    Returns
    -------
    (ndarray, tuple of Fit)
        The dense grid, micrometre, and the fits with their fine models.
    """
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
    extra = None
    if "slope_ppm_per_efold" in column:
        x = np.log(fine_um) - np.log(problem.spectrum.wavelength_um).mean()
        extra = column["slope_ppm_per_efold"][:, None] * PPM * x
    if hypothesis is None:
        zeros = np.zeros((len(radius), len(fine_um)))
        return problem.likelihood.predicted_depth(zeros, zeros, radius, extra)
    mean, square = problem.limb_heights(hypothesis, column, len(radius), model)
    return problem.likelihood.predicted_depth(mean, square, radius, extra)
