"""The reader itself: raw table, columns, units and bins put together to a depth spectrum."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from transit.readers import bins
from transit.readers.cells import comma_note, is_limit, is_missing, numbers
from transit.readers.columns import Choice, choose_columns
from transit.readers.covariance import read_covariance
from transit.readers.depths import read_depths
from transit.readers.formats import read_raw
from transit.readers.options import DEPTH_UNITS, ReadOptions
from transit.readers.quantities import format_number
from transit.readers.raw import RawTable
from transit.readers.rows import may_be_same_planet, select_rows
from transit.readers.settled import settle_unit
from transit.readers.wavelengths import read_wavelengths
from transit.records import DepthSpectrum, System

_MIN_BINS = 3


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
        What the table does not say, or says wrongly; a covariance of the bins from a file of its own.

    Returns
    -------
    DepthSpectrum
        Sorted by wavelength; micrometre and fractions. `notes` says what was read, left out or odd. With a
        covariance, its rows follow the bins and `depth_err` is the square root of its diagonal.

    Raises
    ------
    InputFileError
        If the file cannot be read, a cell is not a number, a unit is not stated or contradicts the system, or
        fewer than three bins are left, or the covariance does not belong to the table. Units are never guessed.

    Notes
    -----
    Lower errors may be stored positive or negative; asymmetric errors are symmetrised to (upper + lower) / 2
    (Barlow 2003, physics/0306138).

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
    n_rows = table.n_rows
    table, usable, left_out = _drop_unusable(table, choice)
    notes += left_out + comma_note(table, choice.names())
    segment, segment_names = _segments(table, choice)
    centre_um, half_um, wave_notes = read_wavelengths(table, choice, options, segment)
    depth, depth_err, depth_notes = read_depths(table, choice, options, system)
    rows = _Bins(centre_um, half_um, depth, depth_err, segment, np.arange(len(depth)))
    rows, segment_names, order_notes = _sort(rows, segment_names)
    if len(rows.centre_um) < _MIN_BINS:
        raise table.refusal(
            f"{len(rows.centre_um)} usable bins are left, expected at least {_MIN_BINS}."
            + " ".join(["", *left_out, *order_notes])
        )
    rows, bin_notes = _finish_bins(rows, segment_names)
    _refuse_bins_beyond_zero(table, rows)
    rows, covariance, covariance_notes = _with_covariance(rows, table, choice, options, usable, n_rows)
    source = Path(table.path).name + (f" ({reference})" if reference else "")
    return DepthSpectrum(
        wavelength_um=rows.centre_um,
        half_width_um=rows.half_um,
        depth=rows.depth,
        depth_err=rows.depth_err,
        segment=rows.segment,
        segment_names=segment_names,
        covariance=covariance,
        source=source,
        sha256=sha256,
        notes=tuple(notes + wave_notes + depth_notes + order_notes + bin_notes + covariance_notes),
    )


# --- notes and rows ---------------------------------------------------------------------------------------


def _reading_notes(raw: RawTable, table: RawTable, choice: Choice, planet: str, system) -> list[str]:
    used = choice.names() + [c.name for c in (choice.segment, choice.limit) if c is not None]
    notes = [f"Read {table.n_rows} rows ({raw.kind}); columns used: {', '.join(used)}.", *raw.notes]
    if table.n_rows < raw.n_rows:
        notes.append(f"{raw.n_rows - table.n_rows} rows of other planets or references were left aside.")
    unnamed = "unnamed planet"
    if (
        system
        and planet
        and system.planet_name != unnamed
        and not may_be_same_planet(planet, system.planet_name)
    ):
        notes.append(f"The table is of {planet!r}, but the system file is of {system.planet_name!r}.")
    return notes


def _drop_unusable(table: RawTable, choice: Choice) -> tuple[RawTable, list[int], list[str]]:
    """Leave out rows without a wavelength, depth or error, and rows that are limits; count them in notes.

    The second item holds the positions of the rows that are left.
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
    return table.take(keep), keep, notes


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


# --- order, duplicates, widths ----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Bins:
    """The numbers of a spectrum in the making; arrays of shape (N,). `row` is the position in the usable table."""

    centre_um: np.ndarray
    half_um: np.ndarray
    depth: np.ndarray
    depth_err: np.ndarray
    segment: np.ndarray
    row: np.ndarray

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


def _refuse_bins_beyond_zero(table: RawTable, rows: _Bins) -> None:
    """Refuse bins whose lower edge is no wavelength any more: a width in another unit, or between far neighbours."""
    bad = np.flatnonzero(rows.half_um >= rows.centre_um)
    if len(bad):
        centre, half = rows.centre_um[bad[0]], rows.half_um[bad[0]]
        raise table.refusal(
            f"The bin at {format_number(centre)} um reaches {format_number(half)} um to either side, expected less "
            "than its wavelength. Correct the width or its unit; where no width is given, give one.",
            int(rows.row[bad[0]]),
        )


# --- covariance -------------------------------------------------------------------------------------------


def _with_covariance(rows: _Bins, table: RawTable, choice: Choice, options: ReadOptions, usable, n_rows):
    """Read the covariance, if there is one, and take the errors from its diagonal."""
    if options.covariance is None:
        return rows, None, []
    # The depth column's unit was settled, and its notes written, when the depths were read.
    stated = settle_unit(table, choice.value, options.depth_unit, DEPTH_UNITS, "--depth-unit", [])
    unit = options.covariance_unit or stated.unit
    covariance, notes = read_covariance(
        options.covariance, usable, n_rows, rows.row, unit, rows.depth, rows.depth_err
    )
    return replace(rows, depth_err=np.sqrt(np.diag(covariance))), covariance, notes
