"""Campaign: do 68 % intervals hold the truth 68 % of the time?

Run by hand from the folder that holds `transit` and `tests`; it may be broken off and started again:

    OMP_NUM_THREADS=1 PYTHONPATH=.:tests python -m campaigns.coverage --out FILE.jsonl --figure FILE.png

Simulation-based calibration (Talts et al. 2018, arXiv:1804.06788): truths are drawn from the priors of one hypothesis,
each gives a spectrum with noise, each spectrum is fitted, and the rank of every true parameter among the posterior
draws must be uniform. One run at standard settings a spectrum (half of what a check does) gives the draws.

The package measures radius and gravity from the median of the data, so a truth is only from its priors if the data
that follow have the median that the truth was computed with. The frame is one depth; temperature, deck, haze and
abundance are drawn from the priors and the noise from its distribution, and the reference radius is then set so that
the noisy spectrum's median is exactly the frame's. A shift of all depths is what the radius is: given the rest, the
difference of the fitted and the true radius is still that of the noise alone, so its rank is uniform as well.
"""

import time
from functools import cache

import numpy as np
from campaigns import records
from scipy.optimize import brentq
from scipy.stats import chisquare, kstest

from transit.evidence import SamplerSettings
from transit.fitting import Plan, fit_hypotheses
from transit.hypotheses import Hypothesis, physical
from transit.problem import Problem
from transit.records import DepthSpectrum, System
from transit.units import JUPITER_RADIUS_M, PPM

N_TRUTHS = 300
SEED = 20180418
RANK_BINS = 10
COVERAGE_RANGE = (0.60, 0.76)  # 68 % of 300 truths, three binomial errors either way
SMALLEST_P = 0.01

# A warm Saturn, close to WASP-39 b (Faedi et al. 2011, A&A 531, A40), in 28 bins across a band of water.
SYSTEM = System(
    star_radius_rsun=0.94,
    planet_radius_rjup=1.28,
    planet_mass_mjup=0.28,
    equilibrium_temperature_k=1120.0,
    star_teff_k=5485.0,
)
FRAME_DEPTH = 0.0211
ERR_PPM = 120.0
EDGES_UM = np.geomspace(1.1, 1.7, 29)
SPECIES = ("H2O",)
WATER = Hypothesis("H2O", SPECIES)
TEMPERATURE_RANGE_K = (560.0, 1344.0)


def problem_of(depth: np.ndarray) -> Problem:
    """Problem of a spectrum (fractions) in the campaign's bins."""
    centre, half = (EDGES_UM[1:] + EDGES_UM[:-1]) / 2, np.diff(EDGES_UM) / 2
    spectrum = DepthSpectrum(centre, half, depth, np.full(len(centre), ERR_PPM * PPM))
    return Problem(spectrum, SYSTEM, SPECIES, TEMPERATURE_RANGE_K)


@cache
def frame() -> Problem:
    """Problem of a spectrum with the depth of the frame, with which truths are computed."""
    return problem_of(np.full(len(EDGES_UM) - 1, FRAME_DEPTH))


def draw_truth(number: int) -> tuple[dict[str, float], np.ndarray, Problem]:
    """A truth from the priors: by parameter name and as sampler coordinates (1, D), and its noisy spectrum's problem.

    Raises
    ------
    ValueError
        If no reference radius within its prior gives the median of the frame.
    """
    rng = np.random.default_rng([SEED, number])
    blank = frame()
    parameter_set = blank.parameters(WATER)
    z = rng.standard_normal((1, len(parameter_set)))
    noise = ERR_PPM * PPM * rng.standard_normal(len(EDGES_UM) - 1)
    mean, square, _ = blank.heights(WATER, z)

    def depth(radius):
        return blank.likelihood.predicted_depth(mean, square, np.array([radius]))[0] + noise

    fraction = SYSTEM.priors.radius_fraction
    radius = brentq(lambda u: np.median(depth(u)) - FRAME_DEPTH, 1 - fraction, 1 + fraction, xtol=1e-14)
    truth = {p.name: float(v) for p, v in zip(parameter_set, physical(z, parameter_set)[0], strict=True)}
    truth["reference_radius_rjup"] = float(radius) * blank.reference_radius_m / JUPITER_RADIUS_M
    return truth, z, problem_of(depth(radius))


def run_truth(number: int, settings: SamplerSettings | None = None) -> dict:
    """Record of one truth: its value, its rank among the draws (0 to 1) and whether the 68 % interval holds it."""
    start = time.perf_counter()
    truth, _, problem = draw_truth(number)
    plan = Plan(SEED + number, 1, settings or SamplerSettings.standard())
    fit = fit_hypotheses(problem, (WATER,), plan).fit(WATER.name)
    draws = dict(zip(fit.draw_names, fit.draws.T, strict=True))
    return {
        "case": number,
        "truth": truth,
        "rank": {name: float(np.mean(draws[name] < value)) for name, value in truth.items()},
        "inside": {
            name: bool(fit.parameters[name].lower <= value <= fit.parameters[name].upper)
            for name, value in truth.items()
        },
        "ess": float(fit.sampling["ess"]),
        "flags": fit.sampling["flags"],
        "seconds": time.perf_counter() - start,
    }


# --- what came out ---------------------------------------------------------------------------------------------------


def statistics(found: list[dict]) -> dict[str, dict]:
    """Coverage of the 68 % interval and p of uniform ranks (Kolmogorov-Smirnov, chi-square) by parameter."""
    out = {}
    for name in found[0]["truth"]:
        rank = np.array([record["rank"][name] for record in found])
        counts = np.histogram(rank, RANK_BINS, (0, 1))[0]
        out[name] = {
            "coverage": float(np.mean([record["inside"][name] for record in found])),
            "p_ks": float(kstest(rank, "uniform").pvalue),
            "p_chi2": float(chisquare(counts).pvalue),
        }
    return out


def print_table(found: list[dict]) -> None:
    """One line a parameter."""
    print(f"{len(found)} truths, {ERR_PPM:g} ppm in {len(EDGES_UM) - 1} bins")
    print(f"{'parameter':26} {'68 % interval':>14} {'p (KS)':>8} {'p (chi2)':>9}")
    for name, row in statistics(found).items():
        low, high = COVERAGE_RANGE
        good = low <= row["coverage"] <= high and min(row["p_ks"], row["p_chi2"]) >= SMALLEST_P
        verdict = "" if good else "  outside"
        print(f"{name:26} {100 * row['coverage']:12.1f} % {row['p_ks']:8.3f} {row['p_chi2']:9.3f}{verdict}")
    doubtful = sum(any(not flag.startswith("one seed only") for flag in r["flags"]) for r in found)
    print(
        f"smallest effective size {min(r['ess'] for r in found):.0f}; {doubtful} fits with a flag of their own"
    )


def draw(found: list[dict], path) -> None:
    """Cumulative ranks less their expectation, with the band that holds 99 % of uniform samples."""
    from matplotlib.figure import Figure
    from scipy.stats import kstwo

    figure = Figure(figsize=(7, 3.6), layout="constrained")
    axes = figure.subplots()
    n = len(found)
    expected = np.arange(1, n + 1) / n
    for name in found[0]["truth"]:
        rank = np.sort([record["rank"][name] for record in found])
        axes.step(rank, expected - rank, where="post", lw=1, label=name)
    band = kstwo.ppf(0.99, n)
    axes.axhspan(-band, band, color="0.92", zorder=0)
    axes.set_xlabel("rank of the truth among the posterior draws")
    axes.set_ylabel("cumulative share less rank")
    axes.legend(frameon=False, fontsize=7, ncols=2)
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, dpi=130)


def main() -> None:
    """Run what is missing, print the table, draw the figure."""
    options = records.parser(__doc__.splitlines()[0], N_TRUTHS).parse_args()
    records.one_thread()
    done = records.run_cases(run_truth, range(options.cases), options.out, options.workers)
    found = [done[case] for case in sorted(done)]
    print_table(found)
    if options.figure:
        draw(found, options.figure)


if __name__ == "__main__":
    main()
