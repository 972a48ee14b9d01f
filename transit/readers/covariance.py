"""Covariance of the bins from a file of its own: format, rows, unit, and every reason to refuse it."""

from __future__ import annotations

import gzip
import hashlib
import io
import os
import warnings
import zlib
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from transit.errors import InputFileError
from transit.readers.cells import is_missing, parse_number
from transit.readers.options import COVARIANCE_UNITS
from transit.readers.quantities import error_to_fraction, format_number

_MAX_BYTES = 200_000_000
_EXPECTED = "expected N x N numbers as CSV or text, a FITS image, or a .npy file"
_SYMMETRY = 1e-6  # of the two errors' product: files written in single precision differ by 1e-7
_SMALLEST_EIGENVALUE = 1e-10  # of the correlations: below, the inverse is rounding
_POOR_EIGENVALUE = 1e-4
# A common level of a few errors belongs into a covariance; slips of the unit are factors of 100 and more in the error.
_ERROR_FACTOR = 10.0
_SAME_FACTOR = 3.0  # within this another unit would agree


def read_covariance(
    path: str | os.PathLike,
    usable: Sequence[int],
    n_rows: int,
    kept: np.ndarray,
    unit: str,
    depth: np.ndarray,
    depth_err: np.ndarray,
) -> tuple[np.ndarray, list[str]]:
    """Read the covariance of the depths and bring it into the order of the bins.

    Parameters
    ----------
    path : str or path-like
        CSV or text, FITS or .npy; CSV, text and FITS may be compressed with gzip.
    usable : sequence of int, length U
        Rows of the depth table that were not left out, as positions among its `n_rows` rows.
    n_rows : int
        Rows of the depth table for the chosen planet and reference. The matrix may be of this size or U x U.
    kept : ndarray of int, shape (N,)
        For each bin of the spectrum its position among the usable rows.
    unit : {"fraction", "percent", "ppm", "radius-ratio"}
        Unit whose square the matrix is in. A covariance of radius ratios k becomes one of depths by the Jacobian
        2k on both sides (first order propagation of errors: JCGM 100:2008, 5.2.2).
    depth, depth_err : ndarray, shape (N,)
        Depths and the table's errors, fraction.

    Returns
    -------
    covariance : ndarray, shape (N, N)
        Fraction squared, exactly symmetric.
    notes : list of str
        What was read, the largest correlation and the ratio of the diagonal to the quoted errors.

    Raises
    ------
    InputFileError
        If the file cannot be read, or the matrix has another size, holds values that are not finite, is not
        symmetric or not positive definite, or its diagonal is not the square of the quoted errors within a factor
        of three.
    """
    shown = os.fspath(path)
    content = _read_bytes(shown)
    matrix, kind = _read_matrix(content, shown, {len(usable), n_rows})
    rows = _rows_of_bins(matrix, shown, usable, n_rows, kept)
    raw = np.ascontiguousarray(matrix[np.ix_(rows, rows)])
    _refuse_numbers(raw, rows, shown)
    raw = (raw + raw.T) / 2
    scale = error_to_fraction(np.ones(len(rows)), np.sqrt(np.maximum(depth, 0.0)), unit)
    ratio = np.sqrt(np.diag(raw)) * scale / depth_err
    _refuse_diagonal(raw, ratio, depth_err, unit, shown)
    notes = _check_correlations(raw, rows, shown)
    checksum = hashlib.sha256(content).hexdigest()
    opening = (
        f"The covariance of the bins was read from {Path(shown).name} ({kind}, {len(matrix)} x {len(matrix)}, "
        f"{unit} squared, SHA-256 {checksum[:12]}...)."
    )
    compared = (
        f"Its diagonal replaces the quoted errors: {np.median(ratio):.3g} times these in the median, "
        f"{ratio.min():.3g} to {ratio.max():.3g}."
    )
    return raw * np.outer(scale, scale), [opening, compared, *notes]


# --- size, numbers and diagonal -----------------------------------------------------------------------------


def _rows_of_bins(matrix, shown, usable, n_rows, kept) -> np.ndarray:
    """Return the row of the matrix that belongs to each bin, shape (N,)."""
    n_usable = len(usable)
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1]:
        size = " x ".join(str(n) for n in matrix.shape) or "a single number"
        index = ""
        if matrix.ndim == 2 and abs(matrix.shape[0] - matrix.shape[1]) == 1:
            index = " A column of labels, or a row of wavelengths that looks like numbers, must be removed."
        raise InputFileError(f"The matrix is {size}, expected a square one of {n_usable} rows.{index}", shown)
    if len(matrix) == n_usable:
        return np.asarray(kept)
    if len(matrix) == n_rows:
        return np.asarray(usable)[kept]
    sizes = f"{n_usable} x {n_usable}, one row for each usable row of the depth table"
    if n_rows != n_usable:
        sizes += f", or {n_rows} x {n_rows}, one for each of its rows"
    raise InputFileError(
        f"The matrix is {len(matrix)} x {len(matrix)}, expected {sizes}. Give the covariance of these very bins.",
        shown,
    )


def _refuse_numbers(raw: np.ndarray, rows: np.ndarray, shown: str) -> None:
    """Refuse what is not finite, a variance that is not positive, and a matrix that is not symmetric."""
    bad = np.argwhere(~np.isfinite(raw))
    if len(bad):
        i, j = bad[0]
        raise InputFileError(
            f"The element in row {rows[i] + 1}, column {rows[j] + 1} of the matrix is {raw[i, j]}, expected a finite "
            "number for every bin that is used. Correct it, or leave the depth of that bin blank.",
            shown,
        )
    variance = np.diag(raw)
    bad = np.flatnonzero(variance <= 0)
    if len(bad):
        i = bad[0]
        raise InputFileError(
            f"The variance in row {rows[i] + 1} of the diagonal is {format_number(variance[i])}, expected a "
            "positive number. Give the full covariance, variances on its diagonal.",
            shown,
        )
    product = np.sqrt(np.outer(variance, variance))
    excess = np.abs(raw - raw.T) / product
    i, j = np.unravel_index(np.argmax(excess), excess.shape)
    if excess[i, j] > _SYMMETRY:
        raise InputFileError(
            f"The matrix is not symmetric: row {rows[i] + 1}, column {rows[j] + 1} is {format_number(raw[i, j])} and "
            f"row {rows[j] + 1}, column {rows[i] + 1} is {format_number(raw[j, i])}, expected the same number. Give "
            "the full covariance, not one triangle of it or a factor.",
            shown,
        )


def _refuse_diagonal(raw, ratio, depth_err, unit, shown) -> None:
    """Refuse a diagonal that is far from the quoted errors: another unit, or no covariance at all."""
    median = float(np.median(ratio))
    if 1 / _ERROR_FACTOR <= median <= _ERROR_FACTOR:
        return
    root = np.sqrt(np.diag(raw))
    fits = []
    for other in COVARIANCE_UNITS:
        own = float(np.median(error_to_fraction(root, root, other) / depth_err))
        if other != unit and 1 / _SAME_FACTOR <= own <= _SAME_FACTOR:
            fits.append(other)
    if np.allclose(np.diag(raw), 1.0, rtol=1e-6):
        advice = "A diagonal of ones is a correlation matrix: multiply row and column by the errors"
    elif fits:
        advice = f"In {fits[0]} squared they would agree: give --covariance-unit {fits[0]}"
    else:
        advice = "Check that the matrix is a covariance of these depths, and --covariance-unit"
    raise InputFileError(
        f"The square root of the diagonal, read in {unit} squared, is {median:.3g} times the errors of the depth table "
        f"in the median, expected within a factor of {_ERROR_FACTOR:g}. {advice}.",
        shown,
    )


def _check_correlations(raw: np.ndarray, rows: np.ndarray, shown: str) -> list[str]:
    """Refuse a matrix that is not positive definite; else say how strong the correlations are."""
    root = np.sqrt(np.diag(raw))
    correlation = raw / np.outer(root, root)
    smallest = float(np.linalg.eigvalsh(correlation)[0])
    off = correlation - np.diag(np.diag(correlation))
    i, j = sorted(np.unravel_index(np.argmax(np.abs(off)), off.shape))
    pair = f"rows {rows[i] + 1} and {rows[j] + 1} of the matrix"
    if smallest <= _SMALLEST_EIGENVALUE:
        worst = f"; the correlation of {pair} is {off[i, j]:.3g}, beyond 1" if abs(off[i, j]) > 1 else ""
        raise InputFileError(
            f"The matrix is not positive definite: the smallest eigenvalue of its correlations is {smallest:.3g}, "
            f"expected above {_SMALLEST_EIGENVALUE:g}{worst}. Estimate it from more samples than there are bins, or "
            "give it with more digits.",
            shown,
        )
    if not off[i, j]:
        return ["The covariance is diagonal: no bins are correlated."]
    notes = [f"The largest correlation is {off[i, j]:.2g}, of {pair}."]
    if smallest < _POOR_EIGENVALUE:
        notes.append(
            f"The smallest eigenvalue of the correlations is {smallest:.2g}: some combination of bins is held to be "
            "known far better than any bin, which few matrices estimated from samples can support."
        )
    return notes


# --- formats -------------------------------------------------------------------------------------------------


def _read_bytes(shown: str) -> bytes:
    path = Path(shown)
    try:
        if path.is_dir():
            raise InputFileError(f"This is a directory, {_EXPECTED}.", shown)
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
    if not content.strip():
        raise InputFileError(f"The file is empty; {_EXPECTED}.", shown)
    return content


def _read_matrix(content: bytes, shown: str, sizes: set[int]) -> tuple[np.ndarray, str]:
    """Return the numbers, float, and the kind of file in words; the content decides, not the name."""
    if content.startswith(b"\x1f\x8b"):
        try:
            with gzip.open(io.BytesIO(content)) as file:
                content = file.read(_MAX_BYTES + 1)
        except (OSError, EOFError, zlib.error) as error:
            reason = f"The gzip compression is damaged ({error}); fetch or compress the file again."
            raise InputFileError(reason, shown) from error
        if len(content) > _MAX_BYTES:
            raise InputFileError(
                f"The file unpacks to more than {_MAX_BYTES // 10**6} MB; {_EXPECTED}.", shown
            )
    if content.startswith(b"SIMPLE  ="):
        return _read_fits(content, shown, sizes), "FITS image"
    if content.startswith(b"\x93NUMPY"):
        return _read_npy(content, shown), "NumPy array"
    if b"\x00" in content:
        raise InputFileError(f"This is a binary file of no known kind, {_EXPECTED}.", shown)
    return _read_text(content.decode("utf-8-sig", "replace"), shown), "text"


def _read_npy(content: bytes, shown: str) -> np.ndarray:
    try:
        # Pickled objects could run anything, so that they are not read at all.
        array = np.load(io.BytesIO(content), allow_pickle=False)
    except Exception as error:  # a damaged header fails in as many ways as there are bytes
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(
            f"The .npy file cannot be read ({reason}); save it again as numbers.", shown
        ) from error
    if array.dtype.kind not in "fiu":
        raise InputFileError(
            f"The .npy file holds elements of type {array.dtype}, expected real numbers.", shown
        )
    return array.astype(float)


def _read_fits(content: bytes, shown: str, sizes: set[int]) -> np.ndarray:
    """Return the first square image of one of the sizes, else the first image of any shape."""
    from astropy.io import fits

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with fits.open(io.BytesIO(content), memmap=False) as hdus:
                images = [hdu.data for hdu in hdus if hdu.is_image and hdu.data is not None]
    except Exception as error:  # a damaged file fails in as many ways as there are bytes
        reason = " ".join(str(error).split())[:200]
        raise InputFileError(f"The FITS file is damaged ({reason}); fetch it again.", shown) from error
    if not images:
        raise InputFileError("The FITS file holds no image, expected one of N x N numbers.", shown)
    wanted = {(n, n) for n in sizes}
    return next((image for image in images if image.shape in wanted), images[0]).astype(float)


def _read_text(text: str, shown: str) -> np.ndarray:
    """Return the rows of a text file; a first row without any number is a header."""
    body = [
        (number, line.strip())
        for number, line in enumerate(text.splitlines(), start=1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    if not body:
        raise InputFileError(f"The file holds comments only, {_EXPECTED}.", shown)
    separator = next((mark for mark in ";,\t" if mark in body[0][1]), None)
    rows = [(number, [cell.strip().strip('"') for cell in line.split(separator)]) for number, line in body]
    if not any(_is_number(cell) for cell in rows[0][1]):
        del rows[0]
    if not rows:
        raise InputFileError(f"The file has a header but no rows, {_EXPECTED}.", shown)
    width = len(rows[0][1])
    values = np.empty((len(rows), width))
    for i, (number, cells) in enumerate(rows):
        if len(cells) != width:
            raise InputFileError(
                f"The row has {len(cells)} elements, expected {width} as in the first one.", shown, number
            )
        values[i] = [_number(cell, separator, shown, number) for cell in cells]
    return values


def _is_number(cell: str) -> bool:
    try:
        parse_number(cell.replace(",", "."))
    except ValueError:
        return False
    return True


def _number(cell: str, separator: str | None, shown: str, line: int) -> float:
    if is_missing(cell):
        return float("nan")  # refused later, unless it belongs to a row of the table that is left out
    try:
        return parse_number(cell.replace(",", ".") if separator == ";" else cell)
    except ValueError as error:
        raise InputFileError(
            f"An element is {cell!r}, expected a number. Correct it.", shown, line
        ) from error
