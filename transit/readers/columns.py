"""Which columns of a table are the wavelength, its width, the depth and its errors."""

from __future__ import annotations

from dataclasses import dataclass

from transit.readers.cells import count_usable
from transit.readers.names import Column, describe
from transit.readers.options import ReadOptions
from transit.readers.raw import RawTable


@dataclass(frozen=True, slots=True)
class Choice:
    """The columns that a spectrum is made of; None where there is none.

    `wavelength` is None only when `low` and `high` are there. `error_minus` is set for asymmetric errors.
    """

    wavelength: Column | None
    width: Column | None
    low: Column | None
    high: Column | None
    value: Column
    error: Column
    error_minus: Column | None
    limit: Column | None
    segment: Column | None

    def names(self) -> list[str]:
        """Names of the columns that hold numbers in use."""
        columns = (
            self.wavelength,
            self.width,
            self.low,
            self.high,
            self.value,
            self.error,
            self.error_minus,
        )
        return [column.name for column in columns if column is not None]


def describe_all(table: RawTable) -> list[Column]:
    """Describe every column of a table; `e_X` and `E_X` of journal tables become lower and upper errors."""
    described = []
    for name in table.names:
        column = describe(name)
        twin = name[:1].swapcase() + name[1:]
        if column.role == "error" and name[:2] in ("e_", "E_") and twin in table.names:
            direction = "minus" if name[0] == "e" else "plus"
            column = Column(name, "error", column.unit, column.target, direction, column.base)
        described.append(column)
    return described


def choose_columns(table: RawTable, options: ReadOptions) -> Choice:
    """Choose the columns to read.

    Parameters
    ----------
    table : RawTable
        Already reduced to the rows of one planet and reference.
    options : ReadOptions
        Column overrides win over recognition.

    Returns
    -------
    Choice

    Raises
    ------
    InputFileError
        If a needed column is missing, or several could be meant.
    """
    columns = describe_all(table)
    value = _choose_value(table, columns, options)
    low, high = _edges(table, columns, options)
    wavelength = _override(table, columns, options.wavelength_column, "--wavelength-column", "wavelength")
    if wavelength is None:
        wavelength = _one(table, columns, ("wavelength",), "wavelength", "--wavelength-column", low is None)
    width = _override(table, columns, options.width_column, "--width-column", "width")
    if width is None and low is None:
        for role in ("half", "full", "width"):
            width = width or _one(table, columns, (role,), "bin width", "--width-column", False)
    error, minus = _choose_errors(table, columns, value, options)
    return Choice(
        wavelength=wavelength,
        width=width,
        low=low,
        high=high,
        value=value,
        error=error,
        error_minus=minus,
        limit=_limit(columns, value),
        segment=_segment(table, columns),
    )


def _listing(table: RawTable) -> str:
    return "its columns are " + ", ".join(repr(name) for name in table.names)


def _override(table, columns, wanted, flag, role) -> Column | None:
    """Return the column that an option names; its own role is kept when it fits the use."""
    if wanted is None:
        return None
    exact = [c for c in columns if c.name == wanted]
    found = exact or [c for c in columns if c.name.strip().lower() == wanted.strip().lower()]
    if len(found) != 1:
        raise table.refusal(f"There is no column {wanted!r} as {flag} asks; {_listing(table)}.")
    column = found[0]
    fitting = {"width": ("half", "full", "width"), "depth": ("depth", "ratio")}.get(role, (role,))
    if column.role in fitting:
        return column
    return Column(column.name, role, column.unit, base=column.base, direction=column.direction)


def _one(table, columns, roles, what, flag, needed) -> Column | None:
    found = [c for c in columns if c.role in roles]
    archive = [c for c in found if c.archive]
    filled = [c for c in archive or found if count_usable(table, c.name)]
    # The archive's own names win, then columns that hold something.
    found = filled or archive or found
    if roles == ("wavelength",) and len(found) > 1:
        lengths = [c for c in found if not (c.unit and c.unit.unit == "cm-1")]
        found = lengths or found
    if len(found) == 1:
        return found[0]
    if found:
        names = ", ".join(repr(c.name) for c in found)
        raise table.refusal(f"Several columns could be the {what}: {names}. Name one with {flag}.")
    if not needed:
        return None
    raise table.refusal(f"No column for the {what} was recognised; {_listing(table)}. Name it with {flag}.")


def _edges(table, columns, options) -> tuple[Column | None, Column | None]:
    if options.width_column is not None:
        return None, None
    low = _one(table, columns, ("low",), "lower edge of a bin", "--width-column", False)
    high = _one(table, columns, ("high",), "upper edge of a bin", "--width-column", False)
    return (low, high) if low and high else (None, None)


def _choose_value(table, columns, options) -> Column:
    """Choose depth or radius ratio: the depth, unless it is mostly empty and the ratio is not."""
    named = _override(table, columns, options.depth_column, "--depth-column", "depth")
    if named is not None:
        return named
    depth = _one(table, columns, ("depth",), "transit depth", "--depth-column", False)
    ratio = _one(table, columns, ("ratio",), "radius ratio", "--depth-column", False)
    if depth is None and ratio is None:
        return _one(table, columns, ("depth",), "transit depth", "--depth-column", True)
    if depth is None or ratio is None:
        return depth or ratio
    if options.depth_unit == "radius-ratio" and count_usable(table, ratio.name):
        return ratio
    return ratio if count_usable(table, ratio.name) > 2 * count_usable(table, depth.name) else depth


def _choose_errors(table, columns, value, options) -> tuple[Column, Column | None]:
    named = _override(table, columns, options.error_column, "--error-column", "error")
    if named is not None:
        return named, None
    errors = [c for c in columns if c.role == "error"]
    of_value = [c for c in errors if c.base and (c.base == value.base or c.target == value.role)]
    if value.archive:
        of_value = [c for c in of_value if c.archive] or of_value
    found = of_value or [c for c in errors if not c.base]
    plain = [c for c in found if not c.direction]
    plus = [c for c in found if c.direction == "plus"]
    minus = [c for c in found if c.direction == "minus" and count_usable(table, c.name)]
    for group, what in ((plain, "error"), (plus, "upper error"), (minus, "lower error")):
        if len(group) > 1:
            names = ", ".join(repr(c.name) for c in group)
            raise table.refusal(
                f"Several columns could be the {what}: {names}. Name one with --error-column."
            )
    if not plus and not plain:
        raise table.refusal(
            f"No column for the error of {value.name!r} was recognised; {_listing(table)}. Name it with "
            "--error-column. A spectrum without errors cannot be tested."
        )
    return (plus or plain)[0], (minus[0] if minus else None)


def _limit(columns, value) -> Column | None:
    found = [c for c in columns if c.role == "limit" and c.target in ("", value.role)]
    return next((c for c in found if c.target), found[0] if found else None)


def _segment(table, columns) -> Column | None:
    segment = [c for c in columns if c.role == "segment"]
    if segment:
        return segment[0]
    instrument = [c for c in columns if c.role == "instrument"]
    if instrument and len({str(cell).strip() for cell in table.cells[instrument[0].name]}) > 1:
        return instrument[0]
    return None
