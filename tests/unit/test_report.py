import dataclasses
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from synthetic import (
    BANDS_UM,
    LN_EVIDENCE_LEVEL,
    check_result,
    false_alarms_record,
    rival_record,
    sensitivity_record,
    spectrum_record,
)

from transit.report import MAX_COLUMNS, MAX_LINES, summary
from transit.report_chances import chance_lines, format_deviate, format_p
from transit.thresholds import Thresholds

SIX = tuple(BANDS_UM)
CROWDED = {
    "H2O": 1234.5,
    "CO2": 1200.0,
    "all": 1240.4,
    "all-H2O": 1239.0,
    "all-CO2": 1238.8,
    "all-CO": 1240.4,
    "all-CH4": 1240.0,
    "all-NH3": 1240.2,
    "all-HCN": 1240.3,
}
LONG_WARNINGS = tuple(
    f"Warning {i}: this one says at some length what was odd about the fit, as real warnings do, and why."
    for i in range(15)
)


def assert_fits(text):
    lines = text.splitlines()
    assert len(lines) <= MAX_LINES
    assert max(map(len, lines)) <= MAX_COLUMNS


def test_verdict_comes_first():
    result = check_result()
    joined = " ".join(summary(result).split())
    assert joined.startswith(result.verdict.sentence)


def test_holds_what_the_numbers_rest_on():
    text = summary(check_result())
    for part in (
        "seed 1",
        "made-up.csv: 28 bins",
        "Example-1 b",
        "T_eq 1120 K",
        "H2/He background",
        "610 km",
        "180 ppm",
        "log10 VMR -12..-1",
        "H2O (asked for)",
        "Read 28 rows",
        "zero albedo",
        "ln B is not a sigma",
    ):
        assert part in text
    assert_fits(text)


def test_crowded_result_keeps_the_limits():
    result = check_result(
        SIX,
        ln_evidences=CROWDED,
        ln_evidences_inflated={"H2O": 12.0, "CO2": 11.0, "all": 12.5, "all-H2O": 12.0, "slope": 1.0},
        untested={"PH3": "no trusted table covers its bands between 1.1 and 1.7 um, only beyond them"},
        warnings=LONG_WARNINGS,
        quick=True,
    )
    text = summary(result)
    assert_fits(text)
    for species in (*SIX, "PH3"):
        assert f"\n{species} " in text
    assert "seed 1" in text
    assert "more warnings or notes: see result.json" in text
    assert "not a detected biosphere" in text
    assert "quick run: rougher" in " ".join(text.split())


def test_absurdly_long_texts_keep_the_limits():
    result = check_result(
        SIX,
        ln_evidences_inflated={},
        warnings=LONG_WARNINGS * 3,
        untested={
            f"X{i}": "an unusually wordy reason that goes on and on over the line " * 3 for i in range(12)
        },
        planet_name="A planet with a name " * 20,
    )
    verdict = dataclasses.replace(result.verdict, sentence="A sentence of many words. " * 80)
    result = dataclasses.replace(
        result,
        verdict=verdict,
        spectrum=dataclasses.replace(result.spectrum, source="/a/b" * 100),
        scale_height_ppm=1.23456e7,
    )
    assert_fits(summary(result))


def test_counts_the_notes_that_were_cut():
    texts = tuple(f"Warning number {i}." for i in range(60))
    text = summary(check_result(warnings=texts))
    shown = sum(line.startswith("Warning  Warning number") for line in text.splitlines())
    # Two notes, of the reader and of the system file, follow the warnings.
    assert f"... {62 - shown} more warnings or notes" in text
    assert_fits(text)


def test_tells_by_how_much_errors_grew():
    assert "times 1.40 (1.20..1.70) in the inflated fit of H2O" in summary(
        check_result(ln_evidences_inflated={"H2O": 6.0})
    )


def test_short_result_cuts_nothing():
    assert "more" not in summary(check_result())


@pytest.mark.parametrize("inflated", [None, {"H2O": 6.0}])
def test_table_names_a_column_for_every_value(inflated):
    text = summary(check_result(("H2O", "CO2"), ln_evidences_inflated=inflated))
    assert "left out" in text
    assert ("inflated" in text) == (inflated is not None)


def test_flat_result_warns_against_reading_absence():
    text = summary(check_result(ln_evidences={"H2O": -0.4}))
    assert "Not shown is not the same as absent" in text
    assert "biosphere" not in text


def test_result_without_species():
    text = summary(check_result((), untested={"PH3": "no table"}))
    assert "untested" in text
    assert_fits(text)


def test_tiny_p_values_and_huge_evidences_keep_their_columns():
    result = check_result(SIX, ln_evidences={"H2O": 1e6}, ln_evidences_inflated={"H2O": 1e5})
    fits = tuple(
        dataclasses.replace(fit, p_chi2=0.0, chi2=123456.7, ln_evidence=-1234567.9) for fit in result.fits
    )
    text = summary(dataclasses.replace(result, fits=fits))
    assert "<1e-99" in text
    assert_fits(text)


def test_parts_of_a_spectrum_are_counted():
    spectrum = spectrum_record(wide_points_um=((3.6, 0.4), (4.5, 0.5)))
    assert "3 parts" in summary(check_result(spectrum=spectrum))


@pytest.mark.parametrize(
    ("priors", "text"),
    [
        ({"log10_vmr_species": [["CO2", -12, -3]]}, "log10_vmr_species CO2 -12 -3"),
        ({"radius_fraction": 0.2}, "radius +-fraction 0.2"),
        ({"temperature_k": None, "haze_exponent": (-8, 0)}, "Priors   haze exponent -8..0"),
    ],
)
def test_priors_in_compact_form(priors, text):
    result = check_result()
    assert text in summary(dataclasses.replace(result, settings=result.settings | {"priors": priors}))


def test_same_result_same_text():
    assert summary(check_result(SIX)) == summary(check_result(SIX))


# --- chances, rivals and sensitivity


def with_chances(species=("H2O",), **options):
    """A result with every kind of number that the second table holds."""
    level = LN_EVIDENCE_LEVEL
    options = {
        "rivals": (
            rival_record("star", level + 3.2),
            rival_record("bump", level + 8.5, counts={"H2O": False}),
        ),
        "false_alarms": false_alarms_record(
            dict.fromkeys(species, 3.1e-5), 6.2e-5, dict.fromkeys(species, 0.021)
        ),
        "sensitivity": dict.fromkeys(species, sensitivity_record(1.2)),
    } | options
    return check_result(species, **options)


def cells(text, label):
    """Cells of the row of the second table that begins with a label."""
    table = text[text.index("noise  ") :]
    return re.search(rf"^{label} .*$", table, re.MULTILINE)[0].split()


def test_second_table_holds_every_number():
    text = summary(with_chances())
    assert_fits(text)
    # The normal deviate with an upper tail of 3.1e-5 is 4.006 (scipy.stats.norm.isf).
    assert cells(text, "H2O") == ["H2O", "3.1e-5", "4.0", "6.2e-5", "-", "star", "5.80+-0.04", "1.2", "H"]
    assert cells(text, "feature") == ["feature", "-", "-", "6.2e-5", "-", "star", "5.80+-0.04", "-"]
    assert "one-sided normal deviate of that p, never of ln B" in text


def test_p_left_out_has_a_column_of_its_own():
    result = with_chances(("H2O", "CO2"), ln_evidences={"H2O": 9.0, "all": 14.0, "CO2": 1.0})
    row = cells(summary(result), "CO2")
    assert row[1:5] == ["3.1e-5", "4.0", "6.2e-5", "0.021"]


def test_no_p_stands_in_the_column_of_ln_b():
    result = with_chances(("H2O", "CO2"))
    text = summary(result)
    first_table = text[text.index("ln B   ") : text.index("noise  ")]
    assert "e-" not in first_table
    assert "sigma" not in first_table


def test_scale_of_p_is_read_off_the_table():
    # The made-up table is p = exp(-1.5 ln B) / 10.
    expected = ", ".join(
        f"{b:g}: {0.1 * np.exp(-1.5 * b):.0e}".replace("e-0", "e-") for b in (1.0, 2.5, 5.0, 8.0)
    )
    assert f"ln B -> p, this spectrum only, best of 1: {expected}" in summary(with_chances())


def test_scale_of_p_leaves_out_what_was_not_simulated():
    alarms = false_alarms_record({"H2O": 1e-3}, 1e-3)
    short = dataclasses.replace(
        alarms,
        ln_bayes_factor=alarms.ln_bayes_factor[:4],
        p_best_of_n=alarms.p_best_of_n[:4],
        smallest_p=1e-3,
    )
    line = chance_lines(with_chances(false_alarms=short))[-1]
    assert line.endswith("best of 1: 1: 2e-2, 2.5: 2e-3, 5: <1e-3")


@pytest.mark.parametrize(
    ("p", "text", "deviate"),
    [
        (0.5, "0.5", "<0"),
        (1.0, "1", "<0"),
        (0.0228, "0.023", "2.0"),  # one-sided tails of the normal: Abramowitz & Stegun 1964, table 26.5
        (1.35e-3, "1.4e-3", "3.0"),
        (2.87e-7, "2.9e-7", "5.0"),
        (9e-9, "<1e-8", ">5.6"),
        (0.0, "<1e-8", ">5.6"),
        (None, "-", "-"),
        (float("nan"), "-", "-"),
    ],
)
def test_text_of_p_and_of_its_deviate(p, text, deviate):
    assert format_p(p, 1e-8) == text
    assert format_deviate(p, 1e-8) == deviate


def test_inflated_errors_of_the_simulation_are_said():
    alarms = false_alarms_record({"H2O": 1e-3}, 1e-3, error_factor=1.4)
    text = summary(with_chances(false_alarms=alarms))
    assert "errors taken times 1.40" in text
    assert_fits(text)


def test_closest_rival_that_counts_is_shown():
    level = LN_EVIDENCE_LEVEL
    rivals = (
        rival_record("step", level + 2.0),
        rival_record("one-bin", level + 4.0),
        rival_record("bump", level + 8.9, counts={"H2O": False}),
    )
    assert cells(summary(with_chances(rivals=rivals)), "H2O")[5:7] == ["one-bin", "5.00+-0.04"]


def test_species_out_of_reach_shows_the_largest_tried():
    result = with_chances(ln_evidences={}, sensitivity={"H2O": sensitivity_record(None)})
    assert cells(summary(result), "H2O")[-2:] == [">12", "H"]


def test_second_table_only_where_there_is_something_to_say():
    assert chance_lines(check_result()) == []
    assert (
        chance_lines(check_result((), untested={"PH3": "no table"}, rivals=(rival_record("star", 200.0),)))
        == []
    )
    only_sensitivity = chance_lines(check_result(sensitivity={"H2O": sensitivity_record(1.2)}))
    assert only_sensitivity[-1].endswith("1.2 H")


def test_six_species_keep_every_row_of_both_tables():
    text = summary(
        with_chances(
            SIX,
            ln_evidences=CROWDED,
            ln_evidences_inflated={"H2O": 12.0, "CO2": 11.0, "all": 12.5, "all-H2O": 12.0, "slope": 1.0},
            untested={"PH3": "no trusted table covers its bands between 1.1 and 1.7 um, only beyond them"},
            warnings=LONG_WARNINGS,
        )
    )
    assert_fits(text)
    for species in SIX:
        assert len(re.findall(rf"^{species} ", text, re.MULTILINE)) == 2
    assert "ln B -> p, this spectrum only, best of 6" in text
    assert "seed 1" in text
    assert re.search(r"\.\.\. \d+ more warnings or notes: see result\.json", text)


def test_huge_numbers_keep_their_columns():
    rivals = (rival_record("star", -1234567.8, species="H2O", ln_evidence_err=12.3),)
    result = with_chances(("H2O", "CO2"), ln_evidences={"all": 1e6, "H2O": 9e5}, rivals=rivals)
    assert_fits(summary(result))


def test_quick_run_says_what_it_skipped():
    text = summary(
        check_result(quick=True, skipped=("star and atmosphere together.", "one seed in place of two"))
    )
    assert "Skipped  star and atmosphere together; one seed in place of two" in text
    assert "Skipped" not in summary(check_result())


def test_only_priors_in_use_are_listed():
    result = check_result(rivals=(rival_record("one-bin", LN_EVIDENCE_LEVEL),))
    priors = {"outlier_ppm": 500.0, "spot_fraction": [0.0, 0.5], "cloud_fraction": [0.0, 1.0]}
    result = dataclasses.replace(result, settings=result.settings | {"priors": priors})
    text = " ".join(summary(result).split())
    assert "bad bin/ppm, normal, sd 500" in text
    assert "spots" not in text
    assert "deck over limb" not in text
    patchy = dataclasses.replace(result, settings=result.settings | {"nuisances": {"patchy": True}})
    assert "deck over limb 0..1" in summary(patchy)


def test_confounded_is_not_called_a_detection():
    text = summary(check_result(rivals=(rival_record("star", LN_EVIDENCE_LEVEL + 8.5),)))
    assert "What is confounded is not a detected molecule" in text
    assert "biosphere" not in text


def test_numbers_never_step_over_a_threshold_of_the_system():
    text = summary(check_result(ln_evidences={"H2O": 6.996}, thresholds=Thresholds(present_ln_b=7.0)))
    assert "6.996+-0.04" in text
    assert "hint" in text


@settings(max_examples=40, deadline=None)
@given(
    n_species=st.integers(1, 6),
    values=st.lists(st.floats(-50.0, 3000.0), min_size=9, max_size=9),
    grown=st.booleans(),
    rival=st.floats(-3000.0, 3000.0),
    p=st.floats(0.0, 1.0) | st.just(float("nan")),
    amplitude=st.none() | st.floats(0.05, 40.0),
    n_warnings=st.integers(0, 6),
    quick=st.booleans(),
)
def test_limits_hold_whatever_the_numbers(n_species, values, grown, rival, p, amplitude, n_warnings, quick):
    species = SIX[:n_species]
    names = (*species, "all", *(f"all-{x}" for x in species))
    ln_evidences = dict(zip(names, (*values, *values), strict=False))
    rivals = [rival_record(name, LN_EVIDENCE_LEVEL + rival) for name in ("star", "step", "one-bin")]
    if n_species > 1:
        rivals += [rival_record("one-bin", LN_EVIDENCE_LEVEL + rival, species=x) for x in species]
    text = summary(
        with_chances(
            species,
            ln_evidences=ln_evidences,
            ln_evidences_inflated={} if grown else None,
            rivals=tuple(rivals),
            false_alarms=false_alarms_record(dict.fromkeys(species, p), p, dict.fromkeys(species, p)),
            sensitivity=dict.fromkeys(species, sensitivity_record(amplitude)),
            warnings=LONG_WARNINGS[:n_warnings],
            quick=quick,
            skipped=("star and atmosphere together, and much else that takes its time",) * 3 if quick else (),
            star_teff_k=3200.0,
        )
    )
    assert_fits(text)
    assert "seed 1" in text
    for label in ("feature", *species):
        assert len(re.findall(rf"^{label} ", text, re.MULTILINE)) >= 2
