"""From the evidences of the fits to comparisons, and from comparisons to words."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence

from transit.records import Comparison, Fit, Verdict

NULL_NAMES = ("flat", "slope", "continuum")
NULL_PHRASES = {"flat": "a flat line", "slope": "a straight slope", "continuum": "a haze continuum"}

# Every threshold of the verdict. Words follow Table 1 of Trotta (2008, Contemp. Phys. 49, 71), where ln B of
# 5 (odds of about 150 to 1) is strong and 2.5 (about 12 to 1) is moderate evidence. The others are ours:
# 0.3 is about a tenth of the step between two words, and a share below 1 per cent moves the mean evidence by
# 0.01 at most.
WORD_THRESHOLDS = ((5.0, "present"), (2.5, "hint"))
STANDS_FROM = 2.5  # a feature, a slope or a species alone counts from here
LARGEST_ERR = 0.3  # an error of ln B above this must not straddle a threshold
CLEAR_MARGIN = 20.0  # a doubtful fit is called harmless only where words are further than this from changing
SMALLEST_SHARE = 0.01  # of the mean evidence, for a fit to count among those that decide the feature

NOT_SHOWN = "not shown"
UNTESTED = "untested"
INTERCHANGEABLE = "interchangeable"
STANDING_WORDS = ("present", "hint")

_RANK = {UNTESTED: 0, NOT_SHOWN: 0, "hint": 1, INTERCHANGEABLE: 1, "present": 2}


def word_for(ln_bayes_factor: float, ln_bayes_factor_err: float = 0.0) -> str:
    """Word for one ln Bayes factor.

    Parameters
    ----------
    ln_bayes_factor, ln_bayes_factor_err : float
        Value and 1-sigma error. The error matters only when it is above `LARGEST_ERR` and a threshold lies
        within it: the word would then be a matter of luck.

    Returns
    -------
    str
        "present", "hint", "not shown" or "untested".
    """
    if not math.isfinite(ln_bayes_factor) or _straddles(
        ln_bayes_factor, ln_bayes_factor_err, (t for t, _ in WORD_THRESHOLDS)
    ):
        return UNTESTED
    return next((word for start, word in WORD_THRESHOLDS if ln_bayes_factor >= start), NOT_SHOWN)


def format_ln_b(ln_bayes_factor: float, decimals: int = 1) -> str:
    """Text of a ln Bayes factor, with further decimals where rounding would cross a threshold.

    Examples
    --------
    >>> format_ln_b(3.14159), format_ln_b(4.98)
    ('3.1', '4.98')
    """
    if not math.isfinite(ln_bayes_factor):
        return str(ln_bayes_factor)
    for digits in range(decimals, decimals + 6):
        text = f"{ln_bayes_factor:.{digits}f}"
        if word_for(float(text)) == word_for(ln_bayes_factor):
            break
    return text.lstrip("-") if float(text) == 0 else text


def best_null(fits: Iterable[Fit]) -> Fit:
    """Hypothesis without species that has the highest evidence."""
    return max((fit for fit in fits if not fit.species), key=lambda fit: fit.ln_evidence)


def best_model(fits: Iterable[Fit]) -> Fit | None:
    """Hypothesis with species that has the highest evidence; None when no species was fitted."""
    return max((fit for fit in fits if fit.species), key=lambda fit: fit.ln_evidence, default=None)


def build_comparisons(
    fits: Sequence[Fit], inflated: Sequence[Fit], species: Sequence[str]
) -> tuple[Comparison, ...]:
    """Compare every hypothesis with the ones it has to beat.

    Parameters
    ----------
    fits : sequence of Fit
        Quoted errors. Names: the nulls "flat", "slope", "continuum"; each species; with two or more species
        also "all" and "all-X". With two species "all-X" is the other species' own fit, which is then used.
    inflated : sequence of Fit
        The same hypotheses with errors free to grow, or nothing.
    species : sequence of str
        Species in the order wanted; those without a fit are passed over.

    Returns
    -------
    tuple of Comparison
        "alone": each species against each null, `best_null` marking the best null at quoted errors.
        "left_out": "all" against "all-X", for two or more species.
        "feature": the mean evidence of all hypotheses with species, equally weighted, against the best null;
        its `delta_chi2` is that of the hypothesis with the highest evidence.

    Notes
    -----
    An inflated value of "alone" or "left_out" compares the same two hypotheses. That of "feature" is against
    the best null of the inflated fits, which may be another one than `against` names.
    """
    quoted = {fit.name: fit for fit in fits}
    grown = {fit.name: fit for fit in inflated}
    fitted = [name for name in species if name in quoted]
    nulls = [name for name in NULL_NAMES if name in quoted]
    best = best_null(fits).name

    pairs = [("alone", x, quoted[x], quoted[null], null, null == best) for x in fitted for null in nulls]
    if len(fitted) >= 2:
        for x in fitted:
            without = _without(quoted, fitted, x)
            pairs.append(("left_out", x, quoted["all"], without, f"all-{x}", False))
    comparisons = [_compare(*pair, grown) for pair in pairs]
    if fitted:
        comparisons.append(_compare_feature(fits, inflated))
    return tuple(comparisons)


def alone_against_best_null(
    comparisons: Iterable[Comparison], species: str
) -> tuple[tuple[float, float], tuple[float, float] | None]:
    """ln B of one species alone against the best null, at quoted and at inflated errors.

    The best null is the one that leaves the smallest ln B. It is sought separately for quoted and inflated
    errors, since a null that is beaten at quoted errors may be the best once errors are free to grow.

    Returns
    -------
    quoted : tuple of float
        ln B and its error.
    inflated : tuple of float or None
        The same with inflated errors, None when these were not fitted.
    """
    entries = [c for c in comparisons if c.kind == "alone" and c.species == species]
    quoted = min((c.ln_bayes_factor, c.ln_bayes_factor_err) for c in entries)
    return quoted, min((pair for c in entries if (pair := _inflated_pair(c)) is not None), default=None)


def judge(
    comparisons: Sequence[Comparison],
    species: Sequence[str],
    untested: Mapping[str, str],
    fits: Sequence[Fit],
    inflated: Sequence[Fit] = (),
) -> Verdict:
    """Words for the feature and for each species, with the sentence that states them.

    Parameters
    ----------
    comparisons : sequence of Comparison
        From `build_comparisons`.
    species : sequence of str
        Species asked for, in the order wanted.
    untested : mapping of str to str
        Species that no trusted table covers, with the reason; they may be missing from `species`.
    fits, inflated : sequence of Fit
        The fits compared; their `sampling["converged"]` decides whether the sentence warns.

    Returns
    -------
    Verdict

    Notes
    -----
    A word follows the smaller of the ln B at quoted and at inflated errors. A species is judged by leaving it
    out of the full model when several are fitted, else by its own fit against the best null, and never gets a
    stronger word than the feature. Where the feature stands but every species can be spared, those that
    explain it alone are interchangeable.
    """
    fitted = [x for x in species if any(c.kind == "alone" and c.species == x for c in comparisons)]
    tested = [x for x in fitted if x not in untested]
    feature_entry = next((c for c in comparisons if c.kind == "feature"), None)
    feature = word_for(*deciding(feature_entry)) if feature_entry and tested else UNTESTED

    deciders = {x: _deciding_pair(comparisons, x) for x in tested}
    own = {x: word_for(*deciders[x]) for x in tested}
    words = {x: _capped(own[x], feature) for x in tested}
    if feature in STANDING_WORDS and len(fitted) > 1 and not any(w in STANDING_WORDS for w in own.values()):
        words = {x: _word_alone(comparisons, x) if own[x] == NOT_SHOWN else own[x] for x in tested}
    words = {x: words.get(x, UNTESTED) for x in dict.fromkeys([*species, *untested])}

    lowered = [x for x in tested if _RANK[own[x]] > _RANK[words[x]]]
    sentences = [
        _feature_sentence(feature, feature_entry if tested else None),
        _species_sentence(words, deciders, feature, comparisons),
        _lowered_sentence(lowered, deciders),
        _slope_sentence(feature, fits, inflated),
        _convergence_sentence(_deciding_fits(fits, fitted, words), fits, inflated, comparisons),
    ]
    return Verdict(feature=feature, species=words, sentence=" ".join(s for s in sentences if s))


def deciding(comparison: Comparison) -> tuple[float, float]:
    """ln B with its error that a comparison's word follows: the smaller of quoted and inflated."""
    quoted = (comparison.ln_bayes_factor, comparison.ln_bayes_factor_err)
    return _smaller(quoted, _inflated_pair(comparison))


# --- comparisons --------------------------------------------------------------------------------------------


def _without(quoted: Mapping[str, Fit], fitted: Sequence[str], left_out: str) -> Fit:
    name = f"all-{left_out}"
    if name in quoted or len(fitted) != 2:
        return quoted[name]
    return quoted[next(x for x in fitted if x != left_out)]


def _compare(kind, species, model: Fit, against: Fit, against_name: str, is_best: bool, grown) -> Comparison:
    inflated = (None, None)
    if model.name in grown and against.name in grown:
        inflated = _difference(grown[model.name], grown[against.name])
    ln_b, ln_b_err = _difference(model, against)
    return Comparison(
        kind=kind,
        species=species,
        model=model.name,
        against=against_name,
        best_null=is_best,
        ln_bayes_factor=ln_b,
        ln_bayes_factor_err=ln_b_err,
        delta_chi2=float(against.chi2 - model.chi2),
        ln_bayes_factor_inflated=inflated[0],
        ln_bayes_factor_inflated_err=inflated[1],
    )


def _difference(model: Fit, against: Fit) -> tuple[float, float]:
    return (
        float(model.ln_evidence - against.ln_evidence),
        math.hypot(model.ln_evidence_err, against.ln_evidence_err),
    )


def _compare_feature(fits: Sequence[Fit], inflated: Sequence[Fit]) -> Comparison:
    null = best_null(fits)
    ln_b, ln_b_err = _mean_against_null(fits)
    complete = {fit.name for fit in inflated} >= {fit.name for fit in fits}
    grown = _mean_against_null(inflated) if complete else (None, None)
    return Comparison(
        kind="feature",
        species=None,
        model="mean",
        against=null.name,
        best_null=True,
        ln_bayes_factor=ln_b,
        ln_bayes_factor_err=ln_b_err,
        delta_chi2=float(null.chi2 - best_model(fits).chi2),
        ln_bayes_factor_inflated=grown[0],
        ln_bayes_factor_inflated_err=grown[1],
    )


def _mean_against_null(fits: Sequence[Fit]) -> tuple[float, float]:
    """ln of the mean evidence of the hypotheses with species, less that of the best null, with its error."""
    models = [fit for fit in fits if fit.species]
    null = best_null(fits)
    shares = _shares(models)
    # The largest share is subtracted first: evidences of real spectra overflow an exponential.
    top = max(models, key=lambda fit: fit.ln_evidence)
    ln_mean = top.ln_evidence - math.log(len(models) * max(shares.values()))
    variance = sum((shares[fit.name] * fit.ln_evidence_err) ** 2 for fit in models)
    return float(ln_mean - null.ln_evidence), math.sqrt(variance + null.ln_evidence_err**2)


def _shares(models: Sequence[Fit]) -> dict[str, float]:
    top = max(fit.ln_evidence for fit in models)
    weights = {fit.name: math.exp(fit.ln_evidence - top) for fit in models}
    total = sum(weights.values())
    return {name: weight / total for name, weight in weights.items()}


# --- words --------------------------------------------------------------------------------------------------


def _straddles(value: float, err: float, thresholds: Iterable[float]) -> bool:
    if not math.isfinite(err):
        return True
    return err > LARGEST_ERR and any(value - err < t <= value + err for t in thresholds)


def _inflated_pair(comparison: Comparison) -> tuple[float, float] | None:
    if comparison.ln_bayes_factor_inflated is None:
        return None
    return comparison.ln_bayes_factor_inflated, comparison.ln_bayes_factor_inflated_err or 0.0


def _smaller(quoted: tuple[float, float], inflated: tuple[float, float] | None) -> tuple[float, float]:
    return quoted if inflated is None else min(quoted, inflated)


def _deciding_pair(comparisons: Sequence[Comparison], species: str) -> tuple[float, float]:
    left_out = next((c for c in comparisons if c.kind == "left_out" and c.species == species), None)
    return (
        _smaller(*alone_against_best_null(comparisons, species)) if left_out is None else deciding(left_out)
    )


def _capped(word: str, feature: str) -> str:
    """A species' word, lowered to the feature's where it is the stronger of the two."""
    return feature if _RANK[word] > _RANK[feature] else word


def _word_alone(comparisons: Sequence[Comparison], species: str) -> str:
    value, err = _smaller(*alone_against_best_null(comparisons, species))
    if not math.isfinite(value) or _straddles(value, err, (STANDS_FROM,)):
        return UNTESTED
    return INTERCHANGEABLE if value >= STANDS_FROM else NOT_SHOWN


# --- sentences ----------------------------------------------------------------------------------------------


def _join(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _with_err(pair: tuple[float, float]) -> str:
    text = f"ln B {format_ln_b(pair[0])}"
    return f"{text} +- {pair[1]:.1f}" if pair[1] >= 0.05 else text


def _feature_sentence(feature: str, entry: Comparison | None) -> str:
    if entry is None:
        return "A feature is untested: no species asked for has a trusted table that covers its bands here."
    opening = {
        "present": "A feature is present",
        "hint": "There is a hint of a feature",
        NOT_SHOWN: "A feature is not shown",
        UNTESTED: "A feature is untested, for its ln B is too uncertain to choose a word",
    }[feature]
    value = deciding(entry)
    if value[0] < entry.ln_bayes_factor:
        quoted = format_ln_b(entry.ln_bayes_factor)
        return (
            f"{opening} ({_with_err(value)} with inflated errors, {quoted} as quoted, "
            "against the best model without absorbers)."
        )
    null = NULL_PHRASES.get(entry.against, entry.against)
    return f"{opening} ({_with_err(value)} against {null}, the best model without absorbers)."


def _species_sentence(
    words: Mapping[str, str],
    deciders: Mapping[str, tuple[float, float]],
    feature: str,
    comparisons: Sequence[Comparison],
) -> str:
    groups = {word: [x for x in words if words[x] == word] for word in words.values()}
    parts = []
    for word, phrase in (("present", "present"), ("hint", "hinted at")):
        if names := groups.get(word):
            texts = [f"{x} ({_with_err(deciders[x])})" for x in names]
            parts.append(f"{_join(texts)} {'is' if len(names) == 1 else 'are'} {phrase}")
    if names := groups.get(INTERCHANGEABLE):
        parts.append(_interchangeable_phrase(names, comparisons))
    elif feature in STANDING_WORDS and not parts and UNTESTED not in {words[x] for x in deciders}:
        parts.append("no single species is needed for it and none explains it alone")
    # The feature's own sentence already says so when nothing could be tested at all.
    for word in (NOT_SHOWN, UNTESTED):
        if (names := groups.get(word)) and (deciders or word != UNTESTED):
            # One that was fitted is untested because its ln B is too uncertain: the error shows it.
            uncertain = deciders if word == UNTESTED else {}
            texts = [f"{x} ({_with_err(uncertain[x])})" if x in uncertain else x for x in names]
            parts.append(f"{_join(texts)} {'is' if len(names) == 1 else 'are'} {word}")
    text = "; ".join(parts)
    return f"{text[0].upper()}{text[1:]}." if text else ""


def _interchangeable_phrase(names: Sequence[str], comparisons: Sequence[Comparison]) -> str:
    texts = [f"{x} ({_with_err(_smaller(*alone_against_best_null(comparisons, x)))})" for x in names]
    opening = "no species is shown to be needed for it"
    if len(names) == 1:
        return f"{opening}: {texts[0]} explains it alone but is interchangeable with the others together"
    return f"{opening}: {_join(texts)} are interchangeable, each explains it alone"


def _lowered_sentence(lowered: Sequence[str], deciders: Mapping[str, tuple[float, float]]) -> str:
    if not lowered:
        return ""
    texts = [f"{x} ({_with_err(deciders[x])})" for x in lowered]
    return f"{_join(texts)} would rate higher, but no species gets a stronger word than the feature."


def _slope_sentence(feature: str, fits: Sequence[Fit], inflated: Sequence[Fit]) -> str:
    null = best_null(fits)
    margins = []
    for group in (fits, inflated):
        by_name = {fit.name: fit for fit in group}
        if null.name in by_name and "flat" in by_name:
            margins.append(_difference(by_name[null.name], by_name["flat"]))
    if null.name == "flat" or not margins or min(margins)[0] < STANDS_FROM:
        return ""
    opening = "Without absorbers the spectrum" if feature in STANDING_WORDS else "The spectrum"
    phrase = NULL_PHRASES.get(null.name, null.name)
    return f"{opening} prefers {phrase} over a flat line (ln B {format_ln_b(min(margins)[0])})."


def _deciding_fits(fits: Sequence[Fit], fitted: Sequence[str], words: Mapping[str, str]) -> set[str]:
    """Names of the fits on which a word rests."""
    models = [fit for fit in fits if fit.species]
    names = {name for name, share in _shares(models).items() if share >= SMALLEST_SHARE} if models else set()
    # Any null may turn out to be the best one once it is sampled properly.
    names |= {fit.name for fit in fits if not fit.species}
    if "all" in {fit.name for fit in fits}:
        names |= {fit.name for fit in models if len(fit.species) >= len(fitted) - 1}
    return names | {x for x in fitted if words[x] == INTERCHANGEABLE or len(fitted) == 1}


def _convergence_sentence(
    names: set[str], fits: Sequence[Fit], inflated: Sequence[Fit], comparisons: Sequence[Comparison]
) -> str:
    failed = [fit.name for fit in (*fits, *inflated) if not fit.sampling.get("converged", True)]
    failed = [name for name in dict.fromkeys(failed) if name in names]
    if not failed:
        return ""
    fits_did = f"The fit {failed[0]}" if len(failed) == 1 else f"The fits {_join(failed)}"
    if any(_near_a_threshold(name, fits, comparisons) for name in failed):
        return f"{fits_did} did not converge: treat these words as provisional."
    return (
        f"{fits_did} did not converge, but every word that rests on it is more than {CLEAR_MARGIN:g} in ln B "
        "from changing."
    )


def _near_a_threshold(name: str, fits: Sequence[Fit], comparisons: Sequence[Comparison]) -> bool:
    """Whether a comparison that a fit enters decides a word by no more than `CLEAR_MARGIN`."""
    species = next((fit.species for fit in fits if fit.name == name), ())
    low, high = WORD_THRESHOLDS[-1][0] - CLEAR_MARGIN, WORD_THRESHOLDS[0][0] + CLEAR_MARGIN
    for c in comparisons:
        # With two species, `all` without one is the other's own fit.
        is_rest = c.kind == "left_out" and species and c.species not in species
        enters = name in (c.model, c.against) or is_rest or (c.kind == "feature" and bool(species))
        if enters and low <= deciding(c)[0] <= high:
            return True
    return False
