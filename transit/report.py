"""The text of a result: at most 40 lines of at most 80 columns, the verdict first."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence

from transit.records import CheckResult, Fit
from transit.report_chances import chance_lines
from transit.thresholds import Thresholds
from transit.verdict import STANDING_WORDS, alone_against_best_null, best_model, best_null, format_ln_b

MAX_LINES = 40
MAX_COLUMNS = 80
MAX_SENTENCE_LINES = 9
MAX_TABLE_LINES = 11
MIN_CHANCE_LINES = 4
MIN_NOTE_LINES = 3
MIN_ASSUMED_LINES = 3
MIN_ROOM = 4  # lines for what the numbers rest on and for notes, whatever else there is

_LABEL_COLUMNS = 9
_CELL_COLUMNS = 13

_UNSET = (None, [], ())

_PRIOR_LABELS = {
    "temperature_k": "T/K",
    "temperature_teq": "T/T_eq",
    "log10_vmr": "log10 VMR",
    "log10_deck_pressure_bar": "log10 deck/bar",
    "log10_haze_strength": "log10 haze",
    "haze_exponent": "haze exponent",
    "reference_radius_rjup": "radius/RJup",
    "radius_fraction": "radius +-fraction",
    "slope_ppm_per_efold": "slope/ppm",
    "slope_scale_heights": "slope +-H",
    "offset_ppm": "offset/ppm, normal, sd",
    "error_factor": "error factor, log-uniform,",
    "step_ppm": "step/ppm, normal, sd",
    "outlier_ppm": "bad bin/ppm, normal, sd",
    "bump_scale_heights": "bump/H, up to",
    "spot_fraction": "spots of disc",
    "spot_contrast_k": "spots/K",
    "facula_fraction": "faculae of disc",
    "facula_contrast_k": "faculae/K",
    "star_grid_mix": "blend of star grids",
    "cloud_fraction": "deck over limb",
    "ar1_coefficient": "AR(1)",
}
# Priors that only some results rest on: those of a rival, or of what may vary in every hypothesis alike.
_RIVAL_OF_PRIOR = {
    "step_ppm": "step",
    "outlier_ppm": "one-bin",
    "bump_scale_heights": "bump",
    "spot_fraction": "star",
    "spot_contrast_k": "star",
    "facula_fraction": "star",
    "facula_contrast_k": "star",
    "star_grid_mix": "star",
}
_NUISANCE_OF_PRIOR = {"cloud_fraction": "patchy", "ar1_coefficient": "ar1", "step_ppm": "steps"}


def summary(result: CheckResult) -> str:
    """Plain text of a result.

    Parameters
    ----------
    result : CheckResult
        Nothing but this is used; no statistic is computed here.

    Returns
    -------
    str
        Verdict, comparisons, chances and rivals, goodness of fit, assumptions, warnings and notes, and what the
        words do not mean; at most `MAX_LINES` lines of at most `MAX_COLUMNS` columns. What is cut is counted.
    """
    sentence = _cut(_wrap(result.verdict.sentence), MAX_SENTENCE_LINES)
    table = _cut(_comparison_lines(result), MAX_TABLE_LINES)
    chances = chance_lines(result)
    goodness = _goodness_lines(result)
    assumed = _assumption_lines(result)
    notes = _note_paragraphs(result)
    closing = _closing_lines(result)
    whole = [sentence, table, chances, goodness, assumed, [line for note in notes for line in note] + closing]
    if sum(len(block) + 1 for block in whole if block) - 1 <= MAX_LINES:
        return _joined(whole)
    blanks = 3
    room = MAX_LINES - len(sentence) - len(table) - len(goodness) - len(closing) - blanks
    chances = _cut(chances, max(room - MIN_ROOM, min(MIN_CHANCE_LINES, room)))
    room -= len(chances)
    for_notes = min(sum(map(len, notes)), MIN_NOTE_LINES)
    assumed = _cut(assumed, max(room - for_notes, min(room, MIN_ASSUMED_LINES)))
    last = _whole_paragraphs(notes, room - len(assumed)) + closing
    return _joined([sentence, table + chances, goodness, assumed + last])


def _joined(blocks: Sequence[Sequence[str]]) -> str:
    return "\n\n".join("\n".join(block) for block in blocks if block)


def _wrap(text: str, label: str = "") -> list[str]:
    return textwrap.wrap(
        " ".join(text.split()),
        MAX_COLUMNS,
        initial_indent=f"{label:<{_LABEL_COLUMNS}}" if label else "",
        subsequent_indent=" " * _LABEL_COLUMNS if label else "",
    )


def _cut(lines: Sequence[str], room: int) -> list[str]:
    """First lines, the last one telling how many more there are."""
    if len(lines) <= room:
        return list(lines)
    kept = lines[: max(room - 1, 0)]
    return [*kept, f"  ... {len(lines) - len(kept)} lines more: see result.json"]


def _whole_paragraphs(paragraphs: Sequence[list[str]], room: int) -> list[str]:
    """Paragraphs that fit uncut, and the number of those that do not."""
    if sum(map(len, paragraphs)) <= room:
        return [line for paragraph in paragraphs for line in paragraph]
    lines: list[str] = []
    for index, paragraph in enumerate(paragraphs):
        if len(lines) + len(paragraph) > room - 1:
            return [*lines, f"  ... {len(paragraphs) - index} more warnings or notes: see result.json"]
        lines += paragraph
    return lines


# --- comparisons --------------------------------------------------------------------------------------------


def _comparison_lines(result: CheckResult) -> list[str]:
    """One row for the feature and each species: ln B alone and left out, at quoted and inflated errors."""
    grown, thresholds = bool(result.inflated), result.system.thresholds
    left_out = {c.species: c for c in result.comparisons if c.kind == "left_out"}
    columns = 2 if grown else 1
    width = columns * _CELL_COLUMNS
    groups = ["against null", "left out"] if left_out else ["against null"]
    head = [f"{'ln B':<{_LABEL_COLUMNS}}" + "".join(f"{group:>{width}}" for group in groups) + "  word"]
    if grown:
        cells = f"{'quoted':>{_CELL_COLUMNS}}{'inflated':>{_CELL_COLUMNS}}" * len(groups)
        head.append(" " * _LABEL_COLUMNS + cells)

    rows = []
    for c in result.comparisons:
        if c.kind == "feature":
            pairs = [_pair(c), _inflated(c)]
            rows.append(
                _row("feature", pairs[:columns], columns * len(groups), result.verdict.feature, thresholds)
            )
    for species, word in result.verdict.species.items():
        pairs = []
        if any(c.kind == "alone" and c.species == species for c in result.comparisons):
            pairs += alone_against_best_null(result.comparisons, species)[:columns]
        if species in left_out:
            pairs += [_pair(left_out[species]), _inflated(left_out[species])][:columns]
        rows.append(_row(species, pairs, columns * len(groups), word, thresholds))
    return head + rows if rows else []


def _pair(comparison):
    return comparison.ln_bayes_factor, comparison.ln_bayes_factor_err


def _inflated(comparison):
    if comparison.ln_bayes_factor_inflated is None:
        return None
    return comparison.ln_bayes_factor_inflated, comparison.ln_bayes_factor_inflated_err or 0.0


def _row(
    label: str, pairs: Sequence[tuple[float, float] | None], n_cells: int, word: str, thresholds: Thresholds
) -> str:
    cells = [_cell(pair, thresholds) for pair in pairs] + ["-"] * (n_cells - len(pairs))
    text = f"{label[: _LABEL_COLUMNS - 1]:<{_LABEL_COLUMNS}}"
    text += "".join(f"{cell:>{_CELL_COLUMNS}}" for cell in cells)
    # Four cells leave a word of fifteen letters no more than a single space in front of it.
    gap = " " if n_cells > 3 else "  "
    return f"{text}{gap}{word}"[:MAX_COLUMNS]


def _cell(pair: tuple[float, float] | None, thresholds: Thresholds) -> str:
    if pair is None:
        return "-"
    value, err = pair
    decimals = 2 if abs(value) < 100 else 1 if abs(value) < 10_000 else 0
    text = f"{format_ln_b(value, decimals, thresholds)}+-{err:.2f}"
    return text if len(text) < _CELL_COLUMNS else f"{value:.3g}+-{err:.1g}"


# --- goodness of fit ----------------------------------------------------------------------------------------


def _goodness_lines(result: CheckResult) -> list[str]:
    best, null = best_model(result.fits), best_null(result.fits)
    roles: dict[str, list[str]] = {}
    for fit, role in ((best, "best with absorbers"), (null, "best without")):
        if fit is not None:
            roles.setdefault(fit.name, []).append(role)
    if any(fit.name == "flat" for fit in result.fits):
        roles.setdefault("flat", [])
    head = f"{'fit':<{_LABEL_COLUMNS + 4}}{'chi2':>10}{'dof':>6}{'p':>10}{'ln evidence':>18}"
    return [head] + [_goodness_row(result.fit(name), role) for name, role in roles.items()]


def _goodness_row(fit: Fit, roles: Sequence[str]) -> str:
    p_value = f"{fit.p_chi2:.2g}" if fit.p_chi2 >= 1e-99 else "-" if math.isnan(fit.p_chi2) else "<1e-99"
    evidence = f"{fit.ln_evidence:.2f}+-{fit.ln_evidence_err:.2f}"
    text = f"{fit.name:<{_LABEL_COLUMNS + 4}}{fit.chi2:>10.1f}{fit.dof:>6d}{p_value:>10}{evidence:>18}"
    return f"{text}  {', '.join(roles)}".rstrip()[:MAX_COLUMNS]


# --- assumptions, notes -------------------------------------------------------------------------------------


def _assumption_lines(result: CheckResult) -> list[str]:
    """What the numbers rest on, most telling first: the end is what gets cut when space is short."""
    spectrum, system, settings = result.spectrum, result.system, result.settings
    run = f"seed {settings.get('seed', '?')}"
    if settings.get("quick"):
        run += "; quick run: rougher, repeat without --quick before quoting it"
    lines = _wrap(run, "Run")
    if skipped := settings.get("skipped"):
        lines += _wrap("; ".join(text.rstrip(".") for text in skipped), "Skipped")
    lines += _inflation_lines(result)
    parts = len(spectrum.segment_names)
    lines += _wrap(
        f"{spectrum.source or 'no file'}: {spectrum.n_bins} bins, {spectrum.wavelength_um.min():.3g}"
        f"-{spectrum.wavelength_um.max():.3g} um" + (f", {parts} parts" if parts > 1 else ""),
        "Data",
    )
    lines += _wrap(
        f"{system.planet_name}: T_eq {system.equilibrium_temperature_k:.0f} K, "
        f"{system.planet_mass_mjup:.3g} MJup, {system.planet_radius_rjup:.3g} RJup; "
        f"star {system.star_radius_rsun:.3g} RSun",
        "Planet",
    )
    lines += _wrap(
        f"{system.background} background; scale height {result.scale_height_km:.0f} km, "
        f"{result.scale_height_ppm:.0f} ppm of depth",
        "Air",
    )
    ranges = {
        name: value
        for name, value in settings.get("priors", {}).items()
        if value not in _UNSET and _is_used(name, result)
    }
    priors = [_prior_text(name, value) for name, value in ranges.items()]
    if priors:
        lines += _wrap(f"{'; '.join(priors)}; uniform unless named otherwise", "Priors")
    lines += _species_lines(settings)
    tables = settings.get("tables", {})
    # One table a species is the rule, and what the rule leaves unsaid needs no line.
    if list(tables) != settings.get("species", []):
        lines += _wrap(", ".join(tables) if tables else "none covers this spectrum", "Tables")
    return lines


def _is_used(prior: str, result: CheckResult) -> bool:
    """Whether a prior belongs to something that this result holds."""
    rival, nuisance = _RIVAL_OF_PRIOR.get(prior), _NUISANCE_OF_PRIOR.get(prior)
    if rival is None and nuisance is None:
        return True
    is_on = bool(nuisance and result.settings.get("nuisances", {}).get(nuisance))
    return is_on or any(found.name == rival for found in result.rivals)


def _inflation_lines(result: CheckResult) -> list[str]:
    if not result.inflated:
        return []
    fit = best_model(result.inflated) or best_null(result.inflated)
    factor = fit.parameters.get("error_factor")
    if factor is None:
        return _wrap("free to grow in the inflated fits", "Errors")
    size = f"{factor.median:.2f} ({factor.lower:.2f}..{factor.upper:.2f})"
    return _wrap(f"times {size} in the inflated fit of {fit.name}", "Errors")


def _prior_text(name: str, value) -> str:
    label = _PRIOR_LABELS.get(name, name)
    if isinstance(value, str | int | float):
        return f"{label} {_number(value)}"
    if len(value) == 2 and not any(isinstance(end, str | list | tuple) for end in value):
        return f"{label} {_number(value[0])}..{_number(value[1])}"
    return ", ".join(f"{label} {' '.join(_number(x) for x in entry)}" for entry in value)


def _number(value) -> str:
    return value if isinstance(value, str) else f"{float(value):.4g}"


def _species_lines(settings: dict) -> list[str]:
    """Species grouped by the reason they were taken, since many share one."""
    reasons = settings.get("species_reasons", {})
    groups: dict[str, list[str]] = {}
    for species in settings.get("species", []):
        groups.setdefault(reasons.get(species, "no reason given").rstrip("."), []).append(species)
    texts = [f"{', '.join(names)} ({reason})" for reason, names in groups.items()]
    lines = _wrap("; ".join(texts) or "none", "Species")
    for species, reason in settings.get("untested", {}).items():
        lines += _wrap(f"{species}: {reason}", "Untested")
    return lines


def _note_paragraphs(result: CheckResult) -> list[list[str]]:
    """Warnings first, since the end is what gets cut."""
    notes = (*result.spectrum.notes, *result.system.notes)
    return [_wrap(text, "Warning") for text in result.warnings] + [_wrap(text, "Note") for text in notes]


def _closing_lines(result: CheckResult) -> list[str]:
    words = {result.verdict.feature, *result.verdict.species.values()}
    if {*STANDING_WORDS, "interchangeable"} & words:
        return ["A detected molecule is not a detected biosphere; ln B is not a sigma."]
    if "confounded" in words:
        return ["What is confounded is not a detected molecule; ln B is not a sigma."]
    return ["Not shown is not the same as absent; ln B is not a sigma."]
