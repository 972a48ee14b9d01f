"""The long campaigns in short: a few of their cases, and whether their statistics notice what they are for."""

import json

import numpy as np
import pytest
from campaigns import coverage, ln_evidence, pipeline_nulls, records
from scipy.special import ndtr
from scipy.stats import binom

from transit.evidence import SamplerSettings
from transit.units import JUPITER_RADIUS_M


def square(number):
    return {"case": number, "square": number**2}


# --- breaking off and going on -------------------------------------------------------------------------------------


@pytest.mark.parametrize("workers", [1, 2])
def test_finished_cases_are_not_run_again(tmp_path, workers, capsys):
    """What the file holds is believed; a line cut short is run again and swallows nothing."""
    path = tmp_path / "cases.jsonl"
    path.write_text(json.dumps({"case": 1, "square": "kept"}) + "\n" + '{"case": 2, "squ')
    found = records.run_cases(square, range(4), path, workers)
    assert {n: r["square"] for n, r in found.items()} == {0: 0, 1: "kept", 2: 4, 3: 9}
    assert records.read_records(path) == found
    before = path.read_bytes()
    assert records.run_cases(square, range(4), path, workers) == found
    assert path.read_bytes() == before


# --- ln Z ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("number", [3, 5, 12])
def test_ln_evidence_case(number):
    """Three, four and five parameters: quadrature or dynesty (Speagle 2020, MNRAS 493, 3132) within 3 errors."""
    record = ln_evidence.run_case(number, live_points=80)
    assert record["n_dim"] == {3: 3, 5: 4, 12: 5}[number]
    assert record["reference"]["method"] == ("quadrature" if number == 3 else "dynesty")
    assert record["converged"], record["flags"]
    assert abs(record["pull"]) < 3
    assert record["err"] < 0.15
    json.dumps(record)


def test_ln_evidence_cases_are_drawn_from_their_numbers():
    """The same number gives the same case whatever else is run; every case keeps what its label says."""
    for number in (0, 9, 19, 27, 33, 44):
        case = ln_evidence.CASES[number]
        problem, hypothesis, same = ln_evidence.build_case(number)
        assert same == case
        assert 15 <= problem.spectrum.n_bins <= 30
        assert len(hypothesis.species) == case.n_species
        assert len(problem.spectrum.segment_names) == case.segments == problem.spectrum.segment.max() + 1
        assert np.all(problem.spectrum.depth > 0)
    one, two = (ln_evidence.build_case(10)[0].spectrum.depth for _ in range(2))
    assert np.array_equal(one, two)


def test_ln_evidence_campaign_spans_three_to_twelve_parameters():
    """At least 40 fits, as wide as the hypotheses of a check; the star brings spots, faculae and its two grids."""
    n_dim = set()
    for case in ln_evidence.CASES:
        own = (4 if case.atmosphere else 0) + case.n_species + 5 * case.star + case.inflate + case.ar1
        n_dim.add(own - 2 * case.held)
    assert n_dim == set(range(3, 13))
    assert len(ln_evidence.CASES) >= 40
    for number in (43, 44, 50):
        problem, hypothesis, case = ln_evidence.build_case(number)
        assert len(problem.parameters(hypothesis, case.inflate)) == {43: 11, 44: 12, 50: 12}[number]


def test_pull_statistics_notice_a_bias():
    """Honest errors give pulls of rms 1 about 0; a ln Z that is 0.1 too low moves the mean by 1."""
    rng = np.random.default_rng(3)
    base = [{"case": n, "n_dim": 5, "err": 0.1, "converged": True} for n in range(400)]
    honest = ln_evidence.statistics([r | {"pull": float(rng.standard_normal())} for r in base])
    assert honest["mean"] == pytest.approx(0, abs=4 / 20)
    assert honest["rms"] == pytest.approx(1, abs=4 / np.sqrt(800))
    low = ln_evidence.statistics([r | {"pull": float(rng.standard_normal()) - 1} for r in base])
    assert low["mean"] < -0.4
    assert honest["largest_err"] == {6: 0.1}


# --- coverage -----------------------------------------------------------------------------------------------------


def test_truths_have_the_median_of_their_frame():
    """The radius of a truth is set so that radius and gravity measured from its data are those it was computed with."""
    limit = coverage.SYSTEM.priors.radius_fraction
    frame = coverage.frame()
    for number in range(10):
        truth, _, problem = coverage.draw_truth(number)
        assert problem.median_depth == pytest.approx(coverage.FRAME_DEPTH, rel=1e-12)
        assert problem.gravity == pytest.approx(frame.gravity, rel=1e-12)
        ratio = truth["reference_radius_rjup"] * JUPITER_RADIUS_M / frame.reference_radius_m
        assert abs(ratio - 1) < limit


def test_radius_of_a_truth_scatters_as_the_noise_does():
    """Given the rest, the true radius less the best over its width is standard normal: the frame biases nothing.

    Mean and scatter of 200 truths within four of their errors, 1/sqrt(n) and 1/sqrt(2n).
    """
    pull = []
    for number in range(200):
        truth, z, problem = coverage.draw_truth(number)
        mean, square, _ = coverage.frame().heights(coverage.WATER, z)  # the problem's own model is the same
        found = problem.likelihood.collapse(mean, square)
        radius = truth["reference_radius_rjup"] * JUPITER_RADIUS_M / problem.reference_radius_m
        pull.append((radius - found.radius[0]) / found.radius_err[0])
    assert np.mean(pull) == pytest.approx(0, abs=4 / np.sqrt(200))
    assert np.std(pull) == pytest.approx(1, abs=4 / np.sqrt(400))


def test_intervals_of_a_few_truths():
    """68 % intervals of eight truths hold as many as a binomial of 0.68 allows at one in a thousand."""
    found = [coverage.run_truth(number, SamplerSettings.quick()) for number in range(8)]
    low, high = binom.ppf([5e-4, 1 - 5e-4], 8, 0.68)
    for name, row in coverage.statistics(found).items():
        assert low <= 8 * row["coverage"] <= high, name
        assert row["p_ks"] > 1e-3, name
    json.dumps(found)


@pytest.mark.parametrize(("width", "good"), [(1.0, True), (0.7, False), (1.5, False)])
def test_coverage_statistics_notice_wrong_widths(width, good):
    """A normal posterior `width` times as wide as the scatter of its truth: only the right one passes."""
    deviate = np.random.default_rng(9).standard_normal(coverage.N_TRUTHS) / width
    found = [
        {"truth": {"x": 0.0}, "rank": {"x": float(ndtr(v))}, "inside": {"x": bool(abs(v) < 1)}}
        for v in deviate
    ]
    row = coverage.statistics(found)["x"]
    low, high = coverage.COVERAGE_RANGE
    passes = low <= row["coverage"] <= high and min(row["p_ks"], row["p_chi2"]) >= coverage.SMALLEST_P
    assert passes == good


# --- the whole pipeline on flat spectra ------------------------------------------------------------------------------


def test_sampled_and_library_ln_b_agree_on_flat_spectra():
    """Two flat spectra: the sampler's ln B are those of the library of prior draws, and so are their p."""
    found = [pipeline_nulls.run_flat(number, SamplerSettings.quick(), n_runs=1) for number in range(2)]
    result = pipeline_nulls.statistics(found)
    assert result["rms"] < 0.15  # one quick run has errors of some 0.05, the library of 0.03
    assert result["largest_p_ratio"] < 1.6
    for record in found:
        for name in pipeline_nulls.SPECIES:
            assert record["own_quoted"][name] >= record["own_flat"][name]


def test_pipeline_statistics_notice_an_offset():
    """ln B that are too large by 3 give p that are not uniform."""
    draws = pipeline_nulls.bench().reference["flat"].ln_b[:60, 0]
    found = [
        {
            "sampled": dict(zip(pipeline_nulls.SPECIES, row + 3.0, strict=True)),
            "library": dict(zip(pipeline_nulls.SPECIES, row, strict=True)),
            "own_flat": dict.fromkeys(pipeline_nulls.SPECIES, 0.5),
            "own_quoted": dict.fromkeys(pipeline_nulls.SPECIES, 0.5),
        }
        for row in draws
    ]
    result = pipeline_nulls.statistics(found)
    assert result["mean"] == pytest.approx(3.0)
    assert max(result["p_ks"].values()) < 1e-6
