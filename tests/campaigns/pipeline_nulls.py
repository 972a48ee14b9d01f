"""Campaign: does the full pipeline, sampling included, meet the false-alarm probabilities of the library?

Run by hand from the folder that holds `transit` and `tests`; it may be broken off and started again:

    OMP_NUM_THREADS=1 PYTHONPATH=.:tests python -m campaigns.pipeline_nulls --out FILE.jsonl --figure FILE.png

Sixty flat spectra with noise are fitted as a check fits them (two seeds at standard settings), and the same ln B are
computed from a library of plain prior draws. The two must agree within the sampler's errors and the library's own Monte
Carlo error, and the p that the null distribution gives to the sampled ln B must be uniform. Each spectrum also gets the
p that a check would report, whose templates and nulls rest on the fits of that very spectrum: those against a flat line
must be uniform as well, the largest of the nulls not smaller.
"""

import time
from functools import cache

import numpy as np
from campaigns import records
from campaigns.null_calibration import ERR_PPM, FRAME_DEPTH, N_BINS, make_bench
from scipy.stats import kstest

from transit.bases import line_base
from transit.evidence import SamplerSettings
from transit.fitting import Plan, fit_hypotheses
from transit.hypotheses import sampled_hypotheses
from transit.library import evaluate
from transit.nulls import false_alarms
from transit.problem import Problem
from transit.records import DepthSpectrum
from transit.tails import largest_chance, tails_of
from transit.units import PPM

N_FLATS = 60
SEED = 20070601
SPECIES = ("H2O", "CH4")
SPAN_UM = (1.1, 1.8)
N_REFERENCE = 40_000
N_OWN = 8_000  # simulations of each null for a spectrum's own p
SMALLEST_P = 0.01  # of the test for uniform p


@cache
def bench():
    """Statistic and flat null distribution, once in each process."""
    return make_bench(SPECIES, SPAN_UM, 4096, N_REFERENCE, ("flat",))


def flat_problem(number: int) -> Problem:
    """Problem of a flat spectrum with the noise of a case."""
    frame = bench().problem
    noise = np.random.default_rng([SEED, number]).standard_normal(N_BINS)
    spectrum = DepthSpectrum(
        frame.spectrum.wavelength_um,
        frame.spectrum.half_width_um,
        FRAME_DEPTH + ERR_PPM * PPM * noise,
        frame.spectrum.depth_err,
    )
    return Problem(spectrum, frame.system, SPECIES, frame.temperature_range_k)


def run_flat(number: int, settings: SamplerSettings | None = None, n_runs: int = 2) -> dict:
    """Record of one flat spectrum: ln B of each species over the best null, sampled and from the library."""
    start = time.perf_counter()
    problem = flat_problem(number)
    hypotheses = [h for h in sampled_hypotheses(SPECIES) if len(h.species) < 2]
    plan = Plan(SEED + number, n_runs, settings or SamplerSettings.standard())
    fits = fit_hypotheses(problem, hypotheses, plan)
    null = max(fit.ln_evidence for fit in fits.fits if not fit.species)
    sampled = {x: fits.fit(x).ln_evidence - null for x in SPECIES}
    data = line_base(bench().problem, "flat").whiten(problem.spectrum.depth)[None, :]
    ln_b = evaluate(bench().statistic, data, np.zeros_like(data))[0][0]
    alarms = false_alarms(
        problem, SPECIES, fits.fits, fits.combined, seed=SEED + number, n_simulations=N_OWN, left_out=False
    )
    return {
        "case": number,
        "sampled": sampled,
        "err": {x: fits.fit(x).ln_evidence_err for x in SPECIES},
        "library": dict(zip(SPECIES, map(float, ln_b), strict=True)),
        "own_flat": {x: alarms.observed[x]["p_null"]["flat"] for x in SPECIES},
        "own_quoted": {x: alarms.observed[x]["p_named"] for x in SPECIES},
        "seconds": time.perf_counter() - start,
    }


# --- what came out ---------------------------------------------------------------------------------------------------


def probabilities(found: list[dict], kind: str) -> dict[str, np.ndarray]:
    """p of the ln B of a kind ("sampled", "library") by species, and of the best of both under ""."""
    draws = bench().reference
    out = {}
    for k, name in enumerate(SPECIES):
        tails = tails_of(draws, "ln_b", k)
        out[name] = np.array([largest_chance(tails, record[kind][name])[0] for record in found])
    tails = tails_of(draws, "ln_b", None)
    out[""] = np.array([largest_chance(tails, max(record[kind].values()))[0] for record in found])
    return out


def statistics(found: list[dict]) -> dict:
    """Difference of sampled and library ln B, and how uniform the p of the sampled ones are."""
    difference = np.array([[r["sampled"][x] - r["library"][x] for x in SPECIES] for r in found])
    p_sampled, p_library = probabilities(found, "sampled"), probabilities(found, "library")
    return {
        "mean": float(difference.mean()),
        "rms": float(np.sqrt(np.mean(difference**2))),
        "p_ks": {name: float(kstest(p, "uniform").pvalue) for name, p in p_sampled.items()},
        "own_p_ks": {
            x: float(kstest([record["own_flat"][x] for record in found], "uniform").pvalue) for x in SPECIES
        },
        "quoted_below": {
            level: float(np.mean([record["own_quoted"][x] < level for record in found for x in SPECIES]))
            for level in (0.5, 0.2, 0.1)
        },
        "largest_p_ratio": float(
            max(np.exp(np.abs(np.log(p_sampled[name] / p_library[name]))).max() for name in p_sampled)
        ),
    }


def print_table(found: list[dict]) -> None:
    """Numbers of the campaign."""
    result = statistics(found)
    print(f"{len(found)} flat spectra, {N_BINS} bins, {', '.join(SPECIES)}")
    print(f"ln B sampled less library: mean {result['mean']:+.3f}, rms {result['rms']:.3f}")
    for name, p in probabilities(found, "sampled").items():
        shares = ", ".join(f"{np.mean(p < level):.2f} below {level:g}" for level in (0.5, 0.2, 0.1))
        print(f"{name or 'best':5} {shares}; p of being uniform {result['p_ks'][name]:.2f}")
    for name, p in result["own_p_ks"].items():
        print(f"{name:5} own p against a flat line, p of being uniform {p:.2f}")
    shares = ", ".join(f"{share:.2f} below {level:g}" for level, share in result["quoted_below"].items())
    print(f"quoted p of both: {shares}")
    print(f"p of sampled and library ln B differ by a factor {result['largest_p_ratio']:.2f} at most")


def draw(found: list[dict], path) -> None:
    """Sampled against library ln B, and cumulative p of the sampled ones."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(7, 3.2), layout="constrained")
    left, right = figure.subplots(1, 2)
    for name, marker in zip(SPECIES, "os", strict=True):
        x, y = ([record[kind][name] for record in found] for kind in ("library", "sampled"))
        left.plot(x, y, marker, mfc="none", ms=4, label=name)
    ends = left.get_xlim()
    left.plot(ends, ends, color="0.6", lw=0.8, zorder=0)
    left.set_xlabel("ln B from the library")
    left.set_ylabel("ln B from the sampler")
    left.legend(frameon=False, fontsize=8)
    share = (np.arange(len(found)) + 1) / len(found)
    for name, p in probabilities(found, "sampled").items():
        right.step(np.sort(p), share, where="post", lw=1, label=name or "best of both")
    right.plot([0, 1], [0, 1], color="0.6", lw=0.8, zorder=0)
    right.set_xlabel("p of the sampled ln B")
    right.set_ylabel("cumulative share of flat spectra")
    right.legend(frameon=False, fontsize=8)
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, dpi=130)


def main() -> None:
    """Run what is missing, print the table, draw the figure."""
    options = records.parser(__doc__.splitlines()[0], N_FLATS).parse_args()
    records.one_thread()
    done = records.run_cases(run_flat, range(options.cases), options.out, options.workers)
    found = [done[case] for case in sorted(done)]
    print_table(found)
    if options.figure:
        draw(found, options.figure)


if __name__ == "__main__":
    main()
