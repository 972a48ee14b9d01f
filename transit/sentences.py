"""The sentences of a verdict: words and numbers in, plain English out; nothing is decided here."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from transit.comparisons import alone_against_best_null, best_null, deciding, difference, smaller
from transit.records import Comparison, Fit, Rival, Sensitivity
from transit.thresholds import DEFAULT_THRESHOLDS, Thresholds

NULL_PHRASES = {"flat": "a flat line", "slope": "a straight slope", "continuum": "a haze continuum"}
STANDING = ("present", "hint")
CLAIMING = (*STANDING, "confounded", "interchangeable")


def format_ln_b(
    ln_bayes_factor: float, decimals: int = 1, thresholds: Thresholds = DEFAULT_THRESHOLDS
) -> str:
    """Text of a ln Bayes factor, with further decimals where rounding would cross a threshold.

    Examples
    --------
    >>> format_ln_b(3.14159), format_ln_b(4.98)
    ('3.1', '4.98')
    """
    if not math.isfinite(ln_bayes_factor):
        return str(ln_bayes_factor)
    starts = (thresholds.present_ln_b, thresholds.hint_ln_b, thresholds.rival_ln_b)
    for digits in range(decimals, decimals + 6):
        text = f"{ln_bayes_factor:.{digits}f}"
        if all((float(text) >= start) == (ln_bayes_factor >= start) for start in starts):
            break
    return text.lstrip("-") if float(text) == 0 else text


def join(names: Sequence[str]) -> str:
    """Names as a list in a sentence."""
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def with_err(pair: tuple[float, float], thresholds: Thresholds = DEFAULT_THRESHOLDS) -> str:
    """Text of a ln B, with its error where that shows in the last digit."""
    text = f"ln B {format_ln_b(pair[0], thresholds=thresholds)}"
    return f"{text} +- {pair[1]:.1f}" if pair[1] >= 0.05 else text


def is_or_are(names: Sequence[str]) -> str:
    """The verb after a list of names."""
    return "is" if len(names) == 1 else "are"


def capital(text: str) -> str:
    """The text with a capital in front."""
    return f"{text[0].upper()}{text[1:]}"


# --- feature and species ------------------------------------------------------------------------------------


def feature_sentence(
    feature: str,
    entry: Comparison | None,
    out_of_reach: Mapping[str, Sensitivity],
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """Whether there is a feature, with the ln B that says so; `entry` is None where nothing could be tested."""
    if entry is None:
        return "A feature is untested: no species asked for has a trusted table that covers its bands here."
    unsure = (
        "this spectrum could not have shown one"
        if out_of_reach
        else "its ln B is too uncertain to choose a word"
    )
    opening = {
        "present": "A feature is present",
        "hint": "There is a hint of a feature",
        "confounded": "A feature is confounded, for it need not be an absorber",
        "not shown": "A feature is not shown",
        "untested": f"A feature is untested, for {unsure}",
    }[feature]
    value = deciding(entry)
    text = with_err(value, thresholds)
    if value[0] < entry.ln_bayes_factor:
        quoted = format_ln_b(entry.ln_bayes_factor, thresholds=thresholds)
        return f"{opening} ({text} with inflated errors, {quoted} as quoted, against the best model without absorbers)."
    null = NULL_PHRASES.get(entry.against, entry.against)
    return f"{opening} ({text} against {null}, the best model without absorbers)."


def species_sentence(
    words: Mapping[str, str],
    deciders: Mapping[str, tuple[float, float]],
    feature: str,
    comparisons: Sequence[Comparison],
    out_of_reach: Mapping[str, Sensitivity],
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """The species by word; those confounded or out of reach have sentences of their own."""
    groups: dict[str, list[str]] = {}
    for x, word in words.items():
        if x not in out_of_reach:
            groups.setdefault(word, []).append(x)
    parts = []
    for word, phrase in (("present", "present"), ("hint", "hinted at")):
        if names := groups.get(word):
            texts = [f"{x} ({with_err(deciders[x], thresholds)})" for x in names]
            parts.append(f"{join(texts)} {is_or_are(names)} {phrase}")
    if names := groups.get("interchangeable"):
        parts.append(_interchangeable_phrase(names, comparisons, thresholds))
    elif (
        feature in (*STANDING, "confounded")
        and not parts
        and "confounded" not in groups
        and not any(x in deciders for x in groups.get("untested", ()))
    ):
        parts.append("no single species is needed for it and none explains it alone")
    # The feature's own sentence already says so when nothing could be tested at all.
    for word in ("not shown", "untested"):
        if (names := groups.get(word)) and (deciders or word != "untested"):
            # One that was fitted is untested because its ln B is too uncertain: the error shows it.
            uncertain = deciders if word == "untested" else {}
            texts = [f"{x} ({with_err(uncertain[x], thresholds)})" if x in uncertain else x for x in names]
            parts.append(f"{join(texts)} {is_or_are(names)} {word}")
    return f"{capital('; '.join(parts))}." if parts else ""


def _interchangeable_phrase(
    names: Sequence[str], comparisons: Sequence[Comparison], thresholds: Thresholds
) -> str:
    texts = [
        f"{x} ({with_err(smaller(*alone_against_best_null(comparisons, x)), thresholds)})" for x in names
    ]
    opening = "no species is shown to be needed for it"
    if len(names) == 1:
        return f"{opening}: {texts[0]} explains it alone but is interchangeable with the others together"
    return f"{opening}: {join(texts)} are interchangeable, each explains it alone"


def lowered_sentence(
    lowered: Sequence[str],
    deciders: Mapping[str, tuple[float, float]],
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """Species whose own ln B would give a stronger word than the feature has."""
    if not lowered:
        return ""
    texts = [f"{x} ({with_err(deciders[x], thresholds)})" for x in lowered]
    return f"{join(texts)} would rate higher, but no species gets a stronger word than the feature."


def out_of_reach_sentence(out_of_reach: Mapping[str, Sensitivity]) -> str:
    """What the spectrum could have shown of the species that are untested for want of it."""
    if not out_of_reach:
        return ""
    texts = [f"{x} ({_needed(found)})" for x, found in out_of_reach.items()]
    return f"{join(texts)} {is_or_are(texts)} untested: out of reach of this spectrum."


def _needed(found: Sensitivity) -> str:
    if found.amplitude_scale_heights is None or not math.isfinite(found.amplitude_scale_heights):
        return f"would not show even at {found.largest_scale_heights:.2g} scale heights"
    return f"would show from {found.amplitude_scale_heights:.1f} scale heights"


def null_sentence(
    feature: str, fits: Sequence[Fit], inflated: Sequence[Fit], thresholds: Thresholds = DEFAULT_THRESHOLDS
) -> str:
    """A slope or a haze that the spectrum prefers to a flat line."""
    null = best_null(fits)
    margins = []
    for group in (fits, inflated):
        by_name = {fit.name: fit for fit in group}
        if null.name in by_name and "flat" in by_name:
            margins.append(difference(by_name[null.name], by_name["flat"])[0])
    if null.name == "flat" or not margins or min(margins) < thresholds.hint_ln_b:
        return ""
    opening = "Without absorbers the spectrum" if feature in (*STANDING, "confounded") else "The spectrum"
    phrase = NULL_PHRASES.get(null.name, null.name)
    return f"{opening} prefers {phrase} over a flat line (ln B {format_ln_b(min(margins), thresholds=thresholds)})."


# --- errors and convergence ---------------------------------------------------------------------------------


def inflation_sentence(inflated: Sequence[Fit], fitting: Rival | None) -> str:
    """By how much the errors had to grow in the best fit with errors free to; unless a rival fits without that."""
    if not inflated:
        return ""
    if fitting is not None:
        return f"With {fitting.phrase} the quoted errors fit."
    factor = max(inflated, key=lambda fit: fit.ln_evidence).parameters.get("error_factor")
    if factor is None:
        return ""
    digits = 1 if factor.upper - factor.lower >= 0.1 else 2
    size = f"{factor.median:.{digits}f} ({factor.lower:.{digits}f}-{factor.upper:.{digits}f})"
    return f"The quoted errors look understated by a factor {size}, or every model here is too simple."


def convergence_sentence(
    names: set[str],
    words: Mapping[str, str],
    feature: str,
    fits: Sequence[Fit],
    inflated: Sequence[Fit],
    comparisons: Sequence[Comparison],
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """Fits among `names`, on which a word rests, that have not converged."""
    failed = [fit.name for fit in (*fits, *inflated) if not fit.sampling.get("converged", True)]
    failed = [name for name in dict.fromkeys(failed) if name in names]
    if not failed:
        return ""
    fits_did = f"The fit {failed[0]}" if len(failed) == 1 else f"The fits {join(failed)}"
    # A rival decides only what stands or would stand without it.
    relevant = [
        c
        for c in comparisons
        if c.kind != "rival"
        or (c.counts and (feature if c.species is None else words.get(c.species)) in CLAIMING)
    ]
    if any(_near_a_threshold(name, fits, relevant, thresholds) for name in failed):
        return f"{fits_did} did not converge: treat these words as provisional."
    return (
        f"{fits_did} did not converge, but every word that rests on it is more than "
        f"{thresholds.clear_margin_ln_b:g} in ln B from changing."
    )


def _near_a_threshold(
    name: str, fits: Sequence[Fit], comparisons: Sequence[Comparison], thresholds: Thresholds
) -> bool:
    """Whether a comparison that a fit enters decides a word by no more than the clear margin."""
    species = next((fit.species for fit in fits if fit.name == name), ())
    starts = (thresholds.hint_ln_b, thresholds.present_ln_b, thresholds.rival_ln_b)
    low, high = min(starts) - thresholds.clear_margin_ln_b, max(starts) + thresholds.clear_margin_ln_b
    for c in comparisons:
        # With two species, `all` without one is the other's own fit.
        is_rest = c.kind == "left_out" and species and c.species not in species
        enters = name in (c.model, c.against) or is_rest or (c.kind == "feature" and bool(species))
        if enters and low <= deciding(c)[0] <= high:
            return True
    return False
