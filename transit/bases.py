"""The fitted hypotheses as frames for templates: where the best model is and which directions it may still move in."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from transit.combination import CombinedEvidence
from transit.hypotheses import Hypothesis
from transit.linearised import LinearBase, whitening
from transit.problem import Problem
from transit.records import Fit

# Step of the finite differences in the unit normal space of the sampler. Linearised parameters have their whole
# prior for a range, so that the slope over a tenth of a standard deviation says more than the one at a point.
JACOBIAN_STEP = 0.1


def line_base(
    problem: Problem,
    name: str,
    ln_evidence: float = 0.0,
    error_factor: float = 1.0,
    ar1: float = 0.0,
) -> LinearBase:
    """Frame about `flat` (level taken out) or `slope` (level and slope taken out).

    Parameters
    ----------
    problem : Problem
    name : {"flat", "slope"}
    ln_evidence : float
        Of the fit.
    error_factor, ar1 : float
        Inflation of the errors and correlation of neighbours.

    Returns
    -------
    LinearBase
    """
    n = problem.spectrum.n_bins
    free = [np.ones(n)]
    if name == "slope":
        free.append(problem.abscissa)
    covariance = problem.likelihood.covariance(error_factor, ar1)
    return LinearBase(
        name=name,
        depth=np.full(n, problem.median_depth),
        transform=whitening(covariance, np.stack(free, axis=1)),
        ln_evidence=ln_evidence,
    )


def atmosphere_base(
    problem: Problem,
    hypothesis: Hypothesis,
    best_z: np.ndarray,
    ln_evidence: float = 0.0,
    error_factor: float = 1.0,
    ar1: float = 0.0,
) -> LinearBase:
    """Frame about the best fit of an atmosphere, linear in its parameters with their priors.

    Parameters
    ----------
    problem : Problem
    hypothesis : Hypothesis
    best_z : ndarray, shape (D,)
        Best point in the sampler's coordinates (an inflated fit's last coordinates are passed over).
    ln_evidence, error_factor, ar1 : float
        As `line_base`.

    Returns
    -------
    LinearBase

    Notes
    -----
    In the sampler's coordinates every prior is N(0, 1), so that the directions are the columns of the Jacobian.
    """
    n_dim = len(problem.parameters(hypothesis))
    centre = np.asarray(best_z, float)[:n_dim]
    step = JACOBIAN_STEP * np.eye(n_dim)
    z = np.concatenate([centre[None, :], centre + step, centre - step])
    said = problem.predict(hypothesis, z)
    best = problem.likelihood.collapse(
        said.mean_height[:1], said.mean_square_height[:1], 1.0, bin_factor=_first(said.bin_factor)
    )
    depth = problem.likelihood.predicted_depth(
        said.mean_height, said.mean_square_height, np.full(len(z), best.radius[0]), bin_factor=said.bin_factor
    )
    jacobian = (depth[1 : n_dim + 1] - depth[n_dim + 1 :]).T / (2 * JACOBIAN_STEP)
    level = 2 * problem.median_depth * (best.radius[0] + said.mean_height[0])
    if said.bin_factor is not None:
        level = level * said.bin_factor[0]
    covariance = problem.likelihood.covariance(error_factor, ar1)
    return LinearBase(
        name=hypothesis.name,
        depth=depth[0],
        transform=whitening(covariance, level[:, None], jacobian),
        ln_evidence=ln_evidence,
    )


def fitted_base(
    problem: Problem,
    fit: Fit,
    combined: Mapping[str, CombinedEvidence],
    error_factor: float | None = None,
    ar1: float | None = None,
) -> LinearBase:
    """Frame about a fit, whichever kind it is.

    Parameters
    ----------
    problem : Problem
    fit : Fit
        A line, or a sampled hypothesis without a star.
    combined : mapping of str to CombinedEvidence
        What the samplers found, by name; a fit without an entry is a line.
    error_factor, ar1 : float, optional
        Posterior medians of the fit (1 and 0 where it has none) when left out.

    Returns
    -------
    LinearBase
    """
    factor = median_of(fit, "error_factor", 1.0) if error_factor is None else error_factor
    rho = median_of(fit, "ar1_coefficient", 0.0) if ar1 is None else ar1
    if fit.name not in combined:
        return line_base(problem, fit.name, fit.ln_evidence, factor, rho)
    hypothesis = Hypothesis(fit.name, fit.species)
    return atmosphere_base(problem, hypothesis, combined[fit.name].best_z, fit.ln_evidence, factor, rho)


def median_of(fit: Fit, name: str, default: float) -> float:
    """Posterior median of a parameter, or what stands for it where the fit has none."""
    interval = fit.parameters.get(name)
    return default if interval is None else interval.median


def _first(array: np.ndarray | None) -> np.ndarray | None:
    return None if array is None else array[:1]
