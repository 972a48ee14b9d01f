"""Spectra of the star in the bins of a transit, and what unocculted spots and faculae do to the depth."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, replace
from functools import cached_property
from importlib import resources
from pathlib import Path

import numpy as np

from transit.errors import InputFileError, SettingError
from transit.stellar_grid import StellarGrid, photon_flux_in_bins, widened, with_planck

SHIPPED = "stellar_spectra.npz"
FORMAT = "leadline-stars-1"
LOG_G_MARGIN = 0.5  # dex beyond the shipped gravities; spectra of giants differ in their bands
# The case by which the disagreement of two grids is stated: spots 20 % cooler than the photosphere over 10 % of the
# disc, which lies among the values of active M dwarfs (Rackham, Apai & Giampapa 2018, ApJ 853, 122).
STANDARD_COOLER, STANDARD_FRACTION = 0.2, 0.1


def contamination(
    spot_fraction: np.ndarray,
    facula_fraction: np.ndarray,
    photosphere: np.ndarray,
    spot: np.ndarray,
    facula: np.ndarray,
) -> np.ndarray:
    """Factor by which spots and faculae outside the transit chord multiply the depth.

    epsilon = 1 / [1 - f_s (1 - F_s/F_p) - f_f (1 - F_f/F_p)] (Rackham, Apai & Giampapa 2018, ApJ 853, 122, eq. 3):
    above 1 for spots, below 1 for faculae.

    Parameters
    ----------
    spot_fraction, facula_fraction : ndarray, shape (W,)
        Covered shares of the disc outside the chord.
    photosphere, spot, facula : ndarray, shape (W, N)
        Photon fluxes, in one unit.

    Returns
    -------
    ndarray, shape (W, N)
    """
    missing = spot_fraction[:, None] * (1 - spot / photosphere)
    return 1 / (1 - missing - facula_fraction[:, None] * (1 - facula / photosphere))


@dataclass(frozen=True, eq=False)
class StarInBins:
    """Photon fluxes of a star's surface in the bins of a spectrum, by temperature.

    Parameters
    ----------
    teff_k : float
        Of the photosphere.
    temperature_k : ndarray, shape (K,)
        Increasing nodes.
    ln_photons : ndarray, shape (K, N)
        ln of the photon-weighted mean flux in each bin, of the main grid.
    ln_difference : ndarray, shape (K, N), optional
        The same of the second grid, less the main one's.
    grid_spread_percent : float, optional
        How far the depths that both grids predict differ between bins, peak to peak, for spots 20 % cooler over 10 %
        of the disc, in per cent of the depth; None with one grid.
    planck_bins : int
        Bins in which the main grid rests on Planck curves at some temperature in use.
    notes : tuple of str
        Sentences for the report.
    """

    teff_k: float
    temperature_k: np.ndarray
    ln_photons: np.ndarray
    ln_difference: np.ndarray | None = None
    grid_spread_percent: float | None = None
    planck_bins: int = 0
    notes: tuple[str, ...] = ()

    @property
    def n_grids(self) -> int:
        """Number of grids of spectra, 1 or 2."""
        return 1 if self.ln_difference is None else 2

    @cached_property
    def key(self) -> str:
        """Checksum of the spectra: two stars with one key give the same fluxes."""
        parts = [np.float64(self.teff_k), self.temperature_k, self.ln_photons]
        parts += [] if self.ln_difference is None else [self.ln_difference]
        return hashlib.sha256(b"|".join(part.tobytes() for part in parts)).hexdigest()

    def photon_flux(self, temperature_k: np.ndarray, grid_mix: np.ndarray | None = None) -> np.ndarray:
        """Photon-weighted mean flux in each bin.

        Between nodes ln flux is linear in 1/T, as in Wien's law; temperatures beyond the nodes are not served.

        Parameters
        ----------
        temperature_k : ndarray, shape (W,)
        grid_mix : ndarray, shape (W,), optional
            From 0 (main grid, the default) to 1 (second grid), linear in ln flux; ignored with one grid.

        Returns
        -------
        ndarray, shape (W, N)
            In a unit common to all bins and temperatures.
        """
        x, nodes = -1 / temperature_k, -1 / self.temperature_k
        below = np.clip(np.searchsorted(nodes, x) - 1, 0, len(nodes) - 2)
        share = ((x - nodes[below]) / (nodes[below + 1] - nodes[below]))[:, None]
        ln_flux = _between(self.ln_photons, below, share)
        if self.ln_difference is not None and grid_mix is not None:
            ln_flux += grid_mix[:, None] * _between(self.ln_difference, below, share)
        return np.exp(ln_flux, out=ln_flux)


def _between(by_node: np.ndarray, below: np.ndarray, share: np.ndarray) -> np.ndarray:
    lower = by_node[below]
    return lower + share * (by_node[below + 1] - lower)


@dataclass(frozen=True, eq=False)
class StarSpectra:
    """Spectra of stars at several temperatures.

    Parameters
    ----------
    grids : tuple of StellarGrid, length 1 or 2
        The main one first.
    source : str
        Where they are from, for the report.
    path : str, optional
        File of the user's; None for the shipped ones, which alone may be continued with Planck curves.
    """

    grids: tuple[StellarGrid, ...]
    source: str
    path: str | None = None

    def in_bins(
        self,
        wavelength_um: np.ndarray,
        half_width_um: np.ndarray,
        teff_k: float,
        lowest_k: float,
        highest_k: float,
    ) -> StarInBins:
        """Photon fluxes in the bins of a spectrum.

        A depth is a ratio of photon counts, so fluxes are averaged as integral(lambda F dlambda) over each bin (divided
        by integral(lambda dlambda)); for a depth that is constant in the bin the contamination is then exact. The
        throughput of the instrument inside a bin is not known and taken as constant.

        Parameters
        ----------
        wavelength_um, half_width_um : ndarray, shape (N,)
        teff_k : float
            Of the photosphere.
        lowest_k, highest_k : float
            Temperatures of the coolest spots and of the hottest faculae.

        Returns
        -------
        StarInBins

        Raises
        ------
        SettingError
            If a temperature is not positive, or the range does not hold the photosphere.
        InputFileError
            If the user's spectra miss bins or temperatures.
        """
        if not 0 < lowest_k <= teff_k <= highest_k < np.inf:
            raise SettingError(
                f"Spots of {lowest_k:.0f} K, a photosphere of {teff_k:.0f} K and faculae of {highest_k:.0f} K were "
                "asked for; expected positive temperatures in increasing order. Correct teff_k, spot_contrast_k or "
                "facula_contrast_k in the system file."
            )
        low_um, high_um = wavelength_um - half_width_um, wavelength_um + half_width_um
        if self.path is not None:
            self._refuse_missing(low_um, high_um, lowest_k, highest_k)
        coolest_k = min(lowest_k, teff_k * (1 - STANDARD_COOLER)) if len(self.grids) > 1 else lowest_k
        grids = self.grids
        if self.path is None:
            grids = [widened(g, low_um.min(), high_um.max(), coolest_k, highest_k) for g in grids]
        nodes = _nodes(np.unique(np.concatenate([grid.teff_k for grid in grids])), coolest_k, highest_k)
        ln_photons = [_ln_photons_at(with_planck(g), nodes, wavelength_um, half_width_um) for g in grids]
        planck = [_planck_bins(grid, low_um, high_um, lowest_k, highest_k) for grid in grids]
        star = StarInBins(float(teff_k), nodes, ln_photons[0], planck_bins=planck[0][0])
        notes = [f"Spectra of the star: {self.source}."]
        if len(grids) > 1:
            star = replace(star, ln_difference=ln_photons[1] - ln_photons[0])
            star = replace(star, grid_spread_percent=_grid_spread_percent(star))
            notes.append(_spread_note(star))
        bare = [(grid.name, *found) for grid, found in zip(grids, planck, strict=True) if found[0]]
        notes += [_planck_note(bare, len(wavelength_um))] if bare else []
        return replace(star, notes=tuple(notes))

    def _refuse_missing(self, low_um, high_um, lowest_k: float, highest_k: float) -> None:
        for grid in self.grids:
            edges, teff_k = grid.edges_um, grid.teff_k
            outside = (low_um < edges[0]) | (high_um > edges[-1])
            if outside.any():
                raise InputFileError(
                    f"The spectra of the star span {edges[0]:.4g}-{edges[-1]:.4g} um, but {outside.sum()} of "
                    f"{len(outside)} bins of the transit spectrum, {low_um.min():.4g}-{high_um.max():.4g} um, reach "
                    "beyond; expected spectra over every bin. Extend them, or leave the shipped ones in use.",
                    self.path,
                )
            if lowest_k < teff_k[0] or highest_k > teff_k[-1]:
                raise InputFileError(
                    f"The spectra of the star are for {teff_k[0]:.0f}-{teff_k[-1]:.0f} K, but spots, photosphere and "
                    f"faculae are allowed {lowest_k:.0f}-{highest_k:.0f} K; expected spectra over the whole range. Add "
                    "temperatures, or narrow spot_contrast_k and facula_contrast_k under [priors] in the system file.",
                    self.path,
                )


def _nodes(teff_k: np.ndarray, coolest_k: float, hottest_k: float) -> np.ndarray:
    """Temperatures that enclose a range; at least two, also where spots, photosphere and faculae are equally hot."""
    first = min(np.searchsorted(teff_k, coolest_k, side="right") - 1, len(teff_k) - 2)
    last = max(np.searchsorted(teff_k, hottest_k), first + 1)
    return teff_k[first : last + 1]


def _ln_photons_at(grid: StellarGrid, nodes_k, wavelength_um, half_width_um) -> np.ndarray:
    """ln photon flux at nodes that include the grid's own in their range, (K, N): linear in 1/T between them."""
    ln_photons = np.log(photon_flux_in_bins(grid, wavelength_um, half_width_um))
    return np.stack([np.interp(-1 / nodes_k, -1 / grid.teff_k, column) for column in ln_photons.T], axis=1)


def _planck_bins(grid: StellarGrid, low_um, high_um, lowest_k: float, highest_k: float) -> tuple[int, str]:
    """Number of transit bins with a wavelength, or a temperature in use, that no model covers, and which those are."""
    first = max(int(np.searchsorted(grid.teff_k, lowest_k, side="right")) - 1, 0)
    last = int(np.searchsorted(grid.teff_k, highest_k))
    edges = grid.edges_um
    overlaps = (low_um[:, None] < edges[1:]) & (high_um[:, None] > edges[:-1])
    under = overlaps.any(axis=0)
    bare = ~grid.covered
    concerned = under & bare[first : last + 1].any(axis=0)
    never = concerned & bare.all(axis=0)
    sometimes = concerned & ~never
    where = []
    if sometimes.any():
        teff_k = grid.teff_k[~bare[:, sometimes].any(axis=1)]
        where += [f"below {teff_k[0]:.0f} K"] if lowest_k < teff_k[0] else []
        where += [f"above {teff_k[-1]:.0f} K"] if highest_k > teff_k[-1] else []
    if never.any():
        known = np.flatnonzero(~bare.all(axis=0))
        where.append(f"outside {edges[known[0]]:.3g}-{edges[known[-1] + 1]:.3g} um")
    return int((overlaps & concerned).any(axis=1).sum()), " and ".join(where)


def _spread_note(star: StarInBins) -> str:
    return (
        f"The two grids of stellar spectra differ by {star.grid_spread_percent:.2g} % of the depth (peak to peak over "
        "the bins) for spots 20 % cooler than the photosphere over 10 % of the disc: the star's model is no better."
    )


def _planck_note(cases: list[tuple[str, int, str]], n_bins: int) -> str:
    listed = ", ".join(f"{name} {where} in {count} of {n_bins} bins" for name, count, where in cases)
    return (
        f"Planck curves scaled to join the models of the star stand in where there are none ({listed}). Planck has no "
        "molecular bands: there, bands of the star that mimic a planet's are not fully tested."
    )


def _grid_spread_percent(star: StarInBins) -> float:
    fraction, none = np.array([STANDARD_FRACTION]), np.zeros(1)
    factors = []
    for mix in (np.zeros(1), np.ones(1)):
        photosphere = star.photon_flux(np.array([star.teff_k]), mix)
        spot = star.photon_flux(np.array([star.teff_k * (1 - STANDARD_COOLER)]), mix)
        factors.append(contamination(fraction, none, photosphere, spot, photosphere)[0])
    return float(100 * np.ptp(factors[1] - factors[0]))


def load_star_spectra(log_g: float | None = None) -> StarSpectra:
    """Spectra of stars shipped with the program.

    Parameters
    ----------
    log_g : float, optional
        Surface gravity, log10 of cm/s2; the nearest of 4.5 and 5.0 is used, 5.0 (an M dwarf) when not given.

    Returns
    -------
    StarSpectra
        Two grids: docs/stars.md tells what they are good for.

    Raises
    ------
    SettingError
        If the gravity is not that of a dwarf.
    """
    with (
        resources.files("transit").joinpath(SHIPPED).open("rb") as file,
        np.load(file, allow_pickle=False) as stored,
    ):
        header = json.loads(str(stored["header"]))
        gravities = header["log_g"]
        wanted = gravities[-1] if log_g is None else log_g
        nearest = min(gravities, key=lambda value: abs(value - wanted))
        if not abs(nearest - wanted) <= LOG_G_MARGIN:
            raise SettingError(
                f"log g of the star is {wanted:g}; the shipped spectra are of dwarfs, log g {gravities[0]:g} to "
                f"{gravities[-1]:g}. Give your own spectra of the star."
            )
        grids = tuple(
            StellarGrid(
                f"{name} grid",
                stored["edges_um"],
                stored[f"teff_k_{name}_{nearest}"],
                stored[f"ln_flux_{name}_{nearest}"].astype(float),
            )
            for name in ("main", "other")
        )
    return StarSpectra(
        grids, f"BT-Settl08, NextGen and ATLAS9 models of solar composition, log g {nearest:g}"
    )


def read_star_spectra(path: str | Path) -> StarSpectra:
    """Read the user's spectra of the star at several temperatures.

    Parameters
    ----------
    path : str or Path
        CSV, ECSV, other text or FITS table; `transit.readers.stellar` tells which columns.

    Returns
    -------
    StarSpectra
        With one grid.

    Raises
    ------
    InputFileError
        If the file is missing or cannot be understood, or holds an impossible value.
    """
    from transit.readers.stellar import read_stellar_grid  # astropy: not needed for the shipped spectra

    grid, source = read_stellar_grid(path)
    return StarSpectra((grid,), source, str(path))
