"""The second table of a report: chances of noise, closest rivals and what the spectrum could have shown."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping, Sequence

import numpy as np

from transit.records import CheckResult, Comparison, FalseAlarms, Sensitivity
from transit.significance import normal_deviate
from transit.verdict import competitors, deciding, format_ln_b

SCALE_LN_B = (1.0, 2.5, 5.0, 8.0)  # where the report tells p of ln B for this spectrum

_ROW = "{:<9}{:>9}{:>7}{:>9}{:>9}  {:<15}{:>12}{:>8}"
_HEAD = (
    ("noise", "p named", "sigma", "p best", "p left", "closest", "ln B over", "shows"),
    ("", "at most", "of p*", "of {n}", "out", "rival", "it", "from"),
)
_NONE = "-"


def chance_lines(result: CheckResult) -> list[str]:
    """Table by species of p, closest rival and sensitivity, with the scale of p for this spectrum.

    Parameters
    ----------
    result : CheckResult

    Returns
    -------
    list of str
        At most 80 columns each; empty where no rival, false alarm or sensitivity was computed.

    Notes
    -----
    p and ln B stand in columns of their own, for neither is a form of the other.
    """
    if not (result.false_alarms or result.rivals or result.sensitivity):
        return []
    tried = [x for x in result.verdict.species if _alone(result.comparisons, x) is not None]
    if not tried:
        return []
    lines = [_ROW.format(*(text.format(n=len(tried)) for text in head)).rstrip() for head in _HEAD]
    lines.append(_row(result, "feature", None))
    lines += [_row(result, x, x) for x in tried]
    if result.false_alarms is not None:
        grown = result.false_alarms.error_factor
        errors = f"; errors taken times {grown:.2f}" if abs(grown - 1) >= 0.005 else ""
        lines.append(f"* one-sided normal deviate of that p, never of ln B{errors}")
        lines += _scale_lines(result.false_alarms, len(tried))
    return lines


def format_p(p: float | None, smallest_p: float, is_bound: bool = False) -> str:
    """Text of a probability; below the smallest resolved it is a bound.

    Examples
    --------
    >>> format_p(0.0213, 1e-8), format_p(3.4e-9, 1e-8)
    ('0.021', '<1e-8')
    """
    if p is None or not math.isfinite(p):
        return _NONE
    if p < smallest_p:
        return f"<{_short(smallest_p, 0)}"
    text = f"{p:.2g}" if p >= 0.01 else _short(p, 1)
    return f"<{_short(p, 0)}" if is_bound else text


def format_deviate(p: float | None, smallest_p: float, is_bound: bool = False) -> str:
    """Text of the one-sided normal deviate of a probability."""
    if p is None or not math.isfinite(p):
        return _NONE
    if p < smallest_p:
        return f">{normal_deviate(smallest_p):.1f}"
    if p >= 0.5:
        return "<0"
    return f"{'>' if is_bound else ''}{normal_deviate(p):.1f}"


def _short(p: float, digits: int) -> str:
    mantissa, exponent = f"{p:.{digits}e}".split("e")
    return f"{mantissa}e{int(exponent)}"


def _alone(comparisons: Sequence[Comparison], species: str) -> Comparison | None:
    return next((c for c in comparisons if c.kind == "alone" and c.species == species and c.best_null), None)


def _row(result: CheckResult, label: str, species: str | None) -> str:
    comparisons = result.comparisons
    kinds = {c.kind: c for c in comparisons if c.species == species and c.kind in ("left_out", "feature")}
    own = kinds.get("feature") if species is None else _alone(comparisons, species)
    smallest = result.false_alarms.smallest_p if result.false_alarms is not None else 0.0
    named = own.p_named if own is not None else None
    bound = own is not None and own.p_is_bound
    left_out = kinds.get("left_out")
    rival, over = _closest_rival(result, species)
    return _ROW.format(
        label[:8],
        format_p(named, smallest, bound),
        format_deviate(named, smallest, bound),
        format_p(own.p_best_of_n if own is not None else None, smallest, bound),
        format_p(left_out.p_named if left_out else None, smallest, bool(left_out and left_out.p_is_bound)),
        rival[:15],
        over,
        _sensitivity_cell(result, species),
    ).rstrip()[:80]


def _closest_rival(result: CheckResult, species: str | None) -> tuple[str, str]:
    entries = competitors(result.comparisons, species, result.system.thresholds)
    if not entries:
        return _NONE, _NONE
    value, err = deciding(entries[0])
    text = f"{format_ln_b(value, 2, result.system.thresholds)}+-{err:.2f}"
    return entries[0].against, text if len(text) <= 11 else f"{value:.3g}+-{err:.1g}"


def _sensitivity_cell(result: CheckResult, species: str | None) -> str:
    found = result.sensitivity.get(species)
    if found is None:
        return _NONE
    if found.amplitude_scale_heights is None or not math.isfinite(found.amplitude_scale_heights):
        return f">{found.largest_scale_heights:.2g} H"
    return f"{found.amplitude_scale_heights:.1f} H"


def _scale_lines(false_alarms: FalseAlarms, n_tried: int) -> list[str]:
    """What some ln B would be worth in p: read off the simulated table, for these bins, errors and priors only."""
    ln_b = np.asarray(false_alarms.ln_bayes_factor, float)
    p = np.asarray(false_alarms.p_best_of_n, float)
    smallest = false_alarms.smallest_p
    texts = []
    for value in SCALE_LN_B:
        if ln_b.min() <= value <= ln_b.max():
            # p falls about exponentially with ln B: straight lines between the entries in ln p.
            read = math.exp(np.interp(value, ln_b, np.log(np.maximum(p, smallest / 10))))
            texts.append(f"{value:g}: {_short(read, 0) if read >= smallest else '<' + _short(smallest, 0)}")
    return textwrap.wrap(f"ln B -> p, this spectrum only, best of {n_tried}: {', '.join(texts)}", 80)


def sensitivity_table(sensitivity: Mapping[str, Sensitivity], untested: Mapping[str, str]) -> str:
    """What a spectrum could show of each species, as text for the terminal.

    Parameters
    ----------
    sensitivity : mapping of str to Sensitivity
    untested : mapping of str to str
        Species that no trusted table covers, with the reason.

    Returns
    -------
    str
        Lines of at most 80 columns.
    """
    lines = [f"{'species':<10}{'shows from':>12}{'+-':>8}   scale heights"]
    for species, found in sensitivity.items():
        if found.amplitude_scale_heights is None:
            lines.append(
                f"{species:<10}{'never':>12}{'-':>8}   up to {found.largest_scale_heights:.1f} tried"
            )
        else:
            err = "-" if found.amplitude_err is None else f"{found.amplitude_err:.2f}"
            lines.append(f"{species:<10}{found.amplitude_scale_heights:>12.2f}{err:>8}")
    lines.append("")
    sentences = [found.sentence for found in sensitivity.values()]
    sentences += untested.values()
    sentences.append("From bins, errors and priors alone: nothing was fitted.")
    for sentence in sentences:
        lines += textwrap.wrap(sentence, 80, subsequent_indent="  ")
    return "\n".join(lines)
