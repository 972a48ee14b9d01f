"""Rows of a table that holds several planets, papers or kinds of spectrum: which ones are meant."""

from __future__ import annotations

import html
import re

from transit.readers.cells import is_missing
from transit.readers.columns import describe_all
from transit.readers.options import ReadOptions
from transit.readers.raw import RawTable

_REFERENCE_KEYS = ("reference", "reference(s)", "references", "ref", "source", "bibcode", "referenc")
_PLANET_KEYS = ("pl_name", "planet", "planet_name", "planet name", "target", "object")


def plain_text(cell) -> str:
    """Return the visible text of a cell that may hold an HTML link."""
    return " ".join(html.unescape(re.sub(r"<[^>]*>", " ", str(cell))).split())


def _folded(text: str) -> str:
    return re.sub(r"[\s_-]+", "", text).lower()


def same_planet(first: str, second: str) -> bool:
    """Compare two planet names without regard to case, blanks and hyphens."""
    return _folded(first) == _folded(second)


def may_be_same_planet(first: str, second: str) -> bool:
    """Compare as `same_planet`, but let a header name the star alone ("WASP-39" for "WASP-39 b")."""
    short, long = sorted((_folded(first), _folded(second)), key=len)
    return short == long or (long[:-1] == short and long[-1:].isalpha())


def select_rows(table: RawTable, options: ReadOptions) -> tuple[RawTable, str, str]:
    """Reduce a table to one planet and one reference.

    Parameters
    ----------
    table : RawTable
    options : ReadOptions
        `planet` is compared without regard to case, blanks and hyphens; `reference` is a part of the text
        of the reference, in any case.

    Returns
    -------
    table : RawTable
        The rows chosen, with notes on the choice.
    planet, reference : str
        As the table or its header names them, "" when it does not.

    Raises
    ------
    InputFileError
        If several planets or references are left, none matches, or the spectrum is not one of transmission.
    """
    _refuse_other_kinds(table)
    table, planet = _select_planet(table, options.planet)
    table, reference = _select_reference(table, options.reference)
    return table, planet, reference


def _refuse_other_kinds(table: RawTable) -> None:
    kind = table.meta.get("spec_type", "")
    if kind and "transmission" not in kind.lower():
        raise table.refusal(
            f"The header says SPEC_TYPE = {kind}, expected Transmission: only transmission spectra can be "
            "read."
        )


def _distinct(table: RawTable, role: str) -> tuple[str | None, list[str]]:
    """Return the name of the column of a role, and its texts row by row."""
    column = next((c for c in describe_all(table) if c.role == role), None)
    if column is None:
        return None, []
    texts = ["" if is_missing(cell) else plain_text(cell) for cell in table.cells[column.name]]
    return column.name, texts


def _quoted(texts) -> str:
    return ", ".join(repr(text) if text else "(blank)" for text in sorted(set(texts)))


def _select_planet(table: RawTable, wanted: str | None) -> tuple[RawTable, str]:
    name, texts = _distinct(table, "planet")
    if name is None:
        planet = next((table.meta[key] for key in _PLANET_KEYS if table.meta.get(key)), "")
        if wanted and planet and not may_be_same_planet(wanted, planet):
            raise table.refusal(f"--planet is {wanted!r}, but the header says that the planet is {planet!r}.")
        if wanted and not planet:
            raise table.refusal(
                f"--planet is {wanted!r}, but the table names no planets; leave --planet out."
            )
        return table, planet
    if wanted:
        rows = [i for i, text in enumerate(texts) if same_planet(text, wanted)]
        if not rows:
            raise table.refusal(f"--planet is {wanted!r}, but column {name!r} holds {_quoted(texts)}.")
        return table.take(rows), texts[rows[0]]
    if len(set(texts)) > 1:
        raise table.refusal(
            f"The table holds several planets in column {name!r}: {_quoted(texts)}. Choose one with --planet."
        )
    return table, texts[0]


def _select_reference(table: RawTable, wanted: str | None) -> tuple[RawTable, str]:
    name, texts = _distinct(table, "reference")
    if name is None:
        found = next((table.meta[key] for key in _REFERENCE_KEYS if table.meta.get(key)), "")
        reference = plain_text(found)
        if wanted and wanted.lower() not in reference.lower():
            stated = f"the header says {reference!r}" if reference else "the table names no references"
            raise table.refusal(f"--reference is {wanted!r}, but {stated}.")
        return table, reference
    rows = list(range(len(texts)))
    if wanted:
        rows = [i for i in rows if wanted.lower() in texts[i].lower()]
        if not rows:
            raise table.refusal(f"--reference is {wanted!r}, but column {name!r} holds {_quoted(texts)}.")
    left = {texts[i] for i in rows}
    if len(left) > 1:
        how = "a longer part of one" if wanted else "a part of one"
        raise table.refusal(
            f"Several references are left in column {name!r}: {_quoted(left)}. Choose with --reference, "
            f"{how}."
        )
    return table.take(rows), texts[rows[0]]
