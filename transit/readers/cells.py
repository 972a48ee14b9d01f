"""Cells to numbers: what counts as missing, as a limit, as a number."""

from __future__ import annotations

import math
import re

import numpy as np

from transit.readers.raw import RawTable

MISSING_TEXTS = frozenset(
    {"", "...", "..", "…", "--", "---", "-", "—", "null", "none", "nan", "n/a", "na", "<na>", "masked"}
)
_FORTRAN = re.compile(r"^([+-]?(?:\d+\.?\d*|\.\d+))[dD]([+-]?\d+)$")
_PLAIN = re.compile(r"^[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?$")
_COMMA = re.compile(r"^[+-]?\d+,\d+(?:[eEdD][+-]?\d+)?$")


def is_missing(cell, declared: frozenset[str] = frozenset()) -> bool:
    """Tell whether a cell holds no value: masked, blank, a usual mark, or one the header declares.

    Numbers such as -99 count only when declared: an undeclared -99 may be a slip that must not vanish.
    """
    if cell is None:
        return True
    if isinstance(cell, (float, np.floating)) and math.isnan(cell):
        return True
    text = str(cell).strip().lower()
    if text in MISSING_TEXTS or text in declared:
        return True
    # A declared -99 also covers the spellings -99.0 and -99.00.
    numbers = {float(mark) for mark in declared if _PLAIN.match(mark)}
    return bool(numbers) and bool(_PLAIN.match(text)) and float(text) in numbers


def is_limit(cell) -> bool:
    """Tell whether a cell is written as an upper or lower limit."""
    return isinstance(cell, str) and cell.strip()[:1] in ("<", ">", "≤", "≥")


def parse_number(cell) -> float:
    """Return the number in a cell, or raise ValueError; Fortran D exponents and the Unicode minus are read.

    Python's own `float` also takes "1_000" and "infinity", which no table means, hence the stricter pattern.
    """
    if isinstance(cell, (bool, np.bool_)):
        raise ValueError(cell)
    if isinstance(cell, (int, float, np.integer, np.floating)):
        return float(cell)
    text = str(cell).strip().replace("\N{MINUS SIGN}", "-")
    fortran = _FORTRAN.match(text)
    if fortran:
        text = f"{fortran[1]}e{fortran[2]}"
    if not _PLAIN.match(text):
        raise ValueError(cell)
    return float(text)


def has_decimal_comma(cell) -> bool:
    """Tell whether a cell looks like a number with a comma as its decimal sign."""
    return isinstance(cell, str) and bool(_COMMA.match(cell.strip().replace("\N{MINUS SIGN}", "-")))


def count_usable(table: RawTable, name: str) -> int:
    """Count the cells of a column that hold something."""
    return sum(not is_missing(cell, table.missing) for cell in table.cells[name])


def numbers(table: RawTable, name: str) -> np.ndarray:
    """Convert a column to floats.

    Parameters
    ----------
    table : RawTable
    name : str
        Column of that table.

    Returns
    -------
    ndarray, shape (N,)
        NaN where the cell is missing or a limit.

    Raises
    ------
    InputFileError
        At the first cell that is neither a number nor missing, or that is infinite.
    """
    comma = _uses_decimal_comma(table, name)
    out = np.full(table.n_rows, np.nan)
    for i, cell in enumerate(table.cells[name]):
        if is_missing(cell, table.missing) or is_limit(cell):
            continue
        text = cell.replace(",", ".") if comma and has_decimal_comma(cell) else cell
        try:
            out[i] = parse_number(text)
        except ValueError as error:
            raise table.refusal(_not_a_number(name, cell), i) from error
        if not math.isfinite(out[i]):
            raise table.refusal(_not_a_number(name, cell), i)
    return out


def _not_a_number(name: str, cell) -> str:
    return (
        f"{name} is {str(cell)!r}, expected a finite number. Correct the cell, or leave it blank so that the "
        "row is left out."
    )


def _uses_decimal_comma(table: RawTable, name: str) -> bool:
    """Decide about decimal commas for a whole column, because a mixed column has no safe reading."""
    column = table.cells[name]
    first = next((i for i, cell in enumerate(column) if has_decimal_comma(cell)), None)
    if first is None:
        return False
    if not table.decimal_comma:
        raise table.refusal(
            f"{name} is {column[first]!r}, which looks like a decimal comma; expected a decimal point. "
            "Write the numbers with points, or separate the columns with semicolons.",
            first,
        )
    if any(isinstance(cell, str) and "." in cell and not is_missing(cell, table.missing) for cell in column):
        raise table.refusal(
            f"{name} mixes decimal commas ({column[first]!r}) and decimal points. Write all numbers in "
            "one way.",
            first,
        )
    return True


def comma_note(table: RawTable, names) -> list[str]:
    """Return the note about decimal commas in these columns, if there are any."""
    found = [name for name in names if any(has_decimal_comma(cell) for cell in table.cells[name])]
    return [f"Decimal commas were read as decimal points in {', '.join(found)}."] if found else []
