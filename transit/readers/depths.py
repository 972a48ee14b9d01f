"""Depth and error columns to fractions, checked against the radii of the system."""

from __future__ import annotations

import numpy as np

from transit.errors import InputFileError
from transit.readers.cells import numbers
from transit.readers.columns import Choice
from transit.readers.names import SQUARE_LABEL, Column
from transit.readers.options import DEPTH_UNITS, ReadOptions
from transit.readers.quantities import StatedUnit, error_to_fraction, format_number, to_fraction
from transit.readers.settled import partner_unit, refuse_not_positive, settle_unit
from transit.records import System
from transit.units import JUPITER_RADIUS_M, PPM, SOLAR_RADIUS_M

_DEPTH_FACTOR = 2.0  # allowed ratio of the median depth and the squared radius ratio of the system
_ASYMMETRY = 1.2  # ratio of upper and lower error from which symmetrising is said


def read_depths(table, choice: Choice, options: ReadOptions, system):
    """Convert the depth (or radius ratio) and error columns.

    Parameters
    ----------
    table : RawTable
    choice : Choice
    options : ReadOptions
    system : System or None
        Its squared radius ratio must agree with the median depth within a factor of two.

    Returns
    -------
    depth, depth_err : ndarray, shape (N,)
        Fractions, in file order; upper and lower errors averaged (Barlow 2003, physics/0306138).
    notes : list of str

    Raises
    ------
    InputFileError
        If a cell is no number, an error not positive, or the unit not settled or contradicted by the system.
    """
    notes: list[str] = []
    value = numbers(table, choice.value.name)
    upper = numbers(table, choice.error.name)
    lower = upper if choice.error_minus is None else np.abs(numbers(table, choice.error_minus.name))
    for column, errors in ((choice.error, upper), (choice.error_minus, lower)):
        if column is not None:
            refuse_not_positive(table, column.name, errors, "a positive error")
    flag = "--depth-unit"
    unit = settle_unit(table, choice.value, options.depth_unit, DEPTH_UNITS, flag, notes)
    expected = None if system is None else _squared_radius_ratio(system)
    if unit is None or (unit.origin == SQUARE_LABEL and system is None):
        raise _no_depth_unit(table, choice.value, value, expected)
    if unit.unit == "radius-ratio":
        refuse_not_positive(table, choice.value.name, value, "a positive radius ratio")
    depth = to_fraction(value, unit.unit)
    if expected is not None and len(depth):
        _refuse_contradiction(table, choice.value, value, unit, system)
    _refuse_deep(table, choice.value, depth, unit)
    _refuse_bounds(table, choice, value, upper, lower)
    error_unit = partner_unit(table, choice.error, choice.value, unit.unit, DEPTH_UNITS, flag)
    if error_unit == "radius-ratio" and unit.unit != "radius-ratio":
        value = np.sqrt(np.abs(depth))
    depth_err = error_to_fraction((upper + lower) / 2, value, error_unit)
    notes += _error_notes(choice, upper, lower, depth, depth_err)
    notes.append(_unit_note(choice.value, unit))
    return depth, depth_err, notes


def _squared_radius_ratio(system: System) -> float:
    return (system.planet_radius_rjup * JUPITER_RADIUS_M / (system.star_radius_rsun * SOLAR_RADIUS_M)) ** 2


def _ppm(fraction: float) -> str:
    return f"{format_number(fraction / PPM)} ppm"


def _readings(median: float) -> str:
    return ", ".join(f"{_ppm(float(to_fraction(np.array(median), unit)))} if {unit}" for unit in DEPTH_UNITS)


def _agreeing(median: float, expected: float) -> list[str]:
    """Return the depth units under which a median agrees with the expected depth."""
    return [
        unit
        for unit in DEPTH_UNITS
        if 1 / _DEPTH_FACTOR <= float(to_fraction(np.array(median), unit)) / expected <= _DEPTH_FACTOR
    ]


def _no_depth_unit(table, column: Column, values, expected) -> InputFileError:
    median = float(np.median(values)) if len(values) else float("nan")
    text = (
        f"The unit of column {column.name!r} is not stated; its median is {format_number(median)}, that "
        "is a depth "
        f"of {_readings(median)}."
    )
    if expected is not None:
        text += f" The radii of the system give {_ppm(expected)}"
        fits = _agreeing(median, expected)
        text += f", which agrees with {' and '.join(fits)}." if fits else ", which agrees with none of these."
    return table.refusal(text + " Name the unit with --depth-unit.")


def _refuse_contradiction(table, column: Column, values, unit: StatedUnit, system: System) -> None:
    expected = _squared_radius_ratio(system)
    median_value = float(np.median(values))
    median = float(np.median(to_fraction(values, unit.unit)))
    if 1 / _DEPTH_FACTOR <= median / expected <= _DEPTH_FACTOR:
        return
    fits = [u for u in _agreeing(median_value, expected) if u != unit.unit]
    if fits:
        advice = f"If {' or '.join(fits)} is right, give --depth-unit {fits[0]}"
    else:
        advice = "No unit agrees: check --depth-column"
    raise table.refusal(
        f"Column {column.name!r} has the median {format_number(median_value)}; read as {unit.unit} "
        f"({unit.origin}) the depth is {_ppm(median)}, but the radii of the system (star "
        f"{system.star_radius_rsun:g} Rsun, planet {system.planet_radius_rjup:g} Rjup) give "
        f"{_ppm(expected)}, more "
        f"than a factor of {_DEPTH_FACTOR:g} away. The median would be {_readings(median_value)}. {advice}; "
        "otherwise correct the radii in the system file."
    )


def _refuse_deep(table, column: Column, depth, unit: StatedUnit) -> None:
    bad = np.flatnonzero(np.abs(depth) > 1)
    if len(bad):
        i = int(bad[0])
        raise table.refusal(
            f"{column.name} is a depth of {format_number(depth[i])} when read as {unit.unit} "
            f"({unit.origin}), "
            "expected at most 1. If the unit is wrong, name the right one with --depth-unit.",
            i,
        )


def _refuse_bounds(table, choice: Choice, value, upper, lower) -> None:
    """Refuse columns that hold the bounds of the depth, as one archive set does, in place of its errors."""
    if choice.error_minus is None or not len(value):
        return
    around = np.all(upper > value) and np.all(lower < value) and np.all(value > 0)
    if around and np.median((upper - lower) / value) < 0.5:
        raise table.refusal(
            f"Columns {choice.error.name!r} and {choice.error_minus.name!r} hold the bounds of the depth "
            "itself, "
            "expected errors. Subtract the depth from them."
        )


def _unit_note(column: Column, unit: StatedUnit) -> str:
    how = "squared from the radius ratio" if unit.unit == "radius-ratio" else f"read as {unit.unit}"
    return f"The depth was {how} in column {column.name!r} ({unit.origin})."


def _error_notes(choice: Choice, upper, lower, depth, depth_err) -> list[str]:
    notes = []
    ratio = np.maximum(upper / lower, lower / upper)
    wide = int(np.sum(ratio > _ASYMMETRY))
    if choice.error_minus is not None and wide:
        notes.append(
            f"Upper and lower errors differ by more than a factor of {_ASYMMETRY:g} in {wide} of "
            f"{len(ratio)} bins (at most {ratio.max():.2f}); their mean was used."
        )
    if len(depth_err) > 1 and np.all(upper == upper[0]) and np.all(lower == lower[0]):
        notes.append(
            f"All errors in column {choice.error.name!r} are equal ({format_number(upper[0])}): probably a "
            "placeholder."
        )
    if len(depth) and np.median(depth_err) > abs(np.median(depth)):
        notes.append("The errors are larger than the depths: check the unit of the errors.")
    return notes
