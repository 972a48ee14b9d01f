"""The user's spectra of a star at several temperatures: one column for each, or one row for each value."""

from __future__ import annotations

import gzip
import hashlib
import os
import re
import zlib
from pathlib import Path

import numpy as np

from transit.errors import InputFileError
from transit.readers.cells import numbers
from transit.readers.formats import read_raw
from transit.readers.names import describe
from transit.readers.quantities import format_number, standard_unit, to_um
from transit.readers.raw import RawTable
from transit.readers.text_formats import read_separated
from transit.stellar_grid import StellarGrid

LAYOUTS = (
    "expected wavelength_um (or _nm, _angstrom) and one flux column for each temperature, named by its kelvin "
    "(flux_3300k, 3300K), or the columns wavelength_um, teff_k and flux"
)
TEFF_RANGE_K = (500.0, 60000.0)
_TEFF_NAME = re.compile(r"(?:(?:flux|f|teff|t)[ _]*)?(\d+(?:\.\d+)?)[ _]*k?", re.IGNORECASE)
_TEFF_COLUMNS = {"teff_k", "teff", "temperature_k"}
_FLUX_COLUMNS = {"flux", "flux_w_m2_um", "flam", "f_lambda"}
_PER_FREQUENCY = re.compile(r"hz|jy", re.IGNORECASE)
_BARE_NUMBER = re.compile(r"(?<![\w.+-])(\d{3,5}(?:\.\d+)?)(?![\w.])")


def read_stellar_grid(path: str | os.PathLike) -> tuple[StellarGrid, str]:
    """Read spectra of a star at two or more temperatures.

    Fluxes are per wavelength, in any unit that is the same for all temperatures (only their ratios matter); they are
    taken as linear between the wavelengths.

    Parameters
    ----------
    path : str or path-like
        CSV, ECSV, other text or FITS table, with a wavelength column whose unit is in its name or in the header and
        either one flux column for each temperature or the columns teff_k and flux.

    Returns
    -------
    grid : StellarGrid
        Between every two wavelengths the photon-weighted mean of the flux.
    source : str
        File and checksum, for the report.

    Raises
    ------
    InputFileError
        If the file is missing or not a table, columns are not understood, a value is missing, infinite, zero or
        negative, wavelengths do not increase or occur twice, or there are fewer than two temperatures or wavelengths.
    """
    table, sha256 = _read_table(path)
    wavelength_um, wavelength_name = _wavelengths(table)
    long = [name for name in table.names if name.strip().lower() in _TEFF_COLUMNS]
    spectra = _long(table, wavelength_um, long[0]) if long else _wide(table, wavelength_um, wavelength_name)
    if len(spectra) < 2:
        raise table.refusal(
            f"There is a spectrum for {len(spectra)} temperature, expected at least two: {LAYOUTS}."
        )
    teff_k = np.array(sorted(spectra))
    wavelength_um = spectra[teff_k[0]][0]
    for value in teff_k:
        if not np.array_equal(spectra[value][0], wavelength_um):
            raise table.refusal(
                f"The spectrum of {value:g} K has other wavelengths than that of {teff_k[0]:g} K; expected the same "
                "wavelengths at every temperature. Resample the spectra."
            )
    if len(wavelength_um) < 2:
        raise table.refusal("There is one wavelength, expected a spectrum of at least two.")
    photons = wavelength_um * np.array([spectra[value][1] for value in teff_k])
    ln_flux = np.log((photons[:, 1:] + photons[:, :-1]) / (wavelength_um[1:] + wavelength_um[:-1]))
    name = Path(path).name
    source = f"{name} ({len(teff_k)} temperatures, {teff_k[0]:g}-{teff_k[-1]:g} K; SHA-256 {sha256[:12]})"
    return StellarGrid(name, wavelength_um, teff_k, ln_flux), source


def _read_table(path: str | os.PathLike) -> tuple[RawTable, str]:
    """Read the table, also one whose columns are named by bare numbers, which a table of depths never is."""
    shown = os.fspath(path)
    if Path(shown).is_dir():
        raise InputFileError(f"This is a directory, expected one file: {LAYOUTS}.", shown)
    try:
        return read_raw(path)
    except InputFileError as error:
        lines, sha256 = _text_lines(shown)
        first = next(
            (i for i, line in enumerate(lines) if line.strip() and not line.lstrip().startswith("#")), None
        )
        if first is None:
            raise
        if re.match(r"\s*[-+.\d]", lines[first]) and "header line" in str(error):
            # The general message shows the header of a depth table.
            raise InputFileError(
                f"There is no line with column names, {LAYOUTS}.", shown, first + 1
            ) from None
        named = _BARE_NUMBER.sub(r"\1K", lines[first])
        if named == lines[first]:
            raise
        return read_separated([*lines[:first], named, *lines[first + 1 :]], shown), sha256


def _text_lines(shown: str) -> tuple[list[str], str]:
    """Lines of a text file, none when it is no text, and the checksum of the file."""
    try:
        content = Path(shown).read_bytes()
        sha256 = hashlib.sha256(content).hexdigest()
        content = gzip.decompress(content) if content.startswith(b"\x1f\x8b") else content
        return content.decode("utf-8-sig").splitlines(), sha256
    except (OSError, ValueError, EOFError, zlib.error):
        return [], ""


def _wavelengths(table: RawTable) -> tuple[np.ndarray, str]:
    """Wavelengths as written, micrometre, shape (R,), and the name of their column."""
    found = [column for column in map(describe, table.names) if column.role == "wavelength"]
    if len(found) != 1:
        what = "No column" if not found else f"More than one column ({', '.join(c.name for c in found)})"
        raise table.refusal(
            f"{what} was recognised as the wavelength among {', '.join(map(repr, table.names))}; {LAYOUTS}."
        )
    column = found[0]
    stated = column.unit.unit if column.unit else table.units.get(column.name)
    unit = standard_unit(stated)
    if unit not in ("um", "nm", "angstrom", "m"):
        raise table.refusal(
            f"The unit of {column.name!r} is {stated or 'not stated'}; expected um, nm or angstrom in the name, such "
            "as wavelength_um. Rename the column."
        )
    return to_um(_positive(table, column.name, "wavelength"), unit), column.name


def _wide(table: RawTable, wavelength_um: np.ndarray, wavelength_name: str) -> dict[float, tuple]:
    """Spectra by temperature from one column for each."""
    spectra: dict[float, tuple] = {}
    unknown = []
    for name in table.names:
        match = _TEFF_NAME.fullmatch(name.strip())
        if name == wavelength_name:
            continue
        if not match:
            unknown.append(name)
            continue
        teff_k = _teff(table, float(match[1]), None)
        if teff_k in spectra:
            raise table.refusal(
                f"Two columns are for {teff_k:g} K, expected one for each temperature. Remove one."
            )
        _refuse_per_frequency(table, name)
        spectra[teff_k] = (wavelength_um, _positive(table, name, "flux"))
    if unknown:
        raise table.refusal(f"No temperature was recognised in {', '.join(map(repr, unknown))}; {LAYOUTS}.")
    _refuse_disorder(table, wavelength_um, np.arange(table.n_rows))
    return spectra


def _long(table: RawTable, wavelength_um: np.ndarray, teff_name: str) -> dict[float, tuple]:
    """Spectra by temperature from one row for each value."""
    flux_names = [name for name in table.names if name.strip().lower() in _FLUX_COLUMNS]
    if len(flux_names) != 1:
        raise table.refusal(
            f"There are {len(flux_names)} columns named flux among {', '.join(map(repr, table.names))}; {LAYOUTS}."
        )
    _refuse_per_frequency(table, flux_names[0])
    flux = _positive(table, flux_names[0], "flux")
    teff_k = _positive(table, teff_name, "temperature")
    spectra = {}
    for value in np.unique(teff_k):
        rows = np.flatnonzero(teff_k == value)
        _refuse_disorder(table, wavelength_um[rows], rows)
        spectra[_teff(table, float(value), int(rows[0]))] = (wavelength_um[rows], flux[rows])
    return spectra


def _teff(table: RawTable, teff_k: float, row: int | None) -> float:
    low, high = TEFF_RANGE_K
    if not low <= teff_k <= high:
        raise table.refusal(
            f"The temperature is {format_number(teff_k)} K, expected {low:.0f}-{high:.0f} K. {LAYOUTS.capitalize()}.",
            row,
        )
    return teff_k


def _positive(table: RawTable, name: str, what: str) -> np.ndarray:
    """Numbers of a column, every one finite and positive."""
    values = numbers(table, name)
    bad = np.flatnonzero(~(np.isfinite(values) & (values > 0)))
    if len(bad):
        cell = table.cells[name][bad[0]]
        raise table.refusal(
            f"The {what} in {name!r} is {cell!r}, expected a positive number. Correct it, or cut the table to the "
            "wavelengths where every spectrum is known.",
            int(bad[0]),
        )
    return values


def _refuse_per_frequency(table: RawTable, name: str) -> None:
    unit = table.units.get(name, "")
    if _PER_FREQUENCY.search(unit):
        raise table.refusal(
            f"The unit of {name!r} is {unit}, a flux per frequency; expected a flux per wavelength. Multiply by "
            "1/wavelength squared."
        )


def _refuse_disorder(table: RawTable, wavelength_um: np.ndarray, rows: np.ndarray) -> None:
    bad = np.flatnonzero(np.diff(wavelength_um) <= 0)
    if len(bad):
        here, before = wavelength_um[bad[0] + 1], wavelength_um[bad[0]]
        what = "occurs twice" if here == before else f"follows {before:.6g} um"
        raise table.refusal(
            f"The wavelength {here:.6g} um {what}; expected wavelengths that increase, each once for a temperature. "
            "Sort the rows and remove duplicates.",
            int(rows[bad[0] + 1]),
        )
