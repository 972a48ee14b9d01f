"""FITS and VOTable files to raw tables; both carry numbers and masks, and count rows instead of lines."""

from __future__ import annotations

import io
import re
import warnings

import numpy as np

from transit.errors import InputFileError
from transit.readers.cells import is_missing
from transit.readers.raw import RawTable


def read_fits(content: bytes, path: str) -> RawTable:
    """Read the first table of a FITS file.

    Parameters
    ----------
    content : bytes
        The whole file.
    path : str
        File, as the user named it.

    Returns
    -------
    RawTable

    Raises
    ------
    InputFileError
        If the file is damaged or holds no table.
    """
    from astropy.io import fits
    from astropy.table import Table

    try:
        # astropy warns about odd units and truncated files; both are judged by us, the first as text.
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with fits.open(io.BytesIO(content), memmap=False) as hdus:
                found = [h for h in hdus if isinstance(h, (fits.BinTableHDU, fits.TableHDU))]
                if not found:
                    raise InputFileError("The FITS file holds no table, expected a binary table.", path)
                table = Table.read(found[0], astropy_native=False)
                units = {c.name: c.unit.strip() for c in found[0].columns if c.unit and c.unit.strip()}
                header = {**dict(hdus[0].header), **dict(found[0].header)}
                name = found[0].name or "without a name"
    except InputFileError:
        raise
    except Exception as error:  # a damaged file fails in as many ways as there are bytes
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(f"The FITS file is damaged ({reason}); fetch it again.", path) from error
    notes = []
    if len(found) > 1:
        notes.append(f"The file holds {len(found)} tables; the first ({name}) was read.")
    meta = {str(k).lower(): str(v) for k, v in header.items() if k and isinstance(v, (str, int, float))}
    return _raw(table, "FITS table", path, units, meta, notes)


def read_votable(content: bytes, path: str) -> RawTable:
    """Read the first table of a VOTable file.

    Parameters, returns and errors as for `read_fits`.
    """
    from astropy.io import votable

    try:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            document = votable.parse(io.BytesIO(content), verify="warn")
            _refuse_bad_cells(caught, path)
            tables = [t for t in document.iter_tables() if len(t.array)]
            if not tables:
                raise InputFileError("The VOTable holds no table with rows.", path)
            table = tables[0].to_table(use_names_over_ids=True)
            units = {f.name: str(f.unit) for f in tables[0].fields if f.unit is not None and str(f.unit)}
            entries = [*document.params, *tables[0].params, *document.infos, *tables[0].infos]
            meta = {str(p.name).lower(): str(p.value) for p in entries if p.name}
    except InputFileError:
        raise
    except Exception as error:  # XML and cell errors come in many kinds; the parser names the place
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(
            f"The VOTable cannot be read ({reason}). Correct the place named, or export it again.", path
        ) from error
    notes = [f"The file holds {len(tables)} tables; the first was read."] if len(tables) > 1 else []
    return _raw(table, "VOTable", path, units, meta, notes)


def _refuse_bad_cells(caught, path: str) -> None:
    """Refuse cells that astropy empties with no more than a warning because they are not numbers."""
    from astropy.io.votable.exceptions import W30

    for warning in caught:
        if not issubclass(warning.category, W30):
            continue
        found = re.search(r":(\d+):\d+: .*? '(.*)'", str(warning.message))
        line, text = (int(found[1]), found[2]) if found else (None, str(warning.message))
        if not is_missing(text):
            raise InputFileError(
                f"A cell is {text!r}, expected a number. Correct the cell, or leave it blank so that the row "
                "is left out.",
                path,
                line,
            )


def _raw(table, kind, path, units, meta, notes) -> RawTable:
    names = [str(name) for name in table.colnames]
    columns = {name: np.ma.asarray(table[name]) for name in names}
    if len(table) == 1 and any(column.ndim == 2 for column in columns.values()):
        # Some programs store a whole spectrum as one row of arrays.
        columns = {name: column[0] for name, column in columns.items() if column.ndim == 2}
        longest = max(len(column) for column in columns.values())
        columns = {name: column for name, column in columns.items() if len(column) == longest}
        notes = [*notes, f"The table is one row of arrays; their {longest} elements were read as rows."]
    columns = {name: column for name, column in columns.items() if column.ndim == 1}
    if not columns or not len(next(iter(columns.values()))):
        raise InputFileError(f"The {kind} has no rows of single numbers.", path)
    n_rows = len(next(iter(columns.values())))
    return RawTable(
        path=path,
        kind=kind,
        names=tuple(columns),
        cells={name: _cells(column) for name, column in columns.items()},
        units={name: unit for name, unit in units.items() if name in columns},
        meta=meta,
        lines=tuple(range(1, n_rows + 1)),
        line_word="row",
        notes=tuple(notes),
    )


def _cells(column) -> list:
    masked = np.ma.getmaskarray(column)
    data = np.ma.getdata(column)
    return [None if m else _cell(value) for value, m in zip(data.tolist(), masked, strict=True)]


def _cell(value):
    return value.decode("latin-1").strip() if isinstance(value, bytes) else value
