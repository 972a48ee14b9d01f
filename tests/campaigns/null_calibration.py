"""Campaign: is a false-alarm probability of p reached by a share p of noise-only spectra?

Run by hand from the folder that holds `transit` and `tests`; it may be broken off and started again:

    OMP_NUM_THREADS=1 PYTHONPATH=.:tests python -m campaigns.null_calibration --out FILE.jsonl --figure FILE.png

Spectra are drawn from each null: flat, slopes from their prior, continua (deck and haze) from theirs. Those of the
cases are plain noise on plain draws, counted one by one. Those of the reference, made by the package, reach the tail
with planted templates and weights. Both must give the same shares, named and best of all, down to p = 1e-4; and the
largest p of the three nulls, which is what a report quotes, must be reached by no larger share of any of them.
"""

import time
from dataclasses import dataclass
from functools import cache

import numpy as np
from campaigns import records
from scipy.stats import norm

from transit.bases import line_base
from transit.hypotheses import Hypothesis
from transit.library import (
    Statistic,
    evaluate,
    feature_library,
    line_statistic,
    model_depths,
    name_key,
    prior_library,
)
from transit.problem import Problem
from transit.records import DepthSpectrum, System
from transit.tails import REPEATS, simulate_nulls, tails_of
from transit.units import PPM

SEED = 1763
NULLS = ("flat", "slope", "continuum")
N_BATCHES = 30  # of each null
N_PER_BATCH = 10_000
N_REFERENCE = 400_000  # of each null
LEVELS = (0.5, 0.2, 0.1, 0.05, 0.02, 0.01, 0.003, 0.001, 3e-4, 1e-4)
BOUNDS_LN_B = (0.0, 1.0, 2.0, 3.0, 4.0, 5.0)

# A warm Saturn, close to WASP-39 b (Faedi et al. 2011, A&A 531, A40), seen from 1.1 to 5 um.
SYSTEM = System(
    star_radius_rsun=0.94,
    planet_radius_rjup=1.28,
    planet_mass_mjup=0.28,
    equilibrium_temperature_k=1120.0,
    star_teff_k=5485.0,
)
FRAME_DEPTH = 0.0211
ERR_PPM = 120.0
SPECIES = ("H2O", "CO2", "CO", "CH4")
N_BINS = 28


@dataclass(frozen=True, eq=False)
class Bench:
    """A statistic, the means of its nulls by name (drawn from their priors) and the simulations of the package."""

    species: tuple[str, ...]
    statistic: Statistic
    problem: Problem
    reference: dict


def flat_problem(species: tuple[str, ...], span_um: tuple[float, float] = (1.1, 5.0)) -> Problem:
    """Problem of a spectrum without features and without noise."""
    edges = np.geomspace(*span_um, N_BINS + 1)
    centre, half = (edges[1:] + edges[:-1]) / 2, np.diff(edges) / 2
    depth, err = np.full(N_BINS, FRAME_DEPTH), np.full(N_BINS, ERR_PPM * PPM)
    return Problem(DepthSpectrum(centre, half, depth, err), SYSTEM, species, (560.0, 1344.0))


def prior_means(problem: Problem, null: str, n_means: int, stream: list[int]) -> np.ndarray:
    """Whitened means of a null, (n_means, M), independent draws from its prior."""
    rng = np.random.default_rng(stream)
    base = line_base(problem, "flat")
    if null == "flat":
        return np.zeros((n_means, len(base.transform)))
    if null == "slope":
        slope = problem.slope_limit * rng.uniform(-1, 1, n_means)
        return slope[:, None] * base.whiten_template(problem.abscissa)
    hypothesis = Hypothesis("continuum", ())
    z = rng.standard_normal((n_means, len(problem.parameters(hypothesis))))
    return base.whiten_template(model_depths(problem, hypothesis, z))


def make_bench(
    species: tuple[str, ...],
    span_um: tuple[float, float],
    n_templates: int,
    n_reference: int,
    nulls: tuple[str, ...] = NULLS,
) -> Bench:
    """Libraries and reference simulations."""
    problem = flat_problem(species, span_um)
    base = line_base(problem, "flat")
    continuum = prior_library(problem, Hypothesis("continuum", ()), base, n_templates, SEED)
    own = tuple(prior_library(problem, Hypothesis(x, (x,)), base, n_templates, SEED) for x in species)
    features = tuple(feature_library(problem, x, base, 256, SEED) for x in species)
    statistic = line_statistic(problem, base, continuum, own)
    n_means = n_reference // REPEATS
    means = {null: prior_means(problem, null, n_means, [SEED, name_key(null), 1]) for null in nulls}
    return Bench(species, statistic, problem, simulate_nulls(statistic, features, means, SEED))


@cache
def campaign_bench() -> Bench:
    """The bench of the campaign, once in each process."""
    return make_bench(SPECIES, (1.1, 5.0), 4096, N_REFERENCE)


def plain_ln_b(bench: Bench, null: str, n_spectra: int, stream: list[int]) -> np.ndarray:
    """ln B of plain spectra of a null, (n_spectra, n_species), one mean to each."""
    means = prior_means(bench.problem, null, n_spectra, [*stream, 1])
    noise = np.random.default_rng([*stream, 2]).standard_normal(means.shape, dtype=np.float32)
    return evaluate(bench.statistic, means, noise)[0]


def threshold(tail, level: float) -> tuple[float, float]:
    """Value that the tail reaches with a probability, and the Monte Carlo error of that probability."""
    low, high = -200.0, 200.0
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if tail.chance(middle)[0] >= level else (low, middle)
    return high, tail.chance(high)[1]


def thresholds(bench: Bench) -> dict[str, dict[str, list[tuple[float, float]]]]:
    """Thresholds and errors of all levels by species ("" for the best of all) and null."""
    out = {}
    for k, name in enumerate((*bench.species, "")):
        tails = tails_of(bench.reference, "ln_b", None if name == "" else k)
        out[name] = {null: [threshold(tail, level) for level in LEVELS] for null, tail in tails.items()}
    return out


@cache
def campaign_thresholds() -> dict:
    """Thresholds of the campaign, once in each process."""
    return thresholds(campaign_bench())


def counts(bench: Bench, limits: dict, null: str, ln_b: np.ndarray) -> dict:
    """How many spectra have a p below each level, by the null they come from and by the largest p of all."""
    out = {"own": {}, "quoted": {}, "bound": {}}
    for k, name in enumerate((*bench.species, "")):
        value = ln_b.max(axis=1) if name == "" else ln_b[:, k]
        own = [limit for limit, _ in limits[name][null]]
        worst = np.max([[limit for limit, _ in found] for found in limits[name].values()], axis=0)
        out["own"][name] = [int(np.sum(value >= limit)) for limit in own]
        out["quoted"][name] = [int(np.sum(value >= limit)) for limit in worst]
        out["bound"][name] = [int(np.sum(value >= limit)) for limit in BOUNDS_LN_B]
    return out


def run_batch(number: int) -> dict:
    """Record of one batch of plain spectra of one null."""
    start = time.perf_counter()
    null = NULLS[number % len(NULLS)]
    bench, limits = campaign_bench(), campaign_thresholds()
    ln_b = plain_ln_b(bench, null, N_PER_BATCH, [SEED, 77, number])
    found = counts(bench, limits, null, ln_b)
    errors = {name: [err for _, err in limits[name][null]] for name in limits}
    record = {"case": number, "null": null, "n": N_PER_BATCH, "reference_err": errors}
    return record | found | {"seconds": time.perf_counter() - start}


# --- what came out ---------------------------------------------------------------------------------------------------


def deviates(found: list[dict], null: str) -> dict[str, np.ndarray]:
    """Share less level over the error of the difference, at each level, by species.

    The error holds the binomial one of the counted spectra and the Monte Carlo one of the reference.
    """
    own = [record for record in found if record["null"] == null]
    n = sum(record["n"] for record in own)
    level = np.array(LEVELS)
    out = {}
    for name in own[0]["own"]:
        share = np.sum([record["own"][name] for record in own], axis=0) / n
        err = np.array(own[0]["reference_err"][name])
        out[name] = (share - level) / np.sqrt(level * (1 - level) / n + err**2)
    return out


def quoted_excess(found: list[dict], null: str) -> dict[str, np.ndarray]:
    """The same for the largest p, which may be reached less often than it says but not more often."""
    as_own = [record | {"own": record["quoted"]} for record in found]
    return deviates(as_own, null)


def bound_excess(found: list[dict], null: str) -> dict[str, np.ndarray]:
    """Share of spectra with B >= b over its bound (1/b, and N/b for the best of N), by species.

    With truths from the prior of the null the mean of B is 1, so that Markov's inequality bounds the share.
    """
    own = [record for record in found if record["null"] == null]
    n = sum(record["n"] for record in own)
    out = {}
    for name in own[0]["bound"]:
        trials = len(own[0]["bound"]) - 1 if name == "" else 1
        share = np.sum([record["bound"][name] for record in own], axis=0) / n
        out[name] = share / (trials * np.exp(-np.array(BOUNDS_LN_B)))
    return out


def print_table(found: list[dict]) -> None:
    """Shares by null, level and species, and how many deviates lie outside 99 per cent."""
    limit = norm.isf(0.005)
    outside = total = 0
    for null in NULLS:
        own = [record for record in found if record["null"] == null]
        if not own:
            continue
        n = sum(record["n"] for record in own)
        print(f"{null}: {n} spectra; share with p below the level, over the level (p of the null, p quoted)")
        names = list(own[0]["own"])
        print(" ".join([f"{'level':>8}", *(f"{name or 'best':>11}" for name in names)]))
        for k, level in enumerate(LEVELS):
            cells = []
            for name in names:
                share, quoted = (
                    sum(record[kind][name][k] for record in own) / n / level for kind in ("own", "quoted")
                )
                cells.append(f"{share:5.3f} {quoted:5.3f}")
            print(" ".join([f"{level:8.1g}", *cells]))
        values = np.array(list(deviates(found, null).values()))
        outside += int(np.sum(np.abs(values) > limit))
        total += values.size
        largest = max(value.max() for value in quoted_excess(found, null).values())
        ratio = max(value.max() for value in bound_excess(found, null).values())
        print(f"largest |deviate| {np.abs(values).max():.2f}; of the quoted p {largest:+.2f} at most")
        print(f"largest share over its bound 1/b or N/b: {ratio:.3f}\n")
    print(f"{outside} of {total} deviates outside 99 per cent, expected {0.01 * total:.1f}")


def draw(found: list[dict], path) -> None:
    """Share over level against level by null, with the 99 per cent interval of the counts."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9, 3.4), layout="constrained")
    panels = figure.subplots(1, len(NULLS), sharey=True)
    level = np.array(LEVELS)
    for null, axes in zip(NULLS, panels, strict=True):
        own = [record for record in found if record["null"] == null]
        n = sum(record["n"] for record in own)
        for name in own[0]["own"]:
            share = np.sum([record["own"][name] for record in own], axis=0) / n
            axes.plot(level, share / level, ".-", lw=1, ms=4, label=name or f"best of {len(SPECIES)}")
        band = norm.isf(0.005) * np.sqrt((1 - level) / (level * n))
        axes.fill_between(level, 1 - band, 1 + band, color="0.92", zorder=0)
        axes.set_xscale("log")
        axes.set_title(null, fontsize=10)
        axes.set_xlabel("p")
    panels[0].set_ylabel("share of spectra with that p or less, over p")
    panels[0].set_ylim(0, 2)
    panels[-1].legend(frameon=False, fontsize=7)
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, dpi=130)


def main() -> None:
    """Run what is missing, print the table, draw the figure."""
    options = records.parser(__doc__.splitlines()[0], N_BATCHES * len(NULLS)).parse_args()
    records.one_thread()
    done = records.run_cases(run_batch, range(options.cases), options.out, options.workers)
    found = [done[case] for case in sorted(done)]
    print_table(found)
    if options.figure:
        draw(found, options.figure)


if __name__ == "__main__":
    main()
