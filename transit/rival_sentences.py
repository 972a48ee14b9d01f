"""The sentences about explanations other than absorbers: what confounds, what does as well, what looks faulty."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence

from transit.comparisons import (
    best_model,
    best_null,
    counts_against_feature,
    deciding,
    is_beside,
    rival_label,
    stands_on_rest,
)
from transit.records import Comparison, Fit, Rival
from transit.sentences import CLAIMING, NULL_PHRASES, capital, format_ln_b, is_or_are, join
from transit.thresholds import DEFAULT_THRESHOLDS, Thresholds

ARTEFACTS = ("one-bin", "step")  # faults of the data rather than of the sky


def confounded_sentence(
    confounders: Mapping[str | None, Sequence[Comparison]],
    rivals: Sequence[Rival],
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """Which rivals explain the spectrum as well as each species (None: the feature), closest first."""
    phrases = {rival_label(rival): rival.phrase for rival in rivals}
    species = [x for x in confounders if x is not None]
    # The feature has its own sentence; here it needs a rival only where no species names one.
    subjects = species or list(confounders)
    groups: dict[tuple[str, ...], list[str | None]] = {}
    for x in subjects:
        groups.setdefault(tuple(dict.fromkeys(c.against for c in confounders[x])), []).append(x)
    return " ".join(
        _confounded_group(names, labels, confounders, phrases, thresholds) for labels, names in groups.items()
    )


def _confounded_group(names, labels, confounders, phrases, thresholds: Thresholds) -> str:
    shown = [x if x is not None else "absorbers" for x in names]
    closest = [confounders[x][0] for x in names]
    values = [deciding(c)[0] for c in closest]
    phrase = phrases.get(labels[0], labels[0])
    if stands_on_rest(closest[0]):
        phrase = f"the other species with {phrase}"
    how = "better" if max(values) < 0 else "as well"
    texts = [_in_favour(value, x, thresholds) for value, x in zip(values, shown, strict=True)]
    subject = "the feature" if names == [None] else join(shown)
    text = (
        f"{capital(subject)} {is_or_are(names)} confounded: {phrase} {_explain(phrase)} the spectrum {how} "
        f"({', '.join(texts)}; {thresholds.rival_ln_b:g} in favour needed)"
    )
    others = dict.fromkeys(phrases.get(label, label) for label in labels[1:])
    others = [other for other in others if other not in phrase]
    return f"{text}; {join(others)} {is_or_are(others)} not beaten either." if others else f"{text}."


def _in_favour(value: float, name: str, thresholds: Thresholds) -> str:
    if value < 0:
        return f"ln B {format_ln_b(-value, thresholds=thresholds)} against {name}"
    return f"ln B {format_ln_b(value, thresholds=thresholds)} in favour of {name}"


def _explain(phrase: str) -> str:
    return "explains" if re.match(r"(an?|one) ", phrase) else "explain"


def alternatives_sentence(
    words: Mapping[str, str],
    feature: str,
    fits: Sequence[Fit],
    inflated: Sequence[Fit],
    rivals: Sequence[Rival],
    star_teff_k: float | None,
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """Where nothing is shown: what explains the spectrum as well as any absorber, though it has none.

    Named are rivals and a slope that reach the best hypothesis with species and beat the flat line; about a cool
    star, whose spots have bands of their own, also the star and a slope that come within `rival_ln_b` of both.
    """
    if _claims(words, feature) or best_model(fits) is None:
        return ""
    is_cool = star_teff_k is not None and star_teff_k < thresholds.cool_star_teff_k
    strongest_null = NULL_PHRASES[best_null(fits).name]
    named, values, for_cool = [], [], False
    for name, phrase, over_flat, over_null, over_best in _alternatives(fits, inflated, rivals):
        stands_out = over_flat > 0 and over_best >= 0
        # Every rival but the star carries the nulls: without more than they bring it explains nothing of its own.
        if name not in ("star", "slope"):
            stands_out = stands_out and over_null > 0
        near = is_cool and name in ("star", "slope") and min(over_flat, over_best) > -thresholds.rival_ln_b
        said_elsewhere = (
            name == "slope" and over_flat >= thresholds.hint_ln_b and phrase == strongest_null
        ) or (name in ARTEFACTS and over_null > thresholds.rival_ln_b)
        if (stands_out or near) and not said_elsewhere:
            named.append(phrase)
            values.append(format_ln_b(over_flat, thresholds=thresholds))
            for_cool = for_cool or near
    if not named:
        return ""
    verb = "explain" if len(named) > 1 else _explain(named[0])
    opening = f"For this cool star ({star_teff_k:.0f} K) {join(named)}" if for_cool else capital(join(named))
    return f"{opening} {verb} the spectrum as well as any absorber (ln B {join(values)} over a flat line)."


def _claims(words: Mapping[str, str], feature: str) -> bool:
    return any(word in CLAIMING for word in (*words.values(), feature))


def _alternatives(fits: Sequence[Fit], inflated: Sequence[Fit], rivals: Sequence[Rival]):
    """Name, phrase and ln B over the flat line, the best null and the best hypothesis with species.

    Over the nulls the smaller of the quoted and the inflated ln B; over the best hypothesis with species the larger,
    for the caution lies there in saying that something else does as well.
    """
    columns = []
    for group, attribute in ((fits, "ln_evidence"), (inflated, "ln_evidence_inflated")):
        flat = next((fit for fit in group if fit.name == "flat"), None)
        best = best_model(group)
        if flat is None or best is None:
            continue
        own = {fit.name: fit.ln_evidence for fit in group if fit.name == "slope"}
        own |= {
            rival.name: getattr(rival, attribute)
            for rival in rivals
            if counts_against_feature(rival) and getattr(rival, attribute) is not None
        }
        bases = (flat.ln_evidence, best_null(group).ln_evidence, best.ln_evidence)
        columns.append({name: tuple(value - base for base in bases) for name, value in own.items()})
    phrases = {rival.name: rival.phrase for rival in rivals if counts_against_feature(rival)}
    for name, phrase in (phrases | {"slope": NULL_PHRASES["slope"]}).items():
        found = [column[name] for column in columns if name in column]
        if found:
            over_flat, over_null, over_best = zip(*found, strict=True)
            yield name, phrase, min(over_flat), min(over_null), max(over_best)


def artefact_sentence(
    words: Mapping[str, str],
    feature: str,
    fits: Sequence[Fit],
    inflated: Sequence[Fit],
    rivals: Sequence[Rival],
    thresholds: Thresholds = DEFAULT_THRESHOLDS,
) -> str:
    """A bad bin or a step that the spectrum prefers to none.

    Where a species is claimed, only an artefact beside it counts: without it, its strongest bin would look bad.
    """
    named: dict[str, float] = {}
    claimed = _claims(words, feature)
    for rival in rivals:
        if rival.name not in ARTEFACTS:
            continue
        if claimed:
            if not is_beside(rival):
                continue
            bases = [
                next((fit for fit in group if fit.name == rival.base), None) for group in (fits, inflated)
            ]
        else:
            if rival.base != "null":
                continue
            bases = [best_null(group) if group else None for group in (fits, inflated)]
        value = _over(rival, *bases)
        if value > max(thresholds.rival_ln_b, named.get(rival.phrase, -math.inf)):
            named[rival.phrase] = value
    if not named:
        return ""
    texts = [
        f"{phrase} (ln B {format_ln_b(v, thresholds=thresholds)} over none)" for phrase, v in named.items()
    ]
    opening = "Beside what is named, the spectrum" if claimed else "The spectrum"
    return f"{opening} prefers {join(texts)}."


def _over(rival: Rival, base: Fit | None, grown: Fit | None) -> float:
    """The smaller of the quoted and inflated ln B of a rival over its base."""
    values = [] if base is None else [rival.ln_evidence - base.ln_evidence]
    if grown is not None and rival.ln_evidence_inflated is not None:
        values.append(rival.ln_evidence_inflated - grown.ln_evidence)
    return min(values, default=-math.inf)
