import dataclasses

import pytest
from synthetic import BANDS_UM, check_result, spectrum_record

from transit.report import MAX_COLUMNS, MAX_LINES, summary

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
