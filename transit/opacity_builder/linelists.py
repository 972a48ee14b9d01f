"""Line lists and partition sums: files to arrays, and line intensities at any temperature."""

from __future__ import annotations

import gzip
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from transit.errors import InputFileError
from transit.units import SECOND_RADIATION_CM_K

REFERENCE_TEMPERATURE_K = 296.0
HITRAN_RECORD_LENGTH = 160

# Molar masses of the isotopologues (g/mol), by HITRAN molecule and isotopologue number.
MOLAR_MASS = {
    (1, 1): 18.010565, (1, 2): 20.014811, (1, 3): 19.01478,
    (2, 1): 43.98983, (2, 2): 44.993185, (2, 3): 45.994076, (2, 4): 44.994045,
    (5, 1): 27.994915, (5, 2): 28.99827, (5, 3): 29.999161, (5, 4): 28.99913, (5, 5): 31.002516,
    (5, 6): 30.002485, (6, 1): 16.0313, (6, 2): 17.034655, (23, 1): 27.010899, (23, 2): 28.014254,
    (23, 3): 28.007933,
}  # fmt: skip


@dataclass(frozen=True)
class LineList:
    """Lines of one species, sorted by wavenumber; every array has shape (L,).

    `intensity` is cm-1/(molecule cm-2) at 296 K with the terrestrial isotopic abundance folded in, as HITRAN
    defines it; `gamma` is the half width (cm-1/atm, HWHM at 296 K) and `gamma_exponent` its temperature exponent.
    `partition` maps each isotopologue index to (temperature, Q) arrays.
    """

    wavenumber_cm1: np.ndarray
    intensity: np.ndarray
    lower_energy_cm1: np.ndarray
    gamma: np.ndarray
    gamma_exponent: np.ndarray
    isotopologue: np.ndarray
    molar_mass: float
    partition: dict[int, tuple[np.ndarray, np.ndarray]]

    def within(self, low_cm1: float, high_cm1: float) -> LineList:
        """Return the lines between two wavenumbers."""
        part = slice(*np.searchsorted(self.wavenumber_cm1, [low_cm1, high_cm1]))
        names = (
            "wavenumber_cm1", "intensity", "lower_energy_cm1", "gamma", "gamma_exponent", "isotopologue",
        )  # fmt: skip
        return LineList(
            **{name: getattr(self, name)[part] for name in names},
            molar_mass=self.molar_mass,
            partition=self.partition,
        )

    def intensity_at(self, temperature_k: float) -> np.ndarray:
        """Line intensities at a temperature.

        Parameters
        ----------
        temperature_k : float

        Returns
        -------
        ndarray, shape (L,)
            cm-1/(molecule cm-2).

        Notes
        -----
        HITRAN definition: Rothman et al. 1998, JQSRT 60, 665, appendix A.
        """
        ratio = np.ones_like(self.intensity)
        for index, (grid_k, q) in self.partition.items():
            q_t, q_ref = np.exp(
                np.interp(np.log([temperature_k, REFERENCE_TEMPERATURE_K]), np.log(grid_k), np.log(q))
            )
            ratio[self.isotopologue == index] = q_ref / q_t
        return (
            self.intensity
            * ratio
            * intensity_scaling(self.wavenumber_cm1, self.lower_energy_cm1, temperature_k)
        )


def intensity_scaling(
    wavenumber_cm1: np.ndarray, lower_energy_cm1: np.ndarray, temperature_k: float
) -> np.ndarray:
    """Boltzmann and stimulated-emission factors of S(T)/S(296 K), without the partition sums.

    Parameters
    ----------
    wavenumber_cm1, lower_energy_cm1 : ndarray, shape (L,)
        cm-1.
    temperature_k : float

    Returns
    -------
    ndarray, shape (L,)

    Notes
    -----
    Rothman et al. 1998, JQSRT 60, 665, equation A11.
    """
    c2, t0, t = SECOND_RADIATION_CM_K, REFERENCE_TEMPERATURE_K, temperature_k
    boltzmann = np.exp(-c2 * lower_energy_cm1 * (1 / t - 1 / t0))
    return boltzmann * np.expm1(-c2 * wavenumber_cm1 / t) / np.expm1(-c2 * wavenumber_cm1 / t0)


def read_partition_sums(path: Path) -> dict[tuple[int, int], tuple[np.ndarray, np.ndarray]]:
    """Read total internal partition sums.

    Parameters
    ----------
    path : Path
        CSV with a column `T_K` and columns `NAME_molecule_isotopologue`.

    Returns
    -------
    dict
        (molecule, isotopologue) to (temperature in K, Q); blank cells are left out.
    """
    table = pd.read_csv(path, comment="#")
    sums = {}
    for column in table.columns[1:]:
        known = table[column].notna().to_numpy()
        _, molecule, isotopologue = column.rsplit("_", 2)
        sums[int(molecule), int(isotopologue)] = (
            table["T_K"].to_numpy(float)[known],
            table[column].to_numpy(float)[known],
        )
    return sums


def _open_text(path: Path):
    return gzip.open(path, "rt") if path.suffix == ".gz" else open(path)


def read_hitran(path: Path, partition_sums: dict) -> LineList:
    """Read 160-character HITRAN records of one molecule.

    Parameters
    ----------
    path : Path
        Plain or gzip text.
    partition_sums : dict
        From `read_partition_sums`.

    Raises
    ------
    InputFileError
        If a record is too short or a number cannot be read.
    """
    columns = {
        "molecule": (0, 2), "isotopologue": (2, 3), "nu": (3, 15), "s": (15, 25), "gamma": (35, 40),
        "energy": (45, 55), "n": (55, 59),
    }  # fmt: skip
    with _open_text(path) as stream:
        records = stream.read().splitlines()
    for number, record in enumerate(records, start=1):
        if len(record) < HITRAN_RECORD_LENGTH:
            raise InputFileError(
                f"the record has {len(record)} characters, expected {HITRAN_RECORD_LENGTH}; the file may be cut short.",
                str(path),
                number,
            )
    table = pd.DataFrame(
        {
            name: pd.to_numeric(pd.Series([record[slice(*span)] for record in records]), errors="coerce")
            for name, span in columns.items()
        }
    )
    if table.isna().any(axis=None):
        row = int(np.flatnonzero(table.isna().any(axis=1))[0])
        name = table.columns[table.iloc[row].isna()][0]
        found = records[row][slice(*columns[name])]
        raise InputFileError(f"{name} is {found!r}, expected a number.", str(path), row + 1)
    table = table.sort_values("nu", kind="stable")
    molecule = int(table["molecule"].iloc[0])
    isotopologues = sorted({int(i) for i in table["isotopologue"]})
    return LineList(
        wavenumber_cm1=table["nu"].to_numpy(),
        intensity=table["s"].to_numpy(),
        lower_energy_cm1=table["energy"].to_numpy(),
        gamma=table["gamma"].to_numpy(),
        gamma_exponent=table["n"].to_numpy(),
        isotopologue=table["isotopologue"].to_numpy(int),
        molar_mass=MOLAR_MASS[molecule, isotopologues[0]],
        partition={i: partition_sums[molecule, i] for i in isotopologues},
    )


# Weighted oscillator strength to line strength: pi e^2 / (m_e c^2) = 8.85282e-13 cm.
GF_TO_STRENGTH_CM = 8.85282e-13


def lines_from_gf(
    wavenumber_cm1,
    lower_energy_cm1,
    log10_gf,
    abundance,
    isotopologue,
    gamma,
    gamma_exponent,
    molar_mass,
    partition,
) -> LineList:
    """Build a line list from weighted oscillator strengths.

    Parameters
    ----------
    wavenumber_cm1, lower_energy_cm1, log10_gf, abundance : array_like, shape (L,)
    isotopologue : array_like of int, shape (L,)
    gamma, gamma_exponent : float
        Half width (cm-1/atm at 296 K) and its temperature exponent, the same for all lines: such lists have none.
    molar_mass : float
    partition : dict

    Notes
    -----
    S(T) = 8.85282e-13 gf exp(-c2 E/T) (1 - exp(-c2 nu/T)) / Q(T).
    """
    order = np.argsort(wavenumber_cm1, kind="stable")
    nu = np.asarray(wavenumber_cm1, float)[order]
    energy = np.asarray(lower_energy_cm1, float)[order]
    iso = np.asarray(isotopologue, int)[order]
    q_ref = np.empty_like(nu)
    for index, (grid_k, q) in partition.items():
        q_ref[iso == index] = np.exp(np.interp(np.log(REFERENCE_TEMPERATURE_K), np.log(grid_k), np.log(q)))
    c2 = SECOND_RADIATION_CM_K
    strength = (
        GF_TO_STRENGTH_CM
        * 10 ** np.asarray(log10_gf, float)[order]
        * np.asarray(abundance, float)[order]
        * np.exp(-c2 * energy / REFERENCE_TEMPERATURE_K)
        * -np.expm1(-c2 * nu / REFERENCE_TEMPERATURE_K)
        / q_ref
    )
    shape = np.ones_like(nu)
    return LineList(nu, strength, energy, gamma * shape, gamma_exponent * shape, iso, molar_mass, partition)
