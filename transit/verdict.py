"""From comparisons to words: what is present, hinted at, confounded, interchangeable, not shown or untested."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from scipy.special import chdtrc

from transit import rival_sentences, sentences
from transit.comparisons import (
    alone_against_best_null,
    best_model,
    best_null,
    build_comparisons,
    deciding,
    shares,
    smaller,
    stands_on_rest,
)
from transit.records import Comparison, Fit, Rival, Sensitivity, Verdict
from transit.sentences import format_ln_b
from transit.thresholds import DEFAULT_THRESHOLDS, Thresholds

__all__ = [
    "STANDING_WORDS",
    "STANDS_FROM",
    "WORD_THRESHOLDS",
    "alone_against_best_null",
    "best_model",
    "best_null",
    "build_comparisons",
    "competitors",
    "deciding",
    "format_ln_b",
    "judge",
    "word_for",
]

PRESENT = "present"
HINT = "hint"
CONFOUNDED = "confounded"
INTERCHANGEABLE = "interchangeable"
NOT_SHOWN = "not shown"
UNTESTED = "untested"
STANDING_WORDS = (PRESENT, HINT)
STANDS_FROM = DEFAULT_THRESHOLDS.hint_ln_b
WORD_THRESHOLDS = ((DEFAULT_THRESHOLDS.present_ln_b, PRESENT), (DEFAULT_THRESHOLDS.hint_ln_b, HINT))

_RANK = {UNTESTED: 0, NOT_SHOWN: 0, HINT: 1, INTERCHANGEABLE: 1, PRESENT: 2}


def word_for(
    ln_bayes_factor: float, ln_bayes_factor_err: float = 0.0, thresholds: Thresholds = DEFAULT_THRESHOLDS
) -> str:
    """Word for one ln Bayes factor.

    Parameters
    ----------
    ln_bayes_factor, ln_bayes_factor_err : float
        Value and 1-sigma error. The error matters only when it is above `largest_ln_b_err` and a threshold lies
        within it: the word would then be a matter of luck.
    thresholds : Thresholds

    Returns
    -------
    str
        "present", "hint", "not shown" or "untested".
    """
    starts = ((thresholds.present_ln_b, PRESENT), (thresholds.hint_ln_b, HINT))
    if not math.isfinite(ln_bayes_factor) or any(
        _straddles((ln_bayes_factor, ln_bayes_factor_err), start, thresholds) for start, _ in starts
    ):
        return UNTESTED
    return next((word for start, word in starts if ln_bayes_factor >= start), NOT_SHOWN)


def judge(
    comparisons: Sequence[Comparison],
    species: Sequence[str],
    untested: Mapping[str, str],
    fits: Sequence[Fit],
    inflated: Sequence[Fit] = (),
    *,
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
    sensitivity: Mapping[str, Sensitivity] | None = None,
    rivals: Sequence[Rival] = (),
    star_teff_k: float | None = None,
) -> Verdict:
    """Words for the feature and for each species, with the sentences that state them.

    Parameters
    ----------
    comparisons : sequence of Comparison
        From `build_comparisons`.
    species : sequence of str
        Species asked for, in the order wanted.
    untested : mapping of str to str
        Species that no trusted table covers, with the reason; they may be missing from `species`.
    fits, inflated : sequence of Fit
        The fits compared; their `sampling["converged"]` decides whether the sentences warn.
    thresholds : Thresholds
    sensitivity : mapping of str to Sensitivity, optional
        What the spectrum could have shown of each species.
    rivals : sequence of Rival
        Those that `build_comparisons` was given.
    star_teff_k : float, optional
        Effective temperature of the star.

    Returns
    -------
    Verdict

    Notes
    -----
    A word follows the smaller of the ln B at quoted and at inflated errors. A species is judged by leaving it
    out of the full model when several are fitted, else by its own fit against the best null, and never gets a
    stronger word than the feature. Where the feature stands but every species can be spared, those that
    explain it alone are interchangeable. What stands so far is confounded where a rival that counts is not beaten,
    and what does not is untested where the spectrum could not have shown it.
    """
    fitted = [x for x in species if any(c.kind == "alone" and c.species == x for c in comparisons)]
    tested = [x for x in fitted if x not in untested]
    entry = next((c for c in comparisons if c.kind == "feature"), None) if tested else None
    feature = word_for(*deciding(entry), thresholds) if entry else UNTESTED

    deciders = {x: _deciding_pair(comparisons, x) for x in tested}
    own = {x: word_for(*deciders[x], thresholds) for x in tested}
    words = {x: _capped(own[x], feature) for x in tested}
    if feature in STANDING_WORDS and len(fitted) > 1 and not any(w in STANDING_WORDS for w in own.values()):
        words = {
            x: _word_alone(comparisons, x, thresholds) if own[x] == NOT_SHOWN else own[x] for x in tested
        }
    unbeaten = {x: _unbeaten(comparisons, x, words[x], thresholds) for x in tested}
    unbeaten[None] = _unbeaten(comparisons, None, feature, thresholds)
    confounders = {x: entries for x, entries in unbeaten.items() if entries}
    lowered = [x for x in tested if _RANK[own[x]] > _RANK[words[x]] and x not in confounders]
    out_of_reach = _out_of_reach(words, sensitivity or {}, thresholds)
    words |= dict.fromkeys((x for x in confounders if x is not None), CONFOUNDED)
    words |= dict.fromkeys(out_of_reach, UNTESTED)
    if None in confounders:
        feature = CONFOUNDED
    elif feature == NOT_SHOWN and out_of_reach and len(out_of_reach) == len(tested):
        feature = UNTESTED  # no species asked for could have made a feature that shows
    words = {x: words.get(x, UNTESTED) for x in dict.fromkeys([*species, *untested])}

    said = [
        sentences.feature_sentence(feature, entry, out_of_reach, thresholds),
        rival_sentences.confounded_sentence(confounders, rivals, thresholds),
        sentences.species_sentence(words, deciders, feature, comparisons, out_of_reach, thresholds),
        sentences.out_of_reach_sentence(out_of_reach),
        sentences.lowered_sentence(lowered, deciders, thresholds),
        rival_sentences.alternatives_sentence(
            words, feature, fits, inflated, rivals, star_teff_k, thresholds
        ),
        sentences.null_sentence(feature, fits, inflated, thresholds),
        rival_sentences.artefact_sentence(words, feature, fits, inflated, rivals, thresholds),
        sentences.inflation_sentence(inflated, fitting_rival((*fits, *inflated), rivals, thresholds)),
        sentences.convergence_sentence(
            _deciding_fits(fits, fitted, words, thresholds),
            words,
            feature,
            fits,
            inflated,
            comparisons,
            thresholds,
        ),
    ]
    return Verdict(feature=feature, species=words, sentence=" ".join(s for s in said if s))


def competitors(
    comparisons: Sequence[Comparison], species: str | None, thresholds: Thresholds = DEFAULT_THRESHOLDS
) -> list[Comparison]:
    """Comparisons with the rivals that a species (or the feature, None) has to beat, the closest one first.

    Rivals on the nulls always count, but for a bump inside the bands. Those on "all-X" do where X is judged by
    leaving it out and stands: a species that can be spared is not needed beside such a rival in any case.
    """
    left_out = next((c for c in comparisons if c.kind == "left_out" and c.species == species), None)
    is_needed = left_out is not None and deciding(left_out)[0] >= thresholds.hint_ln_b
    entries = [
        c
        for c in comparisons
        if c.kind == "rival" and c.species == species and c.counts and (is_needed or not stands_on_rest(c))
    ]
    return sorted(entries, key=lambda c: deciding(c)[0])


# --- words --------------------------------------------------------------------------------------------------


def _straddles(pair: tuple[float, float], start: float, thresholds: Thresholds) -> bool:
    """Whether the error is so large that it leaves open on which side of `start` a ln B lies."""
    value, err = pair
    if not math.isfinite(err):
        return True
    return err > thresholds.largest_ln_b_err and value - err < start <= value + err


def _deciding_pair(comparisons: Sequence[Comparison], species: str) -> tuple[float, float]:
    left_out = next((c for c in comparisons if c.kind == "left_out" and c.species == species), None)
    return smaller(*alone_against_best_null(comparisons, species)) if left_out is None else deciding(left_out)


def _capped(word: str, feature: str) -> str:
    """A species' word, lowered to the feature's where it is the stronger of the two."""
    return feature if _RANK[word] > _RANK[feature] else word


def _word_alone(comparisons: Sequence[Comparison], species: str, thresholds: Thresholds) -> str:
    pair = smaller(*alone_against_best_null(comparisons, species))
    if not math.isfinite(pair[0]) or _straddles(pair, thresholds.hint_ln_b, thresholds):
        return UNTESTED
    return INTERCHANGEABLE if pair[0] >= thresholds.hint_ln_b else NOT_SHOWN


def _unbeaten(
    comparisons: Sequence[Comparison], species: str | None, word: str, thresholds: Thresholds
) -> list[Comparison]:
    """Rivals that a word which stands so far does not beat; a ln B without a value or too uncertain beats nothing."""
    if word not in (*STANDING_WORDS, INTERCHANGEABLE):
        return []
    return [c for c in competitors(comparisons, species, thresholds) if not _beats(deciding(c), thresholds)]


def _beats(pair: tuple[float, float], thresholds: Thresholds) -> bool:
    return pair[0] >= thresholds.rival_ln_b and not _straddles(pair, thresholds.rival_ln_b, thresholds)


def _out_of_reach(
    words: Mapping[str, str], sensitivity: Mapping[str, Sensitivity], thresholds: Thresholds
) -> dict[str, Sensitivity]:
    """Species not shown that would not have shown at a strength that is common, with what would have."""
    return {
        x: sensitivity[x]
        for x, word in words.items()
        if word == NOT_SHOWN
        and x in sensitivity
        and (
            sensitivity[x].amplitude_scale_heights is None
            or not sensitivity[x].amplitude_scale_heights <= thresholds.sensitivity_scale_heights
        )
    }


def _deciding_fits(
    fits: Sequence[Fit], fitted: Sequence[str], words: Mapping[str, str], thresholds: Thresholds
) -> set[str]:
    """Names of the fits on which a word rests."""
    models = [fit for fit in fits if fit.species]
    share = shares(models) if models else {}
    names = {name for name, part in share.items() if part >= thresholds.smallest_share}
    # Any null may turn out to be the best one once it is sampled properly.
    names |= {fit.name for fit in fits if not fit.species}
    if "all" in {fit.name for fit in fits}:
        names |= {fit.name for fit in models if len(fit.species) >= len(fitted) - 1}
    return names | {x for x in fitted if words[x] in (INTERCHANGEABLE, CONFOUNDED) or len(fitted) == 1}


def fitting_rival(fits: Sequence[Fit], rivals: Sequence[Rival], thresholds: Thresholds) -> Rival | None:
    """Likeliest rival on the nulls, where it beats every fit (inflated ones too) and fits the quoted errors."""
    known = [r for r in rivals if r.base == "null" and r.chi2 is not None]
    best = max(known, key=lambda rival: rival.ln_evidence, default=None)
    if best is None or best.ln_evidence < max(fit.ln_evidence for fit in fits):
        return None
    n_bins = fits[0].dof + fits[0].n_free
    dof = n_bins - 1 - max(len(best.parameters), 1)
    return best if dof > 0 and chdtrc(dof, best.chi2) >= thresholds.poor_fit_p else None
