import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from synthetic import PHRASES, false_alarms_record, fit_record, fits_from, rival_record, sensitivity_record

from transit.thresholds import Thresholds
from transit.verdict import (
    alone_against_best_null,
    best_model,
    best_null,
    build_comparisons,
    competitors,
    format_ln_b,
    judge,
    word_for,
)

ONE, TWO, THREE = ("H2O",), ("H2O", "CO2"), ("H2O", "CO2", "CH4")


NEEDED = {"H2O": 20.0, "all": 21.0, "all-H2O": 3.0, "all-CO2": 21.0, "all-CH4": 21.0}
SPARED = {"H2O": 9.0, "CH4": 8.0, "all": 9.0, "all-H2O": 8.5, "all-CO2": 9.1, "all-CH4": 9.0}


def verdict_of(
    species,
    ln_evidences,
    ln_evidences_inflated=None,
    untested=None,
    rivals=(),
    with_star=(),
    judging=None,
    **options,
):
    fits = fits_from(ln_evidences, species, **options)
    grown = () if ln_evidences_inflated is None else fits_from(ln_evidences_inflated, species, inflated=True)
    comparisons = build_comparisons(fits, grown, species, rivals, with_star=with_star)
    return judge(comparisons, species, untested or {}, fits, grown, rivals=rivals, **(judging or {}))


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


# --- thresholds of one's own


def test_words_follow_the_thresholds_given():
    thresholds = Thresholds(present_ln_b=11.0, hint_ln_b=4.0)
    assert [word_for(x, 0.0, thresholds) for x in (3.99, 4.0, 10.99, 11.0)] == [
        "not shown", "hint", "hint", "present",
    ]  # fmt: skip
    verdict = verdict_of(ONE, {"H2O": 6.0}, judging={"thresholds": thresholds})
    assert (verdict.feature, verdict.species["H2O"]) == ("hint", "hint")
    assert format_ln_b(3.99, 1, thresholds) == "3.99"
    assert format_ln_b(3.49, 0, Thresholds(rival_ln_b=3.2)) == "3.5"
    assert word_for(4.9, 0.5, Thresholds(largest_ln_b_err=0.6)) == "hint"


# --- rivals


def test_rival_meets_the_best_hypothesis_with_the_species():
    fits = fits_from({"H2O": 8.0, "CO2": 1.0, "all": 9.5}, TWO)
    grown = fits_from({"H2O": 5.0, "all": 4.0}, TWO, inflated=True)
    rivals = (rival_record("star", 6.0, 3.5, chi2=40.0), rival_record("one-bin", 1.0))
    comparisons = build_comparisons(fits, grown, TWO, rivals)
    star = pick(comparisons, "rival", "H2O", "star")
    assert (star.model, star.counts, star.best_null) == ("all", True, False)
    assert star.ln_bayes_factor == pytest.approx(3.5)
    assert star.ln_bayes_factor_err == pytest.approx(0.03 * math.sqrt(2))
    assert star.delta_chi2 == pytest.approx(15.0)
    # Once errors are free to grow another hypothesis with H2O is the best.
    assert star.ln_bayes_factor_inflated == pytest.approx(1.5)
    assert pick(comparisons, "rival", "H2O", "one-bin").ln_bayes_factor_inflated is None
    assert math.isnan(pick(comparisons, "rival", "H2O", "one-bin").delta_chi2)
    assert pick(comparisons, "rival", None, "star").ln_bayes_factor == pytest.approx(3.5)


def test_rival_on_the_other_species_meets_all():
    fits = fits_from({"H2O": 30.0, "all": 21.0, "all-H2O": 3.0}, THREE)
    comparisons = build_comparisons(fits, (), THREE, (rival_record("star", 20.0, species="H2O"),))
    rivals = [c for c in comparisons if c.kind == "rival"]
    assert [(c.species, c.model, c.against) for c in rivals] == [("H2O", "all", "all-H2O+star")]
    assert rivals[0].ln_bayes_factor == pytest.approx(1.0)


def test_spotted_star_does_not_exclude_an_atmosphere():
    rivals = (rival_record("star", 40.0),)
    assert verdict_of(ONE, {"H2O": 30.0}, rivals=rivals).species["H2O"] == "confounded"
    both = fit_record("star+H2O", ("H2O",), 60.0)
    assert verdict_of(ONE, {"H2O": 30.0}, rivals=rivals, with_star=(both,)).species["H2O"] == "present"


def test_bump_counts_against_the_feature_only_outside_every_band():
    for counts, expected in (({"H2O": True, "CO2": False}, False), ({"H2O": True, "CO2": True}, True)):
        rivals = (rival_record("bump", 9.0, counts=counts),)
        comparisons = build_comparisons(fits_from({"all": 9.5}, TWO), (), TWO, rivals)
        assert pick(comparisons, "rival", None).counts is expected
        assert pick(comparisons, "rival", "CO2").counts is counts["CO2"]


@pytest.mark.parametrize(
    ("rival", "inflated", "word"),
    [
        (6.5, None, "present"),  # ln B over it is exactly the 2.5 needed
        (6.51, None, "confounded"),
        (20.0, None, "confounded"),
        (0.0, {"H2O": 7.0, "rival": 5.0}, "confounded"),  # beaten at quoted errors only
        (0.0, {"H2O": 7.0, "rival": 4.0}, "present"),
        (math.nan, None, "confounded"),  # a rival without a value is not beaten
        (0.0, {"H2O": 7.0, "rival": math.nan}, "confounded"),
    ],
)
def test_rival_that_is_not_beaten_confounds(rival, inflated, word):
    rivals = (rival_record("star", rival, None if inflated is None else inflated["rival"]),)
    verdict = verdict_of(ONE, {"H2O": 9.0}, inflated, rivals=rivals)
    assert (verdict.feature, verdict.species["H2O"]) == (word, word)


def test_uncertain_rival_is_not_beaten():
    for err, word in ((0.25, "present"), (0.6, "confounded")):
        rivals = (rival_record("star", 6.1, ln_evidence_err=err),)
        assert verdict_of(ONE, {"H2O": 9.0}, rivals=rivals).species["H2O"] == word


def test_rival_threshold_is_settable():
    rivals = (rival_record("star", 8.0),)
    judging = {"thresholds": Thresholds(rival_ln_b=0.5)}
    assert verdict_of(ONE, {"H2O": 9.0}, rivals=rivals, judging=judging).species["H2O"] == "present"


def test_bump_inside_the_bands_does_not_confound():
    rivals = (rival_record("bump", 12.0, counts={"H2O": False}),)
    verdict = verdict_of(ONE, {"H2O": 9.0}, rivals=rivals)
    assert (verdict.feature, verdict.species["H2O"]) == ("present", "present")
    assert PHRASES["bump"] not in verdict.sentence


def test_rival_that_counts_against_one_species_leaves_the_feature():
    rivals = (rival_record("bump", 19.5, counts={"H2O": True, "CO2": False, "CH4": True}),)
    verdict = verdict_of(THREE, NEEDED, rivals=rivals)
    assert (verdict.feature, verdict.species["H2O"]) == ("present", "confounded")


def test_needed_species_must_beat_rivals_on_the_nulls_and_on_the_others():
    beaten = (rival_record("star", 1.0), rival_record("star", 10.0, species="H2O"))
    assert verdict_of(THREE, NEEDED, rivals=beaten).species["H2O"] == "present"
    on_others = (rival_record("star", 1.0), rival_record("star", 20.0, species="H2O"))
    verdict = verdict_of(THREE, NEEDED, rivals=on_others)
    assert (verdict.feature, verdict.species["H2O"]) == ("present", "confounded")
    assert f"the other species with {PHRASES['star']} explain the spectrum as well" in verdict.sentence
    on_nulls = (rival_record("star", 20.0), rival_record("star", 10.0, species="H2O"))
    assert verdict_of(THREE, NEEDED, rivals=on_nulls).species["H2O"] == "confounded"


def test_species_that_can_be_spared_meets_the_rivals_on_the_nulls_alone():
    # Beside the others a rival always does as well as a species that is not needed: that says nothing against it.
    rivals = (rival_record("star", 1.0), rival_record("star", 9.0, species="H2O"))
    verdict = verdict_of(THREE, SPARED, rivals=rivals)
    assert verdict.species["H2O"] == "interchangeable"
    fits = fits_from(SPARED, THREE)
    comparisons = build_comparisons(fits, (), THREE, rivals)
    assert [c.against for c in competitors(comparisons, "H2O")] == ["star"]
    rivals = (rival_record("star", 8.0),)
    verdict = verdict_of(THREE, SPARED, rivals=rivals)
    assert verdict.species == {"H2O": "confounded", "CO2": "not shown", "CH4": "confounded"}
    assert verdict.feature == "confounded"
    assert "H2O and CH4 are confounded" in verdict.sentence


def test_what_is_not_shown_is_not_confounded():
    verdict = verdict_of(ONE, {"H2O": 1.0}, rivals=(rival_record("star", 5.0),))
    assert (verdict.feature, verdict.species["H2O"]) == ("not shown", "not shown")


def test_sentence_names_the_confounding_rival():
    rivals = (rival_record("star", 8.2), rival_record("one-bin", 7.0), rival_record("step", 1.0))
    sentence = verdict_of(ONE, {"H2O": 9.0}, rivals=rivals).sentence
    assert sentence.startswith("A feature is confounded")
    assert (
        f"H2O is confounded: {PHRASES['star']} explain the spectrum as well (ln B 0.8 in favour of H2O; 2.5 in "
        f"favour needed); {PHRASES['one-bin']} is not beaten either."
    ) in sentence
    assert "step" not in sentence
    better = verdict_of(ONE, {"H2O": 9.0}, rivals=(rival_record("one-bin", 12.0),)).sentence
    assert f"{PHRASES['one-bin']} explains the spectrum better (ln B 3.0 against H2O" in better


def test_confounded_feature_that_no_species_explains_alone_names_its_rival():
    values = {"all": 9.0, "all-H2O": 8.5, "all-CO2": 8.9, "all-CH4": 8.7}
    verdict = verdict_of(THREE, values, rivals=(rival_record("star", 8.0),))
    assert (verdict.feature, set(verdict.species.values())) == ("confounded", {"not shown"})
    assert f"The feature is confounded: {PHRASES['star']} explain" in verdict.sentence
    assert "ln B 1.0 in favour of absorbers" in verdict.sentence


def test_doubtful_fit_near_the_threshold_of_a_rival_is_provisional():
    fits = fits_from({"H2O": 90.0}, ONE)
    fits = tuple(
        dataclasses.replace(fit, sampling={"converged": False}) if fit.name == "H2O" else fit for fit in fits
    )
    for ln_evidence, provisional in ((20.0, False), (80.0, True)):
        rivals = (rival_record("star", ln_evidence),)
        verdict = judge(build_comparisons(fits, (), ONE, rivals), ONE, {}, fits, rivals=rivals)
        assert verdict.species["H2O"] == "present"
        assert ("provisional" in verdict.sentence) is provisional


def test_rival_of_a_species_that_is_not_shown_makes_nothing_provisional():
    fits = fits_from({"H2O": -40.0}, ONE)
    rivals = (rival_record("star", -45.0),)
    fits = tuple(dataclasses.replace(fit, sampling={"converged": not fit.species}) for fit in fits)
    verdict = judge(build_comparisons(fits, (), ONE, rivals), ONE, {}, fits, rivals=rivals)
    assert verdict.species["H2O"] == "not shown"
    assert "The fit H2O did not converge, but every word that rests on it" in verdict.sentence


# --- what else explains a spectrum in which nothing is shown


def test_rival_that_does_as_well_as_any_absorber_is_named():
    rivals = (rival_record("star", 2.1), rival_record("step", 0.5), rival_record("bump", -1.0))
    sentence = verdict_of(ONE, {"H2O": 2.0}, rivals=rivals).sentence
    assert "Unocculted spots or faculae of the star explain the spectrum as well as any absorber" in sentence
    assert "(ln B 2.1 over a flat line)" in sentence
    assert "step" not in sentence
    # Neither what loses to an absorber nor what loses to the flat line is worth a sentence.
    for values in ({"H2O": 2.2}, {"H2O": 2.0, "flat": 2.2}):
        assert "as well as any" not in verdict_of(ONE, values, rivals=rivals).sentence
    assert (
        "A straight slope explains the spectrum as well as any absorber"
        in verdict_of(ONE, {"slope": 1.4}).sentence
    )


def test_bump_inside_the_bands_is_no_other_explanation():
    rivals = (rival_record("bump", 2.3, counts={"H2O": False}),)
    assert "bump" not in verdict_of(ONE, {"H2O": 2.0}, rivals=rivals).sentence


def test_rival_on_the_nulls_must_bring_more_than_they_do():
    # The slope is the best null: a step that stands on it explains nothing of its own.
    values = {"slope": 2.0, "H2O": 0.5}
    assert "step" not in verdict_of(ONE, values, rivals=(rival_record("step", 1.0),)).sentence
    assert "step" in verdict_of(ONE, values, rivals=(rival_record("step", 2.2),)).sentence


@pytest.mark.parametrize(("teff_k", "said"), [(3290.0, True), (4800.0, False), (None, False)])
def test_cool_star_explains_a_flat_spectrum_too(teff_k, said):
    rivals = (rival_record("star", -0.4),)
    verdict = verdict_of(ONE, {"H2O": 1.0, "slope": -3.0}, rivals=rivals, judging={"star_teff_k": teff_k})
    words = (
        "For this cool star (3290 K) unocculted spots or faculae of the star explain the spectrum as well as any "
        "absorber (ln B -0.4 over a flat line)."
    )
    assert (words in verdict.sentence) is said
    assert "straight slope" not in verdict.sentence  # ln B -3 is further from the flat line than 2.5


def test_cool_star_is_not_named_where_absorbers_do_clearly_better():
    rivals = (rival_record("star", -0.6),)
    values = {"H2O": 2.2, "slope": -1.0}
    verdict = verdict_of(ONE, values, rivals=rivals, judging={"star_teff_k": 3290.0})
    assert verdict.feature == "not shown"
    assert "cool star" not in verdict.sentence


def test_bad_bin_is_named_where_nothing_is_shown():
    sentence = verdict_of(ONE, {"H2O": 1.0}, rivals=(rival_record("one-bin", 6.0),)).sentence
    assert "The spectrum prefers a single bad bin at 1.41 um (ln B 6.0 over none)." in sentence
    assert "as well as any" not in sentence
    assert "prefers a step at 1.40 um" in verdict_of(ONE, {}, rivals=(rival_record("step", 2.6),)).sentence
    for rival in (rival_record("one-bin", 2.4), rival_record("one-bin", 6.0, 2.0)):
        inflated = None if rival.ln_evidence_inflated is None else {}
        assert "prefers a single" not in verdict_of(ONE, {"H2O": 1.0}, inflated, rivals=(rival,)).sentence
    # On a slope that the spectrum prefers, the bad bin has to add something.
    assert "bad bin" not in verdict_of(ONE, {"slope": 9.0}, rivals=(rival_record("one-bin", 8.0),)).sentence


def test_bad_bin_beside_a_species_is_named_and_its_band_is_not():
    # Without H2O the strongest bin of its band looks bad; with it, nothing does.
    rivals = (rival_record("one-bin", 9.0), rival_record("one-bin", 9.0, species="H2O"))
    assert "bad bin" not in verdict_of(THREE, NEEDED, rivals=rivals).sentence
    best = dict(NEEDED)["all"]
    rivals = (*rivals, rival_record("one-bin", best + 4.0, base="all"))
    verdict = verdict_of(THREE, NEEDED, rivals=rivals)
    assert verdict.species["H2O"] == "present"
    assert (
        "Beside what is named, the spectrum prefers a single bad bin at 1.41 um (ln B 4.0" in verdict.sentence
    )


def test_fault_elsewhere_does_not_count_against_a_species():
    """A bad bin that the best fit wants as well leaves the species standing; one that replaces it does not."""
    best = dict(NEEDED)["all"]
    elsewhere = (
        rival_record("one-bin", best + 20.0, base="all"),
        rival_record("one-bin", best + 4.0, species="H2O"),
    )
    assert verdict_of(THREE, NEEDED, rivals=elsewhere).species["H2O"] == "present"
    instead = (
        rival_record("one-bin", best - 1.0, base="all"),
        rival_record("one-bin", best - 1.0, species="H2O"),
    )
    assert verdict_of(THREE, NEEDED, rivals=instead).species["H2O"] == "confounded"
    # For a single species the hypothesis with it and the bad bin meets the bad bin alone.
    alone = (rival_record("one-bin", 40.0), rival_record("one-bin", 52.0, base="H2O"))
    assert verdict_of(ONE, {"H2O": 20.0}, rivals=alone).species["H2O"] == "present"
    assert verdict_of(ONE, {"H2O": 20.0}, rivals=alone[:1]).species["H2O"] == "confounded"


def test_growth_of_the_errors_is_said():
    sentence = verdict_of(ONE, {"H2O": 9.0}, {"H2O": 8.0}).sentence
    assert (
        "The quoted errors look understated by a factor 1.4 (1.2-1.7), or every model here is too simple."
        in sentence
    )
    assert "understated" not in verdict_of(ONE, {"H2O": 9.0}).sentence


# --- sensitivity


@pytest.mark.parametrize(
    ("amplitude", "word"), [(1.2, "not shown"), (3.0, "not shown"), (3.01, "untested"), (None, "untested")]
)
def test_what_could_not_have_shown_is_untested(amplitude, word):
    judging = {"sensitivity": {"H2O": sensitivity_record(amplitude)}}
    verdict = verdict_of(ONE, {"H2O": 1.0}, judging=judging)
    assert (verdict.feature, verdict.species["H2O"]) == (word, word)
    assert ("could not have shown one" in verdict.sentence) is (word == "untested")


def test_sentence_says_what_would_have_shown():
    judging = {"sensitivity": {"H2O": sensitivity_record(4.2), "CO2": sensitivity_record(None)}}
    verdict = verdict_of(THREE, {}, judging=judging)
    assert verdict.species == {"H2O": "untested", "CO2": "untested", "CH4": "not shown"}
    assert verdict.feature == "not shown"
    assert (
        "H2O (would show from 4.2 scale heights) and CO2 (would not show even at 12 scale heights) are untested: out "
        "of reach of this spectrum."
    ) in verdict.sentence


def test_what_stands_is_not_asked_for_its_sensitivity():
    judging = {"sensitivity": {"H2O": sensitivity_record(None)}}
    assert verdict_of(ONE, {"H2O": 9.0}, judging=judging).species["H2O"] == "present"


def test_threshold_of_sensitivity_is_settable():
    judging = {
        "sensitivity": {"H2O": sensitivity_record(4.2)},
        "thresholds": Thresholds(sensitivity_scale_heights=5.0),
    }
    assert verdict_of(ONE, {}, judging=judging).species["H2O"] == "not shown"


# --- false alarms


def test_chances_stand_beside_the_ln_b_they_belong_to():
    alarms = false_alarms_record({"H2O": 1e-3, "CO2": 0.2}, 2e-3, {"H2O": 0.03})
    fits = fits_from({"H2O": 9.0, "slope": 1.0, "all": 8.0}, TWO)
    comparisons = build_comparisons(fits, (), TWO, (rival_record("star", 1.0),), alarms)
    alone = pick(comparisons, "alone", "H2O", "slope")
    assert (alone.p_named, alone.p_best_of_n, alone.p_err) == (1e-3, 2e-3, 5e-5)
    assert alone.p_null == {"flat": 5e-4, "slope": 1e-3}
    assert pick(comparisons, "alone", "H2O", "flat").p_named is None
    left_out = pick(comparisons, "left_out", "H2O")
    assert (left_out.p_named, left_out.p_best_of_n, left_out.p_null) == (0.03, None, {"all-H2O": 0.03})
    assert pick(comparisons, "left_out", "CO2").p_named is None
    feature = pick(comparisons, "feature")
    assert (feature.p_named, feature.p_best_of_n, feature.p_null) == (None, 2e-3, {})
    assert all(c.p_named is None for c in comparisons if c.kind == "rival")


def test_chances_change_no_word():
    fits = fits_from({"H2O": 9.0}, ONE)
    alarms = false_alarms_record({"H2O": 0.9}, 0.9)
    with_chances = judge(build_comparisons(fits, (), ONE, (), alarms), ONE, {}, fits)
    assert with_chances == judge(build_comparisons(fits, (), ONE), ONE, {}, fits)


# --- whatever the numbers

LN_EVIDENCE = st.floats(-30.0, 30.0)
NAMES = ("flat", "slope", "continuum", "H2O", "CO2", "CH4", "all", "all-H2O", "all-CO2", "all-CH4")


@settings(max_examples=200, deadline=None)
@given(
    quoted=st.fixed_dictionaries(dict.fromkeys(NAMES, LN_EVIDENCE)),
    grown=st.none() | st.fixed_dictionaries(dict.fromkeys(NAMES, LN_EVIDENCE)),
    on_nulls=st.tuples(LN_EVIDENCE, LN_EVIDENCE),
    on_others=LN_EVIDENCE,
    counts=st.booleans(),
    teff_k=st.floats(2500.0, 7000.0),
)
def test_no_claim_stands_beside_a_rival(quoted, grown, on_nulls, on_others, counts, teff_k):
    rivals = (
        rival_record("star", on_nulls[0], None if grown is None else on_nulls[1]),
        rival_record("bump", on_nulls[1], counts=dict.fromkeys(THREE, counts)),
        rival_record("star", on_others, species="H2O"),
    )
    verdict = verdict_of(THREE, quoted, grown, rivals=rivals, judging={"star_teff_k": teff_k})
    models = {"present", "hint", "interchangeable"}
    for x in THREE:
        with_x = [name for name in NAMES if x == name or (name.startswith("all") and not name.endswith(x))]
        over = [max(quoted[name] for name in with_x) - on_nulls[0]]
        if grown is not None:
            over.append(max(grown[name] for name in with_x) - on_nulls[1])
        if verdict.species[x] in models:
            assert min(over) >= 2.5
        if verdict.species[x] in {"present", "hint"} and x == "H2O":
            assert quoted["all"] - on_others >= 2.5
    if verdict.feature in {"present", "hint"} and counts:
        assert max(quoted[name] for name in NAMES[3:]) - on_nulls[1] >= 2.5
    if verdict.feature in {"not shown", "untested"}:
        assert not models & set(verdict.species.values())
    assert verdict.sentence.endswith(".")
