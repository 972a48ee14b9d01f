"""Wall time and memory of whole checks, of the null simulations, and of one likelihood. Run by hand, see DEVELOPERS.md.

Spectra are simulated: 28 bins with one species, and 207 bins from 0.5 to 5.5 um with six. Machines differ and are
shared: compare ratios measured in one run.
"""

from __future__ import annotations

import argparse
import resource
import time
from concurrent.futures import ProcessPoolExecutor

import numpy as np

from transit.check import check_spectrum
from transit.evidence import SamplerSettings
from transit.fitting import Plan, fit_hypotheses
from transit.hypotheses import Hypothesis, sampled_hypotheses
from transit.nulls import false_alarms
from transit.problem import Problem, share_model
from transit.records import System
from transit.simulate import Truth, simulate_spectrum

SYSTEM = System(
    star_radius_rsun=0.9,
    planet_radius_rjup=1.25,
    planet_mass_mjup=0.3,
    equilibrium_temperature_k=1150.0,
    star_teff_k=5400.0,
    planet_name="invented",
)
SPECIES = ("H2O", "CO2", "CO", "CH4", "Na", "K")
TRUTH = Truth(1000.0, {"H2O": -3.5, "CO2": -5.0, "CO": -3.5, "Na": -6.0}, -1.0, 0.5, -2.5)


def spectrum(n_bins: int, low_um: float, high_um: float, error_ppm: float, extra_scatter: float = 1.0):
    """A simulated spectrum; `extra_scatter` above 1 makes the quoted errors too small."""
    edges = np.geomspace(low_um, high_um, n_bins + 1)
    centre, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * np.diff(edges)
    made = simulate_spectrum(
        TRUTH, SYSTEM, centre, half, np.full(n_bins, error_ppm * extra_scatter * 1e-6), 5
    )
    return type(made)(made.wavelength_um, made.half_width_um, made.depth, made.depth_err / extra_scatter)


def timed(label: str, **options) -> None:
    """Run one check and print what it cost."""
    start = time.perf_counter()
    result = check_spectrum(system=SYSTEM, seed=1, workers=2, **options)
    wall = time.perf_counter() - start
    calls = sum(fit.sampling["likelihood_calls"] for fit in (*result.fits, *result.inflated))
    peak = (
        max(resource.getrusage(who).ru_maxrss for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))
        / 1e3
    )
    loose = [fit.name for fit in result.fits if not fit.sampling["converged"]]
    stages = ", ".join(f"{name} {seconds:.1f}" for name, seconds in result.timing.items())
    print(
        f"{label:48s} {wall:7.1f} s  {calls:9d} likelihoods  {peak:5.0f} MB at most in one process  "
        f"not converged: {', '.join(loose) or 'none'}\n    seconds: {stages}",
        flush=True,
    )


def likelihood_cost() -> None:
    """Microseconds of one likelihood in batches of 64."""
    problem = share_model(Problem(spectrum(207, 0.53, 5.4, 100.0), SYSTEM, SPECIES, (575.0, 1380.0)))
    hypothesis = Hypothesis("all", SPECIES)
    z = np.random.default_rng(0).standard_normal((64, len(problem.parameters(hypothesis))))
    times = []
    for _ in range(12):
        start = time.perf_counter()
        problem.ln_likelihood(hypothesis, z)
        times.append(time.perf_counter() - start)
    per_call = min(times) / 64
    points = problem.model.grid.n_points
    print(
        f"one likelihood: {1e6 * per_call:.0f} us, {points} fine points, {points / per_call / 1e6:.0f} million a second"
    )


def null_cost() -> None:
    """Seconds of 20 000 simulations of each null with their tail, 100 bins and six species, in two processes."""
    problem = share_model(Problem(spectrum(100, 0.55, 5.3, 120.0), SYSTEM, SPECIES, (575.0, 1380.0)))
    with ProcessPoolExecutor(2) as executor:
        plan = Plan(1, 1, SamplerSettings.quick(), executor)
        fits = fit_hypotheses(problem, sampled_hypotheses(SPECIES), plan)
        for left_out in (False, True):
            start = time.perf_counter()
            found = false_alarms(
                problem, SPECIES, fits.fits, fits.combined, seed=1, executor=executor, left_out=left_out
            )
            wall = time.perf_counter() - start
            more = " and of each species left out" if left_out else ""
            print(
                f"null, 100 bins, six species, {found.n_simulations} of each null{more}: {wall:.1f} s",
                flush=True,
            )


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--only", choices=("small", "large", "quick", "inflated", "likelihood", "null"))
    only = parser.parse_args().only
    if only in (None, "likelihood"):
        likelihood_cost()
    if only in (None, "null"):
        null_cost()
    if only in (None, "small"):
        timed("28 bins, one species", spectrum=spectrum(28, 1.12, 1.65, 60.0), species=("H2O",))
    if only in (None, "quick"):
        timed(
            "207 bins, six species, quick",
            spectrum=spectrum(207, 0.53, 5.4, 100.0),
            species=SPECIES,
            quick=True,
        )
    if only in (None, "large"):
        timed("207 bins, six species", spectrum=spectrum(207, 0.53, 5.4, 100.0), species=SPECIES)
    if only in (None, "inflated"):
        timed(
            "207 bins, six species, with inflated refit",
            spectrum=spectrum(207, 0.53, 5.4, 100.0, extra_scatter=2.0),
            species=SPECIES,
        )


if __name__ == "__main__":
    main()
