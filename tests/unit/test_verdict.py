import dataclasses
import math

import numpy as np
import pytest
from synthetic import fit_record, fits_from

from transit.verdict import (
    alone_against_best_null,
    best_model,
    best_null,
    build_comparisons,
    format_ln_b,
    judge,
    word_for,
)

ONE, TWO, THREE = ("H2O",), ("H2O", "CO2"), ("H2O", "CO2", "CH4")


def verdict_of(species, ln_evidences, ln_evidences_inflated=None, untested=None, **options):
    fits = fits_from(ln_evidences, species, **options)
    grown = () if ln_evidences_inflated is None else fits_from(ln_evidences_inflated, species)
    comparisons = build_comparisons(fits, grown, species)
    return judge(comparisons, species, untested or {}, fits, grown)


def pick(comparisons, kind, species=None, against=None):
    return next(
        c
        for c in comparisons
        if c.kind == kind and c.species == species and (against is None or c.against == against)
    )


# --- single words


@pytest.mark.parametrize(
    ("ln_b", "err", "word"),
    [
        (5.0, 0.0, "present"),
        (4.999, 0.0, "hint"),
        (2.5, 0.0, "hint"),
        (2.499, 0.0, "not shown"),
        (-40.0, 0.0, "not shown"),
        (4.9, 0.3, "hint"),  # an error at the limit is still accepted
        (4.9, 0.31, "untested"),
        (5.2, 0.31, "untested"),
        (3.7, 0.9, "hint"),  # large, but no threshold within reach
        (-10.0, 3.0, "not shown"),
        (300.0, 5.0, "present"),
        (math.nan, 0.1, "untested"),
        (9.0, math.nan, "untested"),
    ],
)
def test_word_for(ln_b, err, word):
    assert word_for(ln_b, err) == word


@pytest.mark.parametrize(
    ("ln_b", "text"), [(3.14159, "3.1"), (4.98, "4.98"), (2.4999, "2.4999"), (-0.04, "0.0"), (5.0, "5.0")]
)
def test_text_never_steps_over_a_threshold(ln_b, text):
    assert format_ln_b(ln_b) == text
    assert word_for(float(text)) == word_for(ln_b)


# --- comparisons


def test_one_species_has_no_left_out():
    comparisons = build_comparisons(fits_from({"H2O": 3.0, "slope": 1.0}, ONE), (), ONE)
    assert [c.kind for c in comparisons] == ["alone"] * 3 + ["feature"]
    assert [c.against for c in comparisons if c.best_null] == ["slope", "slope"]
    assert pick(comparisons, "alone", "H2O", "flat").ln_bayes_factor == pytest.approx(3.0)
    assert pick(comparisons, "feature").ln_bayes_factor == pytest.approx(2.0)
    assert pick(comparisons, "alone", "H2O", "flat").ln_bayes_factor_err == pytest.approx(0.03 * math.sqrt(2))


def test_two_species_use_the_other_ones_fit():
    fits = fits_from({"H2O": 8.0, "CO2": 1.0, "all": 7.5}, TWO)
    assert "all-H2O" not in {fit.name for fit in fits}
    left_out = pick(build_comparisons(fits, (), TWO), "left_out", "H2O")
    assert left_out.against == "all-H2O"
    assert left_out.ln_bayes_factor == pytest.approx(6.5)


def test_three_species_need_their_own_left_out_fits():
    fits = [fit for fit in fits_from({}, THREE) if fit.name != "all-H2O"]
    with pytest.raises(KeyError):
        build_comparisons(fits, (), THREE)


def test_feature_is_the_mean_evidence():
    values = {"H2O": 700.0, "CO2": 698.0, "all": 701.0, "flat": 1.0, "slope": -2.0}
    feature = pick(build_comparisons(fits_from(values, TWO), (), TWO), "feature")
    expected = 700 + math.log((math.exp(0) + math.exp(-2) + math.exp(1)) / 3) - 1.0
    shares = np.exp([0.0, -2.0, 1.0]) / np.exp([0.0, -2.0, 1.0]).sum()
    assert feature.ln_bayes_factor == pytest.approx(expected, abs=1e-9)
    assert feature.ln_bayes_factor_err == pytest.approx(0.03 * math.sqrt(1 + np.sum(shares**2)))
    assert feature.model == "mean"
    assert feature.against == "flat"


def test_feature_survives_evidences_beyond_an_exponential():
    feature = pick(build_comparisons(fits_from({"H2O": 1e5, "CO2": -1e5}, TWO), (), TWO), "feature")
    assert feature.ln_bayes_factor == pytest.approx(1e5 - math.log(3))


def test_delta_chi2_is_the_gain_of_the_model():
    flat = fit_record("flat", (), 0.0, chi2=60.0)
    water = fit_record("H2O", ("H2O",), 9.0, chi2=31.0)
    comparisons = build_comparisons([flat, water], (), ONE)
    assert [c.delta_chi2 for c in comparisons] == [29.0, 29.0]


def test_inflated_values_compare_the_same_hypotheses():
    fits = fits_from({"H2O": 100.0, "slope": 20.0}, ONE)
    grown = fits_from({"H2O": 12.0, "continuum": 9.0}, ONE)
    comparisons = build_comparisons(fits, grown, ONE)
    assert pick(comparisons, "alone", "H2O", "slope").ln_bayes_factor_inflated == pytest.approx(12.0)
    # At inflated errors the best null is another one, and it is the one that counts.
    quoted, inflated = alone_against_best_null(comparisons, "H2O")
    assert quoted[0] == pytest.approx(80.0)
    assert inflated[0] == pytest.approx(3.0)
    assert pick(comparisons, "feature").ln_bayes_factor_inflated == pytest.approx(3.0)


def test_no_species_leaves_nothing_to_compare():
    fits = fits_from({}, ())
    assert build_comparisons(fits, (), ()) == ()
    assert best_model(fits) is None
    assert best_null(fits).name == "flat"


# --- verdicts


def test_single_species_is_judged_against_the_best_null():
    assert verdict_of(ONE, {"H2O": 6.0}).species == {"H2O": "present"}
    verdict = verdict_of(ONE, {"H2O": 6.0, "slope": 5.0})
    assert (verdict.feature, verdict.species) == ("not shown", {"H2O": "not shown"})


def test_needed_species_is_present():
    values = {"H2O": 20.0, "all": 21.0, "all-H2O": 3.0, "all-CO2": 21.0, "all-CH4": 18.3}
    verdict = verdict_of(THREE, values)
    assert verdict.species == {"H2O": "present", "CO2": "not shown", "CH4": "hint"}
    assert "H2O (ln B 18.0) is present" in verdict.sentence
    assert "CH4 (ln B 2.7) is hinted at" in verdict.sentence
    assert "CO2 is not shown" in verdict.sentence


def test_species_that_can_replace_each_other_are_interchangeable():
    values = {"H2O": 9.0, "CH4": 8.0, "all": 9.0, "all-H2O": 8.5, "all-CO2": 9.1, "all-CH4": 9.0}
    verdict = verdict_of(THREE, values)
    assert verdict.feature == "present"
    assert verdict.species == {"H2O": "interchangeable", "CO2": "not shown", "CH4": "interchangeable"}
    assert "H2O (ln B 9.0) and CH4 (ln B 8.0) are interchangeable" in verdict.sentence


def test_inflated_errors_can_take_interchangeability_away():
    values = {"H2O": 9.0, "CH4": 8.0, "all": 9.0, "all-H2O": 8.5, "all-CO2": 9.1, "all-CH4": 9.0}
    grown = values | {"CH4": 2.0}
    assert verdict_of(THREE, values, grown).species["CH4"] == "not shown"


def test_feature_that_no_species_explains_alone():
    values = {"all": 9.0, "all-H2O": 8.5, "all-CO2": 8.9, "all-CH4": 8.7}
    verdict = verdict_of(THREE, values)
    assert set(verdict.species.values()) == {"not shown"}
    assert "none explains it alone" in verdict.sentence


def test_no_species_outranks_the_feature():
    # Leaving H2O out costs 6, yet the mean evidence over all hypotheses is only a hint.
    values = {"H2O": 4.0, "all": 5.0, "all-H2O": -1.0, "all-CO2": 4.5, "all-CH4": 4.5}
    verdict = verdict_of(THREE, values)
    assert verdict.feature == "hint"
    assert verdict.species["H2O"] == "hint"
    assert "H2O (ln B 6.0) would rate higher" in verdict.sentence


def test_words_follow_the_smaller_of_quoted_and_inflated():
    verdict = verdict_of(ONE, {"H2O": 300.0}, {"H2O": 3.0})
    assert (verdict.feature, verdict.species["H2O"]) == ("hint", "hint")
    assert "3.0 with inflated errors, 300.0 as quoted" in verdict.sentence
    assert verdict_of(ONE, {"H2O": 3.0}, {"H2O": 300.0}).feature == "hint"


def test_too_uncertain_is_untested():
    verdict = verdict_of(ONE, {"H2O": 5.1}, ln_evidence_err=0.4)
    assert (verdict.feature, verdict.species["H2O"]) == ("untested", "untested")
    assert "too uncertain" in verdict.sentence
    assert "H2O (ln B 5.1 +- 0.6) is untested" in verdict.sentence
    assert verdict_of(ONE, {"H2O": 50.0}, ln_evidence_err=0.4).feature == "present"


def test_untested_species_are_listed_and_take_no_part():
    verdict = verdict_of(ONE, {"H2O": 9.0}, untested={"PH3": "No table covers its bands."})
    assert verdict.species == {"H2O": "present", "PH3": "untested"}
    assert "PH3 is untested" in verdict.sentence


def test_nothing_tested_at_all():
    verdict = verdict_of((), {}, untested={"PH3": "No table covers its bands."})
    assert (verdict.feature, verdict.species) == ("untested", {"PH3": "untested"})
    assert "no species asked for has a trusted table" in verdict.sentence
    # A fit with a table that is not trusted decides nothing.
    verdict = verdict_of(ONE, {"H2O": 50.0}, untested={"H2O": "Its table is not trusted."})
    assert (verdict.feature, verdict.species) == ("untested", {"H2O": "untested"})


def test_flat_spectrum_claims_nothing():
    verdict = verdict_of(THREE, {"H2O": -0.5, "CO2": -0.3, "all": -1.0})
    assert verdict.feature == "not shown"
    assert set(verdict.species.values()) == {"not shown"}
    assert "prefers" not in verdict.sentence


def test_slope_over_flat_is_said():
    verdict = verdict_of(ONE, {"slope": 3.1, "H2O": 2.0})
    assert "The spectrum prefers a straight slope over a flat line (ln B 3.1)." in verdict.sentence
    assert "prefers" not in verdict_of(ONE, {"slope": 2.4}).sentence
    assert "prefers" not in verdict_of(ONE, {"slope": 30.0}, {"slope": 1.0}).sentence
    assert "prefers a haze continuum" in verdict_of((), {"continuum": 4.0, "slope": 3.0}).sentence


def test_fit_that_did_not_converge_is_in_the_sentence():
    fits = list(fits_from({"H2O": 9.0, "all": 9.0}, THREE))
    sampling = fits[-1].sampling | {"converged": False}
    fits[-1] = dataclasses.replace(fits[-1], sampling=sampling)
    comparisons = build_comparisons(fits, (), THREE)
    assert "all-CH4 did not converge" in judge(comparisons, THREE, {}, fits).sentence
    assert "converge" not in verdict_of(THREE, {"H2O": 9.0, "all": 9.0}).sentence


def test_fit_that_decides_nothing_is_left_out_of_the_sentence():
    fits = list(fits_from({"H2O": 90.0, "all": 90.0, "all-CO2": 90.0, "all-CH4": 90.0}, THREE))
    index = next(i for i, fit in enumerate(fits) if fit.name == "CO2")
    fits[index] = dataclasses.replace(fits[index], sampling={"converged": False})
    comparisons = build_comparisons(fits, (), THREE)
    assert "converge" not in judge(comparisons, THREE, {}, fits).sentence


def test_convergence_of_inflated_fits_counts_too():
    fits, grown = fits_from({"H2O": 9.0}, ONE), fits_from({"H2O": 8.0}, ONE, converged=False)
    sentence = judge(build_comparisons(fits, grown, ONE), ONE, {}, fits, grown).sentence
    assert "H2O" in sentence.split("The fits")[1]


@pytest.mark.parametrize("values", [{"H2O": 9.0}, {"slope": 4.0}, {"H2O": 3.0}])
def test_sentence_never_speaks_of_sigma(values):
    sentence = verdict_of(ONE, values, {"H2O": 2.7}).sentence
    assert "sigma" not in sentence
    assert "σ" not in sentence


def test_doubtful_fit_far_from_every_threshold_is_called_harmless():
    """A fit without convergence is named all the same, but does not make clear words provisional."""
    fits = list(
        fits_from({"H2O": 90.0, "all": 900.0, "all-H2O": 100.0, "all-CO2": 800.0, "all-CH4": 800.0}, THREE)
    )
    index = next(i for i, fit in enumerate(fits) if fit.name == "all-H2O")
    fits[index] = dataclasses.replace(fits[index], sampling={"converged": False})
    sentence = judge(build_comparisons(fits, (), THREE), THREE, {}, fits).sentence
    assert "all-H2O did not converge, but every word" in sentence
    assert "provisional" not in sentence
