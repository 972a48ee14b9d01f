"""Opacity tables: the common band grid, the file format, and finding, verifying and loading a table.

A table holds, for each band of constant resolving power and at each temperature and pressure, the distribution of
the cross section inside the band: its natural logarithms sorted, cut into slices of equal probability, and each
slice's mean kept, so that the band mean of ln(cross section), which a transit radius follows, is exact.
"""

from __future__ import annotations

import hashlib
import io
import json
import zipfile
from dataclasses import dataclass
from importlib import resources
from pathlib import Path

import numpy as np

from transit.errors import OpacityTableError

FORMAT = "leadline-opacity-1"
BANDS_PER_E_FOLD = 400
GRID_START_CM1 = 500.0
REGISTRY = "checksums.txt"
SUFFIX = ".opacity"
LN_FLOOR = -80.0  # a cross section of 1.8e-35 cm2: transparent in any atmosphere
LN_LEAST = -130.0  # least value that a table can store; collision pairs (cm5) lie near -110


def band_edges_cm1(first: int, count: int) -> np.ndarray:
    """Edges of bands of the common grid, cm-1, increasing.

    Parameters
    ----------
    first : int
        Index of the first band; band 0 starts at 500 cm-1.
    count : int
        Number of bands.

    Returns
    -------
    ndarray, shape (count + 1,)
    """
    return GRID_START_CM1 * np.exp((first + np.arange(count + 1)) / BANDS_PER_E_FOLD)


def band_index(wavenumber_cm1) -> np.ndarray:
    """Index of the band of the common grid that holds a wavenumber (may be negative below 500 cm-1)."""
    return np.floor(np.log(np.asarray(wavenumber_cm1) / GRID_START_CM1) * BANDS_PER_E_FOLD).astype(int)


@dataclass(frozen=True, eq=False)
class OpacityTable:
    """Distribution of the cross section of one species (or collision pair).

    Parameters
    ----------
    species : str
    first_band : int
        Index of the first band on the common grid.
    temperature_k : ndarray, shape (T,)
    pressure_bar : ndarray, shape (P,)
        One node where there is no pressure dependence.
    ln_cross_section : ndarray, shape (B, T, P, S)
        Mean of ln(cross section / cm2 per molecule) in each slice; for a collision pair ln(cm5 per molecule2).
    ln_mean : ndarray, shape (B, T)
        ln of the mean cross section of each band, which does not depend on pressure: for band sums.
    header : dict
        Everything else that the file states: sources, terms, trusted ranges, known bands, builder version.
    """

    species: str
    first_band: int
    temperature_k: np.ndarray
    pressure_bar: np.ndarray
    ln_cross_section: np.ndarray
    ln_mean: np.ndarray
    header: dict

    @property
    def n_bands(self) -> int:
        """Number of bands."""
        return self.ln_cross_section.shape[0]

    @property
    def edges_cm1(self) -> np.ndarray:
        """Band edges, cm-1, shape (B + 1,)."""
        return band_edges_cm1(self.first_band, self.n_bands)

    @property
    def trusted(self) -> list[dict]:
        """Trusted ranges: dicts with low_um, high_um, t_min_k, t_max_k, error (a sentence)."""
        return self.header["trusted"]

    @property
    def bands_um(self) -> list[list[float]]:
        """Known bands of the species: (lower, upper) wavelength, micrometre."""
        return self.header["bands_um"]


def write_table(path: Path, table: OpacityTable, step: float = 0.004) -> str:
    """Write a table; the same table gives the same bytes.

    Parameters
    ----------
    path : Path
    table : OpacityTable
    step : float
        Step of the stored ln(cross section); half of it is the largest storage error.

    Returns
    -------
    str
        SHA-256 of the file.

    Notes
    -----
    A zip archive with fixed dates holding `header.json`, `values.npy` (16-bit integers: ln(cross section) over
    `step`, differenced along temperature because that compresses best) and `means.npy` (ln of band means).
    """
    integers = np.rint(np.maximum(table.ln_cross_section, LN_LEAST) / step).astype(np.int16)
    stored = integers.copy()
    stored[:, 1:] -= integers[:, :-1]
    values = _array_bytes(stored.transpose(1, 2, 3, 0))
    means = _array_bytes(np.rint(np.maximum(table.ln_mean, LN_LEAST) / step).astype(np.int16))
    header = {
        "format": FORMAT,
        "species": table.species,
        "first_band": table.first_band,
        "n_bands": table.n_bands,
        "bands_per_e_fold": BANDS_PER_E_FOLD,
        "grid_start_cm1": GRID_START_CM1,
        "temperature_k": [float(t) for t in table.temperature_k],
        "pressure_bar": [float(p) for p in table.pressure_bar],
        "n_slices": table.ln_cross_section.shape[3],
        "step": step,
        "units": "bands in cm-1, temperature in K, pressure in bar; values times step are ln of the cross section in "
        "cm2 per molecule (collision pairs: cm5 per molecule squared)",
        "values_sha256": hashlib.sha256(values).hexdigest(),
        **table.header,
    }
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED, compresslevel=9) as archive:
        members = {
            "header.json": json.dumps(header, indent=1).encode(),
            "values.npy": values,
            "means.npy": means,
        }
        for name, content in members.items():
            info = zipfile.ZipInfo(name, date_time=(1980, 1, 1, 0, 0, 0))
            info.compress_type = zipfile.ZIP_DEFLATED
            archive.writestr(info, content)
    data = buffer.getvalue()
    partial = path.with_suffix(".partial")
    partial.write_bytes(data)
    partial.replace(path)
    return hashlib.sha256(data).hexdigest()


def _array_bytes(array: np.ndarray) -> bytes:
    buffer = io.BytesIO()
    np.save(buffer, np.ascontiguousarray(array))
    return buffer.getvalue()


def write_registry(folder: Path) -> None:
    """Write the checksum registry of all tables in a folder."""
    lines = [
        f"{hashlib.sha256(path.read_bytes()).hexdigest()}  {path.name}\n"
        for path in sorted(folder.glob(f"*{SUFFIX}"))
    ]
    (folder / REGISTRY).write_text("".join(lines))


def default_folder() -> Path:
    """Folder of the shipped tables: inside the installed package, or beside it in a source tree.

    Raises
    ------
    OpacityTableError
        If there is none.
    """
    inside = resources.files("transit") / "opacity_tables"
    beside = Path(__file__).resolve().parent.parent / "opacity_tables"
    for folder in (Path(str(inside)), beside):
        if (folder / REGISTRY).is_file():
            return folder
    raise OpacityTableError(
        f"No opacity tables: neither {inside} nor {beside} holds {REGISTRY}. Reinstall leadline."
    )


def available(folder: Path | None = None) -> list[str]:
    """Names of the tables in a folder (species, and collision pairs such as `H2-H2`), sorted."""
    return sorted(_registry(folder or default_folder()))


def _registry(folder: Path) -> dict[str, str]:
    try:
        lines = (folder / REGISTRY).read_text().splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise OpacityTableError(
            f"{folder / REGISTRY} cannot be read ({error}). Reinstall leadline."
        ) from error
    entries = {}
    for line in lines:
        checksum, _, name = line.partition("  ")
        entries[name.removesuffix(SUFFIX)] = checksum
    return entries


def load_table(species: str, folder: Path | None = None) -> OpacityTable:
    """Load a table after verifying its checksum.

    Parameters
    ----------
    species : str
        As listed by `available`.
    folder : Path, optional
        Default: the shipped tables.

    Raises
    ------
    OpacityTableError
        If the table is missing, unreadable, or not the one that was registered.
    """
    folder = folder or default_folder()
    registry = _registry(folder)
    path = folder / f"{species}{SUFFIX}"
    if species not in registry:
        raise OpacityTableError(f"No opacity table for {species}; there are {', '.join(sorted(registry))}.")
    try:
        data = path.read_bytes()
    except OSError as error:
        raise OpacityTableError(f"{path} cannot be read ({error.strerror}). Reinstall leadline.") from error
    if hashlib.sha256(data).hexdigest() != registry[species]:
        raise OpacityTableError(
            f"{path} is not the table that was registered (its SHA-256 differs from {REGISTRY}). "
            "Reinstall leadline, or build the tables again."
        )
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            header = json.loads(archive.read("header.json"))
            stored = np.load(io.BytesIO(archive.read("values.npy")), allow_pickle=False)
            means = np.load(io.BytesIO(archive.read("means.npy")), allow_pickle=False)
    except (zipfile.BadZipFile, KeyError, ValueError) as error:
        raise OpacityTableError(
            f"{path} is not an opacity table ({error}). Build the tables again."
        ) from error
    if header.get("format") != FORMAT:
        raise OpacityTableError(f"{path} has format {header.get('format')!r}, expected {FORMAT!r}.")
    if (header["bands_per_e_fold"], header["grid_start_cm1"]) != (BANDS_PER_E_FOLD, GRID_START_CM1):
        raise OpacityTableError(f"{path} is on another band grid than this version reads.")
    integers = np.cumsum(stored, axis=0, dtype=np.int16)
    ln_cross_section = np.moveaxis(integers, 3, 0).astype(np.float32) * np.float32(header["step"])
    return OpacityTable(
        species=species,
        first_band=header["first_band"],
        temperature_k=np.array(header["temperature_k"]),
        pressure_bar=np.array(header["pressure_bar"]),
        ln_cross_section=ln_cross_section,
        ln_mean=means * header["step"],
        header=header,
    )
