"""From a path to a raw table: the format is decided from the content, the suffix is only a name."""

from __future__ import annotations

import gzip
import hashlib
import os
import zlib
from dataclasses import replace
from pathlib import Path

from transit.errors import InputFileError
from transit.readers import binary_formats, text_formats
from transit.readers.raw import RawTable

_MAX_BYTES = 200_000_000  # no spectrum is this large: a wrong file must not fill the memory
_KNOWN_BINARIES = (
    (b"%PDF", "a PDF document"),
    (b"PK\x03\x04", "a zip archive or spreadsheet"),
    (b"\x89HDF", "an HDF5 file"),
    (b"\x93NUMPY", "a NumPy array file"),
    (b"\x89PNG", "an image"),
    (b"BZh", "a bzip2 file"),
    (b"\xfd7zXZ", "an xz file"),
)
_EXPECTED = "expected a table: CSV, ECSV, IPAC, VOTable, FITS or a machine-readable journal table"


def read_raw(path) -> tuple[RawTable, str]:
    """Read a table without interpreting it.

    Parameters
    ----------
    path : str or path-like
        The file; may be compressed with gzip.

    Returns
    -------
    table : RawTable
    sha256 : str
        Checksum of the file as it is on disk.

    Raises
    ------
    InputFileError
        If the file is missing, a directory, empty, not a table, or damaged.
    """
    shown = os.fspath(path)
    content = _read_bytes(shown)
    sha256 = hashlib.sha256(content).hexdigest()
    content = _decompress(content, shown)
    if content.startswith(b"SIMPLE  ="):
        return binary_formats.read_fits(content, shown), sha256
    for start, what in _KNOWN_BINARIES:
        if content.startswith(start):
            raise InputFileError(f"This is {what}, {_EXPECTED}. Export the table to one of these.", shown)
    text, note = _decode(content, shown)
    if not text.strip():
        raise InputFileError("The file is empty; " + _EXPECTED + ".", shown)
    table = _read_text(text, content, shown)
    return (replace(table, notes=(*table.notes, note)) if note else table), sha256


def _read_bytes(shown: str) -> bytes:
    path = Path(shown)
    try:
        if path.is_dir():
            raise InputFileError("This is a directory, expected a file with a depth table.", shown)
        if not path.exists():
            raise InputFileError("There is no such file; check the name and the directory.", shown)
        if path.stat().st_size > _MAX_BYTES:
            raise InputFileError(f"The file is larger than {_MAX_BYTES // 10**6} MB; {_EXPECTED}.", shown)
        content = path.read_bytes()
    except (OSError, ValueError) as error:
        if isinstance(error, InputFileError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise InputFileError(f"The file cannot be read ({reason}); check its permissions.", shown) from error
    if not content:
        raise InputFileError("The file is empty; " + _EXPECTED + ".", shown)
    return content


def _decompress(content: bytes, shown: str) -> bytes:
    if not content.startswith(b"\x1f\x8b"):
        return content
    try:
        return gzip.decompress(content)
    except (OSError, EOFError, zlib.error) as error:
        raise InputFileError(
            f"The gzip compression is damaged ({error}); fetch or compress the file again.", shown
        ) from error


def _decode(content: bytes, shown: str) -> tuple[str, str]:
    """Decode text; the second item is a note when the encoding was not UTF-8."""
    if content.startswith((b"\xff\xfe", b"\xfe\xff")):
        try:
            return content.decode("utf-16"), ""
        except UnicodeDecodeError as error:
            raise InputFileError("The UTF-16 text is damaged; save it as UTF-8.", shown) from error
    if b"\x00" in content:
        raise InputFileError(f"This is a binary file of no known kind, {_EXPECTED}.", shown)
    try:
        return content.decode("utf-8-sig"), ""
    except UnicodeDecodeError:
        # Latin-1 maps every byte: only header words such as a micro sign can suffer, never a number.
        return content.decode("latin-1"), "The text is not UTF-8 and was read as Latin-1."


def _read_text(text: str, content: bytes, shown: str) -> RawTable:
    start = text.lstrip()[:4000]
    lowered = start.lower()
    if lowered.startswith(("<?xml", "<votable")) and "votable" in lowered:
        return binary_formats.read_votable(content, shown)
    if lowered.startswith(("<!doctype html", "<html")):
        raise InputFileError(f"This is a web page, {_EXPECTED}. Download the table itself.", shown)
    lines = text.splitlines()
    if start.startswith("# %ECSV"):
        return text_formats.read_ecsv(lines, shown)
    if text_formats.looks_like_ipac(lines):
        return text_formats.read_ipac(lines, shown)
    if any("byte-by-byte description" in line.lower() for line in lines[:2000]):
        return text_formats.read_journal(lines, shown)
    return text_formats.read_separated(lines, shown)
