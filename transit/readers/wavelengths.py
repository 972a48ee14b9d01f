"""Wavelength columns to bin centres and half widths in micrometre."""

from __future__ import annotations

import numpy as np

from transit.errors import InputFileError
from transit.readers import bins
from transit.readers.cells import numbers
from transit.readers.columns import Choice
from transit.readers.names import Column
from transit.readers.options import WAVELENGTH_UNITS, ReadOptions
from transit.readers.quantities import StatedUnit, format_number, from_um, half_width_to_um, to_um
from transit.readers.settled import partner_unit, refuse_not_positive, settle_unit

_WAVELENGTH_RANGE_UM = (0.1, 30.0)


def read_wavelengths(table, choice: Choice, options: ReadOptions, segment):
    """Convert the wavelength, width or edge columns to bins.

    Parameters
    ----------
    table : RawTable
    choice : Choice
    options : ReadOptions
    segment : ndarray of int, shape (N,)
        Widths are compared with the spacing within one segment.

    Returns
    -------
    centre_um, half_um : ndarray, shape (N,)
        Micrometre, in file order; half widths are NaN where unknown.
    notes : list of str

    Raises
    ------
    InputFileError
        If a cell is no positive number, the unit or the kind of width is not settled, or a wavelength is out
        of range.
    """
    notes: list[str] = []
    main = choice.wavelength or choice.low
    centre = numbers(table, main.name)
    flag = "--wavelength-unit"
    unit = settle_unit(table, main, options.wavelength_unit, WAVELENGTH_UNITS, flag, notes)
    refuse_not_positive(table, main.name, centre, "a positive wavelength")
    if unit is None:
        raise _no_wavelength_unit(table, main, centre)
    if choice.low is not None:
        centre_um, half_um = _from_edges(table, choice, unit.unit, notes)
    elif choice.width is not None:
        width = numbers(table, choice.width.name)
        refuse_not_positive(table, choice.width.name, width, "a positive width (blank where unknown)")
        width_unit = partner_unit(table, choice.width, main, unit.unit, WAVELENGTH_UNITS, flag)
        scaled = from_um(to_um(centre, unit.unit), width_unit)
        kind = _width_kind(table, choice.width, options, scaled, width, segment, notes)
        half = width / 2 if kind == "full" else width
        _refuse_wide_wavenumbers(table, choice.width, half, scaled, width_unit)
        centre_um, half_um = half_width_to_um(centre, half, unit.unit, width_unit)
    else:
        centre_um, half_um = to_um(centre, unit.unit), np.full(len(centre), np.nan)
    _refuse_out_of_range(table, main, centre_um, unit)
    return centre_um, half_um, notes


def _no_wavelength_unit(table, column: Column, values) -> InputFileError:
    median = float(np.median(values)) if len(values) else float("nan")
    readings = ", ".join(
        f"{format_number(float(to_um(np.array([median]), unit)[0]))} um if {unit}"
        for unit in WAVELENGTH_UNITS
    )
    return table.refusal(
        f"The unit of column {column.name!r} is not stated; its median is {format_number(median)}, that is "
        f"{readings}. Name the unit with --wavelength-unit."
    )


def _from_edges(table, choice: Choice, unit: str, notes):
    low = numbers(table, choice.low.name)
    high = numbers(table, choice.high.name)
    for column, values in ((choice.low, low), (choice.high, high)):
        refuse_not_positive(table, column.name, values, "a positive wavelength")
    low_unit = _edge_unit(table, choice, choice.low, unit)
    high_unit = _edge_unit(table, choice, choice.high, unit)
    low_um, high_um = to_um(low, low_unit), to_um(high, high_unit)
    if low_unit == "cm-1":
        low_um, high_um = high_um, low_um
    bad = np.flatnonzero(low_um >= high_um)
    if len(bad):
        i = int(bad[0])
        raise table.refusal(
            f"{choice.low.name} is {format_number(low[i])} and {choice.high.name} is "
            f"{format_number(high[i])}, "
            "expected the lower edge below the upper one. Correct the row.",
            i,
        )
    middle, half = (low_um + high_um) / 2, (high_um - low_um) / 2
    if choice.wavelength is not None:
        centre_um = to_um(numbers(table, choice.wavelength.name), unit)
        outside = np.flatnonzero(np.abs(centre_um - middle) > half)
        if len(outside):
            i = int(outside[0])
            raise table.refusal(
                f"{choice.wavelength.name} is {format_number(centre_um[i])} um, outside its bin "
                f"{format_number(low_um[i])}-{format_number(high_um[i])} um. Correct the row, or the units.",
                i,
            )
        shifted = int(np.sum(np.abs(centre_um - middle) > 0.1 * half))
        if shifted:
            notes.append(
                f"{shifted} centres differ from the mid-points of their edges; the mid-points were used."
            )
        unknown = np.isnan(middle)
        middle = np.where(unknown, centre_um, middle)
    return middle, half


def _edge_unit(table, choice, edge, unit) -> str:
    main = choice.wavelength or choice.low
    if edge is main:
        return unit
    return partner_unit(table, edge, main, unit, WAVELENGTH_UNITS, "--wavelength-unit")


def _width_kind(table, column: Column, options, centre, width, segment, notes) -> str:
    """Decide between half and full widths: option, else name, else the spacing of touching bins."""
    named = column.role if column.role in ("half", "full") else None
    ratio = bins.spacing_ratio(centre, width, segment)
    seen = bins.kind_from_spacing(ratio)
    measured = f"the spacing of the bins is {ratio:.2f} times this column"
    if options.width_kind is not None:
        if named not in (None, options.width_kind):
            notes.append(
                f"--width-kind {options.width_kind} was used for column {column.name!r}, against its name."
            )
        elif named is None and seen not in (None, options.width_kind):
            notes.append(
                f"--width-kind {options.width_kind} was used for column {column.name!r}, although {measured}."
            )
        return options.width_kind
    if named is not None:
        # Half widths of bins with gaps, and full widths of overlapping bins, are common: only a note.
        if seen not in (None, named):
            notes.append(
                f"Column {column.name!r} is called {named} width, but {measured} (touching bins: 1 for "
                "full, 2 "
                f"for half widths); it was read as named. --width-kind {seen} reads it the other way."
            )
        return named
    if np.all(np.isnan(width)):
        return "full"
    if seen is None:
        found = measured if np.isfinite(ratio) else "there are too few neighbouring bins to tell"
        raise table.refusal(
            f"Column {column.name!r} may hold half or full widths: {found}, expected near 1 for full and "
            "near 2 "
            "for half widths of touching bins. Say which with --width-kind half or --width-kind full."
        )
    notes.append(f"Column {column.name!r} was read as {seen} width: {measured}, and the bins touch.")
    return seen


def _refuse_wide_wavenumbers(table, column, half, centre, width_unit) -> None:
    if width_unit != "cm-1":
        return
    bad = np.flatnonzero(half >= centre)
    if len(bad):
        i = int(bad[0])
        raise table.refusal(
            f"{column.name} is {format_number(half[i])} cm-1 from centre to edge, expected less than the "
            f"wavenumber {format_number(centre[i])} cm-1 itself. Correct the row, or the units.",
            i,
        )


def _refuse_out_of_range(table, column: Column, centre_um, unit: StatedUnit) -> None:
    low, high = _WAVELENGTH_RANGE_UM
    bad = np.flatnonzero((centre_um < low) | (centre_um > high))
    if len(bad):
        i = int(bad[0])
        raise table.refusal(
            f"{column.name} is {format_number(centre_um[i])} um when read in {unit.unit} ({unit.origin}), "
            "expected "
            f"{low:g} to {high:g} um. If the unit is wrong, name the right one with --wavelength-unit.",
            i,
        )
