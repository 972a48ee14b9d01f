"""The unit that holds for a column, and the checks that wavelengths and depths have in common."""

from __future__ import annotations

import numpy as np

from transit.errors import InputFileError
from transit.readers.names import Column
from transit.readers.quantities import StatedUnit, format_number, standard_unit
from transit.readers.raw import RawTable


def stated_unit(table: RawTable, column: Column) -> StatedUnit | None:
    """Return the unit stated for a column: by its name, else by the header, else by the archive's documents.

    Parameters
    ----------
    table : RawTable
    column : Column

    Returns
    -------
    StatedUnit or None
        With the standard name of the unit, or the text as written when the spelling is unknown.
    """
    header = table.units.get(column.name)
    candidates = [
        column.unit if column.unit and column.unit.origin == "its name" else None,
        StatedUnit(header, "the header") if header else None,
        column.unit,
    ]
    stated = next((unit for unit in candidates if unit is not None), None)
    if stated is None:
        return None
    unit = standard_unit(stated.unit) or stated.unit
    if column.role == "ratio" and unit == "fraction":
        unit = "radius-ratio"  # headers call a ratio "dimensionless", which is true of both
    return StatedUnit(unit, stated.origin)


def wrong_dimension(table: RawTable, column: Column, unit: StatedUnit, allowed, flag: str) -> InputFileError:
    """Return the refusal of a unit that cannot be one of this kind of column."""
    return table.refusal(
        f"The unit of column {column.name!r} is {unit.unit!r} according to {unit.origin}, expected one of "
        f"{', '.join(allowed)}. Name the right one with {flag}."
    )


def settle_unit(table, column, chosen, allowed, flag, notes) -> StatedUnit | None:
    """Return the unit that holds for a column: the option's, else the stated one, else None.

    Parameters
    ----------
    table : RawTable
    column : Column
    chosen : str or None
        Unit that the option `flag` names.
    allowed : tuple of str
        Standard names that this kind of column may have.
    flag : str
        The option, for messages.
    notes : list of str
        Extended when the option contradicts what is stated.

    Returns
    -------
    StatedUnit or None

    Raises
    ------
    InputFileError
        If the stated unit is not an allowed one and no option replaces it.
    """
    stated = stated_unit(table, column)
    if chosen is not None:
        if stated is not None and stated.unit != chosen:
            notes.append(
                f"{flag} {chosen} was used for column {column.name!r}, although {stated.origin} says "
                f"{stated.unit!r}."
            )
        return StatedUnit(chosen, flag)
    if stated is not None and stated.unit not in allowed:
        raise wrong_dimension(table, column, stated, allowed, flag)
    return stated


def partner_unit(table, partner, main, main_unit, allowed, flag) -> str:
    """Return the unit of a width or error: its own when it states another one than its main column.

    Parameters
    ----------
    table : RawTable
    partner, main : Column
        The width or error, and the wavelength or depth that it belongs to.
    main_unit : str
        Unit that holds for `main`.
    allowed, flag
        As for `settle_unit`.

    Returns
    -------
    str

    Raises
    ------
    InputFileError
        If the partner's own unit is not an allowed one.
    """
    own = stated_unit(table, partner)
    stated_main = stated_unit(table, main)
    if own is None or (stated_main is not None and own.unit == stated_main.unit):
        return main_unit
    if main_unit == "radius-ratio" and own.unit == "fraction":
        return main_unit  # the error of a ratio is as dimensionless as the ratio
    if own.unit not in allowed:
        raise wrong_dimension(table, partner, own, allowed, flag)
    return own.unit


def refuse_not_positive(table, name, values, expected) -> None:
    """Raise InputFileError, with the line, at the first of `values`, shape (N,), that is zero or negative."""
    bad = np.flatnonzero(values <= 0)
    if len(bad):
        raise table.refusal(
            f"{name} is {format_number(values[bad[0]])}, expected {expected}. Correct the cell, leave it "
            "blank, "
            f"or declare its mark for missing values in the header (# missing: {values[bad[0]]:g}).",
            int(bad[0]),
        )
