"""Text formats to raw tables: separated values, ECSV, IPAC and journal tables.

astropy splits the rows and reads the headers; cells are kept as text so that a bad one can be shown with its
line, which a conversion inside astropy would lose.
"""

from __future__ import annotations

import csv
import re
from collections import Counter

from transit.errors import InputFileError
from transit.readers.quantities import is_unit_text
from transit.readers.raw import RawTable

_SEPARATORS = {";": "semicolons", "\t": "tabs", ",": "commas", "|": "bars", " ": "blanks"}
_COLUMN_LINE = re.compile(r"^#\s*COLUMN\s+(\S+?):\s*(.*?)\s*(?:\[([^\]]*)\])?\s*$")
_KEY_VALUE = re.compile(r"^#\s*([A-Za-z][\w ().%/-]{0,60}?)\s*[:=]\s*(\S.*)$")
_UNIT_KEY = re.compile(r"^(.+?)[ _]units?$")
_MISSING_KEYS = {
    "missing",
    "missing value",
    "missing_value",
    "null",
    "nodata",
    "fill_value",
    "fillvalue",
    "blank",
}
_NUMBER_LIKE = re.compile(r"^[+-]?(?:\d+[.,]?\d*|[.,]\d+)(?:[eEdD][+-]?\d+)?$")


# --- separated values -------------------------------------------------------------------------------------


def read_separated(lines: list[str], path: str) -> RawTable:
    """Read values separated by commas, semicolons, tabs, bars or blanks, with `#` comments.

    Parameters
    ----------
    lines : list of str
        The text of the file.
    path : str
        File, as the user named it.

    Returns
    -------
    RawTable

    Raises
    ------
    InputFileError
        If there is no header line, a header name occurs twice, or a row has another number of cells.
    """
    units, meta = _comment_header(lines)
    body = [i for i, line in enumerate(lines) if line.strip() and not line.lstrip().startswith("#")]
    if not body:
        raise InputFileError("The file holds comments only, expected a header line and rows.", path)
    header, rows = lines[body[0]].strip(), body[1:]
    names, separator = _names_and_separator(header, lines[rows[0]] if rows else header)
    if _mostly_numbers(names):
        rows = body
        names, separator = _header_in_comment(lines, body[0], path)
    names = _label(names, path, body[0] + 1)
    if not rows:
        raise InputFileError("The file has a header line but no rows.", path)
    table_rows = _split_rows(lines, rows, names, separator, path)
    if not table_rows.lines:
        raise InputFileError("The file has a header line but no rows.", path)
    cells, units_row = table_rows.cells, _units_row(table_rows)
    if units_row:
        units = {**units, **units_row}
        cells = {name: column[1:] for name, column in cells.items()}
    return RawTable(
        path=path,
        kind=f"table separated by {_SEPARATORS[separator]}",
        names=tuple(names),
        cells=cells,
        units={name: units[name.lower()] for name in names if units.get(name.lower())},
        meta=meta,
        lines=table_rows.lines[1:] if units_row else table_rows.lines,
        missing=_declared_missing(meta),
        decimal_comma=separator == ";",
    )


def _comment_header(lines: list[str]) -> tuple[dict[str, str], dict[str, str]]:
    """Collect units (by lower-case column name) and keywords from `#` lines; the first counts."""
    units: dict[str, str] = {}
    meta: dict[str, str] = {}
    for line in lines:
        if not line.lstrip().startswith("#"):
            continue
        column = _COLUMN_LINE.match(line.strip())
        if column:
            if column[3]:
                units[column[1].lower()] = column[3].strip()
            continue
        pair = _KEY_VALUE.match(line.strip())
        if not pair:
            continue
        key = pair[1].strip().lower()
        unit_of = _UNIT_KEY.match(key)
        if unit_of and is_unit_text(pair[2]):
            units.setdefault(unit_of[1], pair[2].strip())
        meta.setdefault(key, pair[2].strip())
    return units, meta


def _declared_missing(meta: dict[str, str]) -> frozenset[str]:
    texts = [meta[key] for key in _MISSING_KEYS if key in meta]
    return frozenset(part.strip(" '\"").lower() for text in texts for part in re.split(r"[,\s]+", text))


def _split_line(line: str, separator: str) -> list[str]:
    line = line.strip()
    if separator == " ":
        line = line.replace("\t", " ")
    return [cell.strip() for cell in next(csv.reader([line], delimiter=separator, skipinitialspace=True), [])]


def _names_and_separator(header: str, first_row: str) -> tuple[list[str], str]:
    """Split a header line, and choose the separator of the rows, which may differ from the header's."""
    bare = re.sub(r'"[^"]*"', "", header)
    found = [s for s in (";", "\t", ",", "|") if s in bare]
    if "\t" in found and "\t" not in first_row:
        found.remove("\t")
    separator = found[0] if found else " "
    names = _split_line(header, separator)
    for candidate in (separator, ";", "\t", ",", " "):
        if len(_split_line(first_row, candidate)) == len(names):
            return names, candidate
    return names, separator


def _mostly_numbers(cells: list[str]) -> bool:
    return sum(bool(_NUMBER_LIKE.match(cell)) for cell in cells) > len(cells) / 2


def _header_in_comment(lines: list[str], first: int, path: str) -> tuple[list[str], str]:
    """Find the names in the last comment before the rows, as programs that write arrays leave them."""
    for i in range(first - 1, -1, -1):
        text = lines[i].lstrip().lstrip("#").strip()
        if not text:
            continue
        names, separator = _names_and_separator(text, lines[first])
        fits = len(names) > 1 and len(_split_line(lines[first], separator)) == len(names)
        if fits and not _mostly_numbers(names):
            return names, separator
    raise InputFileError(
        f"The first row is {lines[first].strip()[:60]!r}, expected a header line with column names. Add one, "
        "for example: wavelength_um,half_width_um,depth_ppm,depth_err_ppm",
        path,
        first + 1,
    )


def _label(names: list[str], path: str, line: int | None) -> list[str]:
    """Give blank names a label, and refuse names that occur twice."""
    labelled = [name or f"unnamed column {i + 1}" for i, name in enumerate(names)]
    repeated = [name for name, count in Counter(labelled).items() if count > 1]
    if repeated:
        raise InputFileError(
            f"The header names {', '.join(map(repr, repeated))} more than once, expected every column name "
            "once. Rename the columns.",
            path,
            line,
        )
    return labelled


def _split_rows(lines: list[str], rows: list[int], names: list[str], separator: str, path: str) -> RawTable:
    from astropy.io import ascii as tables

    kept = [lines[i].replace("\t", " ") if separator == " " else lines[i] for i in rows]
    _refuse_ragged(kept, rows, names, separator, path)
    try:
        found = tables.read(
            kept,
            format="no_header",
            names=names,
            delimiter=separator,
            guess=False,
            fast_reader=False,
            fill_values=[],
            converters={"*": [tables.convert_numpy(str)]},
        )
    except (ValueError, tables.InconsistentTableError, csv.Error) as error:
        raise InputFileError(f"The rows cannot be split into {len(names)} cells ({error}).", path) from error
    # A quoted cell may hold a line break; then a line is no longer a row and the numbers are only near.
    where = rows if len(found) == len(rows) else rows[: len(found)]
    cells = {name: [str(cell).strip() for cell in found[name]] for name in names}
    return RawTable(path, "", tuple(names), cells, lines=tuple(i + 1 for i in where))


def _refuse_ragged(kept, rows, names, separator, path) -> None:
    if any(line.count('"') % 2 for line in kept):
        return  # quoted line breaks: astropy must judge
    for line, i in zip(kept, rows, strict=True):
        found = len(_split_line(line, separator))
        if found == len(names):
            continue
        hint = "Quote cells that contain the separator, and leave no cell out."
        if separator == "," and found > len(names) and re.fullmatch(r"[\s,\d+\-]+", line):
            hint = (
                "The numbers seem to have decimal commas: write them with points, or separate by semicolons."
            )
        elif separator == " ":
            hint = "Quote names and cells that contain blanks, or separate by commas."
        raise InputFileError(
            f"The row has {found} cells, expected {len(names)} as in the header ({', '.join(names)}). {hint}",
            path,
            i + 1,
        )


def _units_row(table: RawTable) -> dict[str, str]:
    """Return the units when the first row holds nothing but units, else an empty dictionary."""
    first = {name.lower(): column[0].strip(" []()") for name, column in table.cells.items()}
    stated = {name: text for name, text in first.items() if text and text not in ("-", "--")}
    known = all(is_unit_text(text) and not _NUMBER_LIKE.match(text) for text in stated.values())
    return stated if stated and known else {}


# --- ECSV -------------------------------------------------------------------------------------------------


def read_ecsv(lines: list[str], path: str) -> RawTable:
    """Read an ECSV table: the header through astropy, the rows as text.

    Parameters, returns and errors as for `read_separated`.
    """
    from astropy.io import ascii as tables

    body = [i for i, line in enumerate(lines) if line.strip() and not line.lstrip().startswith("#")]
    if not body:
        raise InputFileError("The ECSV header is not followed by column names.", path)
    head = lines[: body[0] + 1]
    separator = "," if any(re.match(r"^#\s*delimiter:\s*['\"]?,", line) for line in head) else " "
    try:
        empty = tables.read(head, format="ecsv")
    except Exception as error:  # the YAML and astropy raise many kinds; all of them mean a bad header
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(
            f"The ECSV header cannot be read ({reason}). Correct it, or remove the lines that begin with "
            "'#'.",
            path,
        ) from error
    names = _label(_split_line(lines[body[0]], separator), path, body[0] + 1)
    if len(body) == 1:
        raise InputFileError("The file has a header line but no rows.", path)
    table = _split_rows(lines, body[1:], names, separator, path)
    meta = _flat_meta(empty.meta)
    return RawTable(
        path=path,
        kind="ECSV table",
        names=table.names,
        cells=table.cells,
        units={n: str(empty[n].unit) for n in names if n in empty.colnames and empty[n].unit},
        meta=meta,
        lines=table.lines,
        missing=_declared_missing(meta),
    )


def _flat_meta(meta) -> dict[str, str]:
    return {
        str(key).lower(): str(value) for key, value in meta.items() if isinstance(value, (str, int, float))
    }


# --- IPAC -------------------------------------------------------------------------------------------------


def looks_like_ipac(lines: list[str]) -> bool:
    r"""Tell whether the first line that is no `\` keyword or comment is a header between bars."""
    for line in lines:
        if line.strip() and not line.startswith("\\"):
            return line.startswith("|") and line.rstrip().endswith("|")
    return False


def read_ipac(lines: list[str], path: str) -> RawTable:
    """Read an IPAC table, whose columns are found by position.

    Parameters, returns and errors as for `read_separated`.
    """
    from astropy.io import ascii as tables

    header = [i for i, line in enumerate(lines) if line.startswith("|")]
    rows = [i for i, line in enumerate(lines) if line.strip() and not line.startswith(("|", "\\"))]
    _label([name.strip() for name in lines[header[0]].strip().strip("|").split("|")], path, header[0] + 1)
    if not rows:
        raise InputFileError("The table has a header but no rows.", path)
    text = list(lines)
    if len(header) > 1:
        # Every column is declared text, of the same width, so that a bad number stays visible.
        text[header[1]] = re.sub(r"[^|]+", lambda m: "c".rjust(len(m[0])), lines[header[1]].rstrip())
    try:
        found = tables.read(text, format="ipac", guess=False, fast_reader=False)
    except (ValueError, IndexError, tables.InconsistentTableError) as error:
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(f"The IPAC header cannot be read ({reason}).", path) from error
    null = _ipac_nulls(lines, header)
    meta = {key.lower(): str(v["value"]) for key, v in found.meta.get("keywords", {}).items()}
    return RawTable(
        path=path,
        kind="IPAC table",
        names=tuple(found.colnames),
        cells={name: _plain(found[name]) for name in found.colnames},
        units={name: str(found[name].unit) for name in found.colnames if found[name].unit},
        meta=meta,
        lines=tuple(i + 1 for i in rows),
        missing=null,
    )


def _ipac_nulls(lines: list[str], header: list[int]) -> frozenset[str]:
    if len(header) < 4:
        return frozenset()
    return frozenset(cell.strip().lower() for cell in lines[header[3]].strip().strip("|").split("|"))


def _plain(column) -> list:
    """Return a column as a list of texts, None where masked."""
    import numpy as np

    masked = np.ma.getmaskarray(column) if hasattr(column, "mask") else np.zeros(len(column), bool)
    return [None if m else str(cell).strip() for cell, m in zip(column, masked, strict=True)]


# --- machine-readable journal tables ----------------------------------------------------------------------


def read_journal(lines: list[str], path: str) -> RawTable:
    """Read a machine-readable journal table, whose header describes the bytes of each column.

    Parameters, returns and errors as for `read_separated`.
    """
    from astropy.io import ascii as tables

    # Numeric formats are declared text, of the same width, so that a bad number stays visible.
    form = re.compile(r"^(\s*(?:\d+\s*-\s*)?\d+\s+)[FIED](\d+)(?:\.(\d+))?(?=\s)")
    text = [
        form.sub(lambda m: f"{m[1]}A{m[2]}" + " " * (len(m[3] or "") + bool(m[3])), line) for line in lines
    ]
    try:
        found = tables.read(text, format="cds", guess=False, fast_reader=False)
    except Exception as error:  # astropy raises many kinds; all of them mean a bad description
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(f"The byte-by-byte description cannot be read ({reason}).", path) from error
    last_rule = max(i for i, line in enumerate(lines) if line.startswith(("------", "======")))
    rows = [i for i in range(last_rule + 1, len(lines)) if lines[i].strip()]
    if not rows or len(rows) != len(found):
        raise InputFileError("The table has a description but no rows that agree with it.", path)
    return RawTable(
        path=path,
        kind="machine-readable journal table",
        names=tuple(found.colnames),
        cells={name: _plain(found[name]) for name in found.colnames},
        units={name: str(found[name].unit) for name in found.colnames if found[name].unit},
        meta={"source": lines[0].split(":", 1)[1].strip()} if lines[0].lower().startswith("title:") else {},
        lines=tuple(i + 1 for i in rows),
    )
