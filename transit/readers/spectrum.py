"""The reader itself: raw table, columns, units and bins put together to a depth spectrum."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from transit.errors import InputFileError
from transit.readers import bins
from transit.readers import columns as roles
from transit.readers.cells import comma_note, is_limit, is_missing, numbers
from transit.readers.columns import SQUARE_LABEL, Choice, Column, choose_columns, stated_unit
from transit.readers.formats import read_raw
from transit.readers.options import DEPTH_UNITS, WAVELENGTH_UNITS, ReadOptions
from transit.readers.quantities import (
    StatedUnit,
    error_to_fraction,
    format_number,
    half_width_to_um,
    to_fraction,
    to_um,
)
from transit.readers.raw import RawTable
from transit.readers.rows import same_planet, select_rows
from transit.records import DepthSpectrum, System
from transit.units import JUPITER_RADIUS_M, PPM, SOLAR_RADIUS_M

_WAVELENGTH_RANGE_UM = (0.1, 30.0)
_MIN_BINS = 3
_DEPTH_FACTOR = 2.0  # allowed ratio of the median depth and the squared radius ratio of the system
_ASYMMETRY = 1.2  # ratio of upper and lower error from which symmetrising is said


def read_depth_table(
    path, *, system: System | None = None, options: ReadOptions | None = None
) -> DepthSpectrum:
    """Read a transmission spectrum from a table in any of the usual formats.

    Parameters
    ----------
    path : str or path-like
        Text separated by commas, semicolons, tabs or blanks; ECSV; IPAC; VOTable; FITS; journal table.
    system : System, optional
        Star and planet: the median depth must agree with their squared radius ratio within a factor of two.
    options : ReadOptions, optional
        What the table does not say, or says wrongly.

    Returns
    -------
    DepthSpectrum
        Sorted by wavelength; micrometre and fractions. `notes` says what was read, left out or odd.

    Raises
    ------
    InputFileError
        If the file cannot be read, a cell is not a number, a unit is not stated or contradicts the system, or
        fewer than three bins are left. Units are never guessed.

    Notes
    -----
    Lower errors may be stored positive or negative; asymmetric errors are symmetrised to (upper + lower) / 2
    (methods 6.14; Barlow 2003, physics/0306138).

    Examples
    --------
    >>> read_depth_table("spectrum.csv", options=ReadOptions(depth_unit="percent")).n_bins
    28
    """
    options = options or ReadOptions()
    raw, sha256 = read_raw(path)
    table, planet, reference = select_rows(raw, options)
    choice = choose_columns(table, options)
    notes = _reading_notes(raw, table, choice, planet, system)
    table, left_out = _drop_unusable(table, choice)
    notes += left_out + comma_note(table, choice.names())
    segment, segment_names = _segments(table, choice)
    centre_um, half_um, wave_notes = _wavelengths(table, choice, options, segment)
    depth, depth_err, depth_notes = _depths(table, choice, options, system)
    rows = _Bins(centre_um, half_um, depth, depth_err, segment)
    rows, segment_names, order_notes = _sort(rows, segment_names)
    if len(rows.centre_um) < _MIN_BINS:
        raise table.refusal(
            f"{len(rows.centre_um)} usable bins are left, expected at least {_MIN_BINS}."
            + " ".join(["", *left_out, *order_notes])
        )
    rows, bin_notes = _finish_bins(rows, segment_names)
    source = Path(table.path).name + (f" ({reference})" if reference else "")
    return DepthSpectrum(
        wavelength_um=rows.centre_um,
        half_width_um=rows.half_um,
        depth=rows.depth,
        depth_err=rows.depth_err,
        segment=rows.segment,
        segment_names=segment_names,
        source=source,
        sha256=sha256,
        notes=tuple(notes + wave_notes + depth_notes + order_notes + bin_notes),
    )


# --- notes and rows ---------------------------------------------------------------------------------------


def _reading_notes(raw: RawTable, table: RawTable, choice: Choice, planet: str, system) -> list[str]:
    used = choice.names() + [c.name for c in (choice.segment, choice.limit) if c is not None]
    notes = [f"Read {table.n_rows} rows ({raw.kind}); columns used: {', '.join(used)}.", *raw.notes]
    if table.n_rows < raw.n_rows:
        notes.append(f"{raw.n_rows - table.n_rows} rows of other planets or references were left aside.")
    unnamed = "unnamed planet"
    if system and planet and system.planet_name != unnamed and not same_planet(planet, system.planet_name):
        notes.append(f"The table is of {planet!r}, but the system file is of {system.planet_name!r}.")
    return notes


def _drop_unusable(table: RawTable, choice: Choice) -> tuple[RawTable, list[str]]:
    """Leave out rows without a wavelength, depth or error, and rows that are limits; count them in notes.

    Cells that are not numbers are refused later, and only in the rows that are left.
    """
    needed = [c for c in (choice.value, choice.error, choice.error_minus) if c is not None]
    needed += [choice.wavelength] if choice.wavelength else [choice.low, choice.high]
    for column in needed:
        if all(is_missing(cell, table.missing) for cell in table.cells[column.name]):
            raise table.refusal(
                f"Column {column.name!r} holds no number at all, expected numbers in at least {_MIN_BINS} "
                "rows."
            )
    flags = _limit_flags(table, choice)
    keep, missing, limits = [], dict.fromkeys((c.name for c in needed), 0), 0
    for i in range(table.n_rows):
        blank = next((c.name for c in needed if is_missing(table.cells[c.name][i], table.missing)), None)
        if blank is not None:
            missing[blank] += 1
        elif flags[i] or any(is_limit(table.cells[c.name][i]) for c in needed):
            limits += 1
        else:
            keep.append(i)
    notes = [f"{n} {_row_word(n)} without a value in {name} left out." for name, n in missing.items() if n]
    if limits:
        notes.append(f"{limits} {_row_word(limits)} left out as limits, not measurements.")
    return table.take(keep), notes


def _row_word(count: int) -> str:
    return "row" if count == 1 else "rows"


def _limit_flags(table: RawTable, choice: Choice) -> np.ndarray:
    """Return True for rows flagged as limits: 0 is a measurement, and the archive's 2 a calculated one."""
    if choice.limit is None:
        return np.zeros(table.n_rows, bool)
    flags = np.nan_to_num(numbers(table, choice.limit.name))
    return (flags != 0) & (flags != 2)


def _segments(table: RawTable, choice: Choice) -> tuple[np.ndarray, tuple[str, ...]]:
    """Return the index of every row's segment and the names, in alphabetical order for now."""
    if choice.segment is None or not table.n_rows:
        return np.zeros(table.n_rows, int), ("all",)
    cells = table.cells[choice.segment.name]
    texts = ["unnamed" if is_missing(cell) else _segment_text(cell) for cell in cells]
    names = sorted(set(texts))
    return np.array([names.index(text) for text in texts], int), tuple(names)


def _segment_text(cell) -> str:
    number = isinstance(cell, (float, np.floating)) and float(cell).is_integer()
    return str(int(cell)) if number else " ".join(str(cell).split())


# --- units ------------------------------------------------------------------------------------------------


def _settle_unit(table, column, chosen, allowed, flag, notes) -> StatedUnit | None:
    """Return the unit that holds for a column: the option's, else the stated one, else None."""
    stated = stated_unit(table, column)
    if chosen is not None:
        if stated is not None and stated.unit != chosen:
            notes.append(
                f"{flag} {chosen} was used for column {column.name!r}, although {stated.origin} says "
                f"{stated.unit!r}."
            )
        return StatedUnit(chosen, flag)
    if stated is not None and stated.unit not in allowed:
        raise roles.wrong_dimension(table, column, stated, allowed, flag)
    return stated


def _partner_unit(table, partner, main, main_unit, allowed, flag) -> str:
    """Return the unit of a width or error: its own when it states another one than its main column."""
    own = stated_unit(table, partner)
    stated_main = stated_unit(table, main)
    if own is None or (stated_main is not None and own.unit == stated_main.unit):
        return main_unit
    if main_unit == "radius-ratio" and own.unit == "fraction":
        return main_unit  # the error of a ratio is as dimensionless as the ratio
    if own.unit not in allowed:
        raise roles.wrong_dimension(table, partner, own, allowed, flag)
    return own.unit


# --- wavelengths ------------------------------------------------------------------------------------------


def _wavelengths(table, choice: Choice, options: ReadOptions, segment):
    """Return centres and half widths in micrometre (half widths NaN where unknown), and notes."""
    notes: list[str] = []
    main = choice.wavelength or choice.low
    centre = numbers(table, main.name)
    flag = "--wavelength-unit"
    unit = _settle_unit(table, main, options.wavelength_unit, WAVELENGTH_UNITS, flag, notes)
    _refuse_not_positive(table, main.name, centre, "a positive wavelength")
    if unit is None:
        raise _no_wavelength_unit(table, main, centre)
    if choice.low is not None:
        centre_um, half_um = _from_edges(table, choice, unit.unit, notes)
    elif choice.width is not None:
        width = numbers(table, choice.width.name)
        _refuse_not_positive(table, choice.width.name, width, "a positive width (blank where unknown)")
        width_unit = _partner_unit(table, choice.width, main, unit.unit, WAVELENGTH_UNITS, flag)
        if width_unit != unit.unit:
            in_width_unit = to_um(to_um(centre, unit.unit), "cm-1") if width_unit == "cm-1" else None
            scaled = (
                in_width_unit
                if in_width_unit is not None
                else to_um(centre, unit.unit) / to_um(np.ones(1), width_unit)
            )
        else:
            scaled = centre
        kind = _width_kind(table, choice.width, options, scaled, width, segment, notes)
        half = width / 2 if kind == "full" else width
        _refuse_wide_wavenumbers(table, choice.width, half, scaled, width_unit)
        centre_um, half_um = half_width_to_um(centre, half, unit.unit, width_unit)
    else:
        centre_um, half_um = to_um(centre, unit.unit), np.full(len(centre), np.nan)
    _refuse_out_of_range(table, main, centre_um, unit)
    return centre_um, half_um, notes


def _refuse_not_positive(table, name, values, expected) -> None:
    bad = np.flatnonzero(values <= 0)
    if len(bad):
        raise table.refusal(
            f"{name} is {format_number(values[bad[0]])}, expected {expected}. Correct the cell, leave it "
            "blank, "
            f"or declare its mark for missing values in the header (# missing: {values[bad[0]]:g}).",
            int(bad[0]),
        )


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
        _refuse_not_positive(table, column.name, values, "a positive wavelength")
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
    return _partner_unit(table, edge, main, unit, WAVELENGTH_UNITS, "--wavelength-unit")


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


# --- depths -----------------------------------------------------------------------------------------------


def _depths(table, choice: Choice, options: ReadOptions, system):
    """Return depths and symmetrised errors as fractions, and notes."""
    notes: list[str] = []
    value = numbers(table, choice.value.name)
    upper = numbers(table, choice.error.name)
    lower = upper if choice.error_minus is None else np.abs(numbers(table, choice.error_minus.name))
    for column, errors in ((choice.error, upper), (choice.error_minus, lower)):
        if column is not None:
            _refuse_not_positive(table, column.name, errors, "a positive error")
    flag = "--depth-unit"
    unit = _settle_unit(table, choice.value, options.depth_unit, DEPTH_UNITS, flag, notes)
    expected = None if system is None else _squared_radius_ratio(system)
    if unit is None or (unit.origin == SQUARE_LABEL and system is None):
        raise _no_depth_unit(table, choice.value, value, expected)
    if unit.unit == "radius-ratio":
        _refuse_not_positive(table, choice.value.name, value, "a positive radius ratio")
    depth = to_fraction(value, unit.unit)
    if expected is not None and len(depth):
        _refuse_contradiction(table, choice.value, value, unit, system)
    _refuse_deep(table, choice.value, depth, unit)
    _refuse_bounds(table, choice, value, upper, lower)
    error_unit = _partner_unit(table, choice.error, choice.value, unit.unit, DEPTH_UNITS, flag)
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


# --- order, duplicates, widths ----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Bins:
    """The numbers of a spectrum in the making; arrays of shape (N,)."""

    centre_um: np.ndarray
    half_um: np.ndarray
    depth: np.ndarray
    depth_err: np.ndarray
    segment: np.ndarray

    def take(self, rows) -> _Bins:
        return _Bins(*(getattr(self, name)[rows] for name in self.__dataclass_fields__))


def _sort(rows: _Bins, names: tuple[str, ...]) -> tuple[_Bins, tuple[str, ...], list[str]]:
    """Sort by wavelength, drop exact duplicates, and number the segments in order of wavelength.

    Ties are broken by the values themselves, so that the result does not depend on the order in the file.
    """
    notes = []
    falling = len(rows.centre_um) > 1 and bool(np.all(np.diff(rows.centre_um) < 0))
    if np.any(np.diff(rows.centre_um) < 0):
        how = "in falling order" if falling else "not in order"
        notes.append(f"The rows are {how} of wavelength and were sorted.")
    half = np.nan_to_num(rows.half_um, nan=-1.0)
    rows = rows.take(np.lexsort((rows.depth_err, rows.depth, half, rows.segment, rows.centre_um)))
    half = np.nan_to_num(rows.half_um, nan=-1.0)
    key = np.column_stack((rows.centre_um, half, rows.depth, rows.depth_err, rows.segment))
    same = np.append(False, np.all(key[1:] == key[:-1], axis=1))
    if same.any():
        count = int(same.sum())
        notes.append(f"{count} exactly repeated {_row_word(count)} dropped.")
        rows = rows.take(~same)
    first = [int(np.argmax(rows.segment == part)) for part in range(len(names))]
    order = np.argsort(first, kind="stable")
    rank = np.argsort(order, kind="stable")
    if len(rows.segment):
        rows = replace(rows, segment=rank[rows.segment])
    return rows, tuple(names[i] for i in order), notes


def _finish_bins(rows: _Bins, names: tuple[str, ...]) -> tuple[_Bins, list[str]]:
    """Fill missing widths and describe repeats, overlaps and gaps."""
    notes = []
    missing = int(np.sum(np.isnan(rows.half_um)))
    if missing:
        rows = replace(rows, half_um=bins.fill_half_widths(rows.centre_um, rows.half_um, rows.segment))
        notes.append(
            f"{missing} of {len(rows.half_um)} bins have no width; half the distance to the neighbours "
            "was used."
        )
    notes += bins.repeated_note(rows.centre_um, rows.segment, names)
    notes += bins.overlap_notes(rows.centre_um, rows.half_um, rows.segment, names)
    notes += bins.gap_note(rows.centre_um, rows.half_um)
    if len(names) > 1:
        notes.append(f"The spectrum has {len(names)} segments that may be offset: {', '.join(names)}.")
    return rows, notes
