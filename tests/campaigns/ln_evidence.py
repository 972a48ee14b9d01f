"""Campaign: ln Z of the package against dynesty and dense quadrature, on the real likelihood.

Run by hand from the folder that holds `transit` and `tests`; it may be broken off and started again:

    OMP_NUM_THREADS=1 PYTHONPATH=.:tests python -m campaigns.ln_evidence --out FILE.jsonl --figure FILE.png

Each case is an invented planet, an invented spectrum of 15 to 30 bins and a truth drawn from the priors, all from the
case's number. Many draws from such wide priors are almost flat; in every other case the truth is drawn again until its
features stand well above the errors (or patience ends), since those posteriors are the narrow and curved ones. The
package fits as a check does: two seeds at standard settings, made again where they do not agree. dynesty (Speagle 2020,
MNRAS 493, 3132) gets the same likelihood and the same priors and shares no other code.
"""

import time
from dataclasses import dataclass

import dynesty
import numpy as np
from campaigns import records
from scipy.special import ndtri

from transit.atmosphere import observed_radius_m
from transit.combination import combine_runs
from transit.evidence import SamplerSettings, estimate_evidence
from transit.fitting import Plan, fit_hypotheses
from transit.hypotheses import DECK_COORDINATE, Hypothesis
from transit.problem import Problem
from transit.records import DepthSpectrum, Nuisances, System
from transit.star import StarInBins, load_star_spectra
from transit.units import GRAVITATION_SI, JUPITER_MASS_KG, JUPITER_RADIUS_M, PPM

SPECIES = ("H2O", "CO2", "CH4", "CO", "Na", "K")
SEED = 20080101
LIVE_POINTS = 250
LEAST_HAZE_Z = -6.0  # sampler coordinate of the lower end of the prior of the haze
LEAST_SPAN = 6.0  # of the clean spectrum of a case with clear features, in median errors
SPAN_TRIES = 200
QUADRATURE_NODES = ((16, 64, 64), (12, 54, 54))
LARGEST_QUADRATURE_ERR = 0.02


@dataclass(frozen=True)
class Case:
    """One kind of fit.

    `held` keeps the haze at its least, which leaves temperature, deck and the abundance of one species.
    """

    n_species: int
    atmosphere: bool = True
    star: bool = False
    segments: int = 1
    inflate: bool = False
    ar1: bool = False
    held: bool = False

    @property
    def label(self) -> str:
        """What is fitted, for the table."""
        parts = [
            f"{self.n_species} species" if self.n_species else "continuum" if self.atmosphere else "flat"
        ]
        parts += ["haze held"] if self.held else []
        parts += [f"{self.segments} segments"] if self.segments > 1 else []
        parts += [
            name for name, on in (("star", self.star), ("inflation", self.inflate), ("AR(1)", self.ar1)) if on
        ]
        return ", ".join(parts)


# The cheap ones first, so that a campaign broken off says something about all of them; the star last.
CASES = (
    *[Case(1, held=True)] * 4,
    *[Case(0)] * 5,
    Case(0, segments=2),
    *[Case(1)] * 7,
    Case(1, segments=2),
    Case(0, inflate=True),
    *[Case(2)] * 4,
    *[Case(2, segments=2)] * 2,
    *[Case(1, inflate=True)] * 2,
    Case(1, ar1=True),
    *[Case(3)] * 4,
    Case(3, segments=2),
    Case(2, inflate=True, segments=2),
    *[Case(4)] * 3,
    *[Case(5)] * 3,
    *[Case(6)] * 3,
    Case(6, inflate=True),
    Case(6, inflate=True, ar1=True),
    *[Case(0, atmosphere=False, star=True)] * 2,
    Case(0, star=True),
    *[Case(1, star=True)] * 2,
    Case(3, star=True),
)


def invented_system(rng: np.random.Generator) -> tuple[System, float]:
    """A planet and its depth (fraction): a star of 3500 to 6300 K, a tenth of its radius, gravity 3 to 25 m/s2."""
    depth = rng.uniform(0.05, 0.15) ** 2
    system = System(
        star_radius_rsun=rng.uniform(0.4, 1.3),
        planet_radius_rjup=1.0,  # replaced below
        planet_mass_mjup=1.0,
        equilibrium_temperature_k=float(np.exp(rng.uniform(np.log(450), np.log(1800)))),
        star_teff_k=rng.uniform(3500, 6300),
    )
    radius_m = observed_radius_m(system, depth)
    mass_kg = np.exp(rng.uniform(np.log(3), np.log(25))) * radius_m**2 / GRAVITATION_SI
    return (
        System(
            star_radius_rsun=system.star_radius_rsun,
            planet_radius_rjup=float(radius_m / JUPITER_RADIUS_M),
            planet_mass_mjup=float(mass_kg / JUPITER_MASS_KG),
            equilibrium_temperature_k=system.equilibrium_temperature_k,
            star_teff_k=system.star_teff_k,
            planet_name="Invented",
        ),
        depth,
    )


def invented_bins(rng: np.random.Generator, segments: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Centres, half widths (um) and segments of 15 to 30 bins somewhere between 0.5 and 5.4 um."""
    low_um = float(np.exp(rng.uniform(np.log(0.5), np.log(2.7))))
    edges = np.geomspace(low_um, min(low_um * rng.uniform(1.5, 4.0), 5.4), rng.integers(16, 32))
    segment = np.zeros(len(edges) - 1, int)
    if segments > 1:
        segment[rng.integers(5, len(segment) - 4) :] = 1
    return (edges[1:] + edges[:-1]) / 2, np.diff(edges) / 2, segment


def stellar_spectra(system: System, wavelength_um: np.ndarray, half_width_um: np.ndarray) -> StarInBins:
    """Spectra of the star in the bins, over the temperatures that the priors of spots and faculae allow."""
    coolest_k = system.star_teff_k + system.priors.spot_contrast_k[0]
    hottest_k = system.star_teff_k + system.priors.facula_contrast_k[1]
    spectra = load_star_spectra()
    return spectra.in_bins(wavelength_um, half_width_um, system.star_teff_k, coolest_k, hottest_k)


def build_case(number: int) -> tuple[Problem, Hypothesis, Case]:
    """Problem and hypothesis of a case: everything about it is drawn from its number."""
    case, rng = CASES[number], np.random.default_rng([SEED, number])
    system, level = invented_system(rng)
    centre, half, segment = invented_bins(rng, case.segments)
    species = tuple(sorted(rng.choice(SPECIES, case.n_species, replace=False), key=SPECIES.index))
    species = tuple(str(name) for name in species)
    name = (
        "all" if len(species) > 1 else species[0] if species else "continuum" if case.atmosphere else "flat"
    )
    hypothesis = Hypothesis(name, species, case.atmosphere, case.star)
    temperature_range_k = tuple(k * system.equilibrium_temperature_k for k in system.priors.temperature_teq)
    names = ("first", "second")[: case.segments]
    star = stellar_spectra(system, centre, half) if case.star else None

    def problem(depth, err):
        spectrum = DepthSpectrum(centre, half, depth, err, segment, names)
        nuisances = Nuisances(ar1=case.ar1)
        return Problem(spectrum, system, species, temperature_range_k, nuisances=nuisances, star=star)

    blank = problem(np.full(len(centre), level), np.full(len(centre), 0.01 * level))
    err = blank.one_scale_height * np.exp(rng.uniform(np.log(0.15), np.log(1.5)))
    err = err * rng.uniform(0.8, 1.3, len(centre))
    depth = clean_depth(blank, hypothesis, case, rng, LEAST_SPAN * np.median(err) if number % 2 else 0.0)
    offset = system.priors.offset_ppm * PPM * rng.standard_normal() * (segment == 1)
    # Understated errors and correlation of neighbours are left to the fit to find or not to find.
    depth = depth + offset + err * rng.standard_normal(len(centre))
    return problem(depth, err), hypothesis, case


def clean_depth(blank: Problem, hypothesis: Hypothesis, case: Case, rng, least_span: float) -> np.ndarray:
    """Depths (fraction) of a truth drawn from the priors, again and again until they span `least_span`."""
    n_dim = len(blank.parameters(hypothesis, case.inflate))
    for _ in range(SPAN_TRIES):
        truth = rng.standard_normal((1, n_dim))
        if case.held:
            truth[:, 2] = LEAST_HAZE_Z
        said = blank.predict(hypothesis, truth, case.inflate)
        depth = blank.likelihood.predicted_depth(
            said.mean_height, said.mean_square_height, np.ones(1), bin_factor=said.bin_factor
        )[0]
        if np.ptp(depth) >= least_span:
            break
    return depth


def held_likelihood(problem: Problem, hypothesis: Hypothesis):
    """ln likelihood of temperature, deck and abundance with the haze at the lower end of its prior."""

    def ln_likelihood(z):
        full = np.zeros((len(z), 5))
        full[:, [0, 1, 4]] = z
        full[:, 2] = LEAST_HAZE_Z
        return problem.ln_likelihood(hypothesis, full)

    return ln_likelihood


# --- the two evidences -----------------------------------------------------------------------------------------------


def by_package(problem: Problem, hypothesis: Hypothesis, case: Case, seed: int, settings: SamplerSettings):
    """Evidence as a check finds it."""
    if case.held:  # no hypothesis of the package has three parameters
        ln_likelihood = held_likelihood(problem, hypothesis)
        runs = [
            estimate_evidence(
                ln_likelihood, 3, np.random.SeedSequence([seed, run]), settings, stratum_dim=DECK_COORDINATE
            )
            for run in (0, 1)
        ]
        return combine_runs(runs, 3)
    plan = Plan(seed, 2, settings)
    return fit_hypotheses(problem, (hypothesis,), plan, case.inflate).combined[hypothesis.name]


def by_quadrature(ln_likelihood, n_nodes: tuple[int, ...]) -> float:
    """ln Z over the unit cube by Gauss-Legendre quadrature, `n_nodes` in each dimension."""
    axes, all_weights = [], []
    for n in n_nodes:
        nodes, weights = np.polynomial.legendre.leggauss(n)
        axes.append(ndtri((nodes + 1) / 2))
        all_weights.append(weights / 2)
    z = np.stack([a.ravel() for a in np.meshgrid(*axes, indexing="ij")], axis=1)
    weight = np.prod(np.stack([w.ravel() for w in np.meshgrid(*all_weights, indexing="ij")]), axis=0)
    value = np.concatenate([ln_likelihood(block) for block in np.array_split(z, len(z) // 512 + 1)])
    peak = value.max()
    return float(peak + np.log(np.exp(value - peak) @ weight))


def by_dynesty(ln_likelihood, n_dim: int, seed: int, live_points: int) -> tuple[float, float, int]:
    """ln Z, its error and the number of likelihood calls of nested sampling in the unit cube of the priors."""
    sampler = dynesty.NestedSampler(
        lambda z: float(ln_likelihood(z[None, :])[0]),
        lambda u: ndtri(np.clip(u, 1e-12, 1 - 1e-12)),
        n_dim,
        nlive=live_points,
        bound="multi",
        sample="rwalk",
        rstate=np.random.default_rng(seed),
    )
    sampler.run_nested(dlogz=0.05, print_progress=False)
    found = sampler.results
    return float(found.logz[-1]), float(found.logzerr[-1]), int(np.sum(found.ncall))


def reference(problem: Problem, hypothesis: Hypothesis, case: Case, seed: int, live_points: int) -> dict:
    """The independent evidence: quadrature for three parameters where two sizes of it agree, else dynesty."""
    n_dim = 3 if case.held else len(problem.parameters(hypothesis, case.inflate))
    ln_likelihood = (
        held_likelihood(problem, hypothesis)
        if case.held
        else lambda z: problem.ln_likelihood(hypothesis, z, case.inflate)
    )
    if case.held:
        fine, coarse = (by_quadrature(ln_likelihood, nodes) for nodes in QUADRATURE_NODES)
        if abs(fine - coarse) < LARGEST_QUADRATURE_ERR:
            return {"method": "quadrature", "ln_z": fine, "err": abs(fine - coarse)}
    ln_z, err, calls = by_dynesty(ln_likelihood, n_dim, seed, live_points)
    return {"method": "dynesty", "ln_z": ln_z, "err": err, "calls": calls}


def run_case(
    number: int, settings: SamplerSettings | None = None, live_points: int = LIVE_POINTS, seed: int = SEED
) -> dict:
    """Record of one case: both evidences, the difference in units of the combined error, and what was fitted."""
    problem, hypothesis, case = build_case(number)
    start = time.perf_counter()
    found = by_package(problem, hypothesis, case, seed + number, settings or SamplerSettings.standard())
    fitted = time.perf_counter()
    independent = reference(problem, hypothesis, case, seed + 7919 + number, live_points)
    done = time.perf_counter()
    return {
        "case": number,
        "label": case.label,
        "n_dim": 3 if case.held else len(problem.parameters(hypothesis, case.inflate)),
        "n_bins": problem.spectrum.n_bins,
        "species": list(hypothesis.species),
        "ln_z": found.ln_evidence,
        "err": found.ln_evidence_err,
        "converged": found.sampling["converged"],
        "reruns": found.sampling.get("reruns", 0),
        "flags": found.sampling["flags"],
        "calls": found.sampling["likelihood_calls"],
        "reference": independent,
        "pull": (found.ln_evidence - independent["ln_z"])
        / np.hypot(found.ln_evidence_err, independent["err"]),
        "seconds": [fitted - start, done - fitted],
    }


# --- what came out ---------------------------------------------------------------------------------------------------


def statistics(found: list[dict]) -> dict:
    """Mean and rms of the pulls, their greatest, and the largest reported error up to 6 and up to 12 parameters."""
    pull = np.array([record["pull"] for record in found])
    errors = {
        top: [record["err"] for record in found if low < record["n_dim"] <= top]
        for low, top in ((0, 6), (6, 12))
    }
    return {
        "n": len(pull),
        "mean": float(pull.mean()),
        "rms": float(np.sqrt(np.mean(pull**2))),
        "greatest": float(np.abs(pull).max()),
        "largest_err": {top: max(values) for top, values in errors.items() if values},
        "not_converged": [record["case"] for record in found if not record["converged"]],
    }


def print_table(found: list[dict]) -> None:
    """One line a case, then the statistics."""
    print(f"{'case':>4} {'fit':38} {'D':>2} {'bins':>4} {'ln Z':>16} {'independent':>29} {'pull':>6}")
    for r in found:
        other = f"{r['reference']['ln_z']:.3f} +- {r['reference']['err']:.3f} {r['reference']['method']}"
        own = f"{r['ln_z']:.3f} +- {r['err']:.3f}"
        doubt = "" if r["converged"] else "  not converged"
        about = f"{r['case']:4d} {r['label']:38} {r['n_dim']:2d} {r['n_bins']:4d}"
        print(f"{about} {own:>16} {other:>29} {r['pull']:6.2f}{doubt}")
    found_statistics = statistics(found)
    print("{n} fits: mean pull {mean:.2f}, rms {rms:.2f}, greatest {greatest:.2f}".format(**found_statistics))
    for n_dim in sorted({r["n_dim"] for r in found}):
        errors = [r["err"] for r in found if r["n_dim"] == n_dim]
        print(
            f"{n_dim:2d} parameters: {len(errors):2d} fits, largest reported error of ln Z {max(errors):.3f}"
        )
    print(f"Not converged: {found_statistics['not_converged'] or 'none'}")


def draw(found: list[dict], path) -> None:
    """Differences with their combined errors against the number of parameters."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(7, 3.6), layout="constrained")
    axes = figure.subplots()
    rng = np.random.default_rng(1)
    for method, colour in (("dynesty", "C0"), ("quadrature", "C1")):
        group = [r for r in found if r["reference"]["method"] == method]
        if not group:
            continue
        x = np.array([r["n_dim"] for r in group]) + rng.uniform(-0.3, 0.3, len(group))
        y = [r["ln_z"] - r["reference"]["ln_z"] for r in group]
        err = [np.hypot(r["err"], r["reference"]["err"]) for r in group]
        axes.errorbar(x, y, err, fmt="o", ms=4, lw=1, color=colour, label=f"against {method}")
    axes.axhline(0, color="0.6", lw=0.8)
    axes.set_xlabel("sampled parameters")
    axes.set_ylabel("difference in ln Z")
    axes.legend(frameon=False, loc="upper left")
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, dpi=130)


def main() -> None:
    """Run what is missing, print the table, draw the figure."""
    options = records.parser(__doc__.splitlines()[0], len(CASES)).parse_args()
    records.one_thread()
    done = records.run_cases(run_case, range(options.cases), options.out, options.workers)
    found = [done[case] for case in sorted(done)]
    print_table(found)
    if options.figure:
        draw(found, options.figure)


if __name__ == "__main__":
    main()
