"""`python -m transit.stellar_builder --source DIR --out FILE` computes the shipped spectra of stars.

Two grids are joined from three published ones, because none covers the stars and the wavelengths of transits alone:

* main: BT-Settl08 to 3500 K over 0.645-2.555 um; NextGen at other wavelengths and above 3500 K; ATLAS9 at 7000 K;
* other: NextGen to 3500 K, ATLAS9 above.

At a join the two models differ, and a step in the flux of one temperature but not of another would be a step in the
ratio of the two, which is what a spot puts into a spectrum. So the model beyond a join is scaled to meet the other one,
and the scaling is faded out away from the join: in ln wavelength over `WAVELENGTH_FADE`, in temperature up to
`FADED_OUT_K`.
"""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import click
import numpy as np

from transit.stellar_grid import BINS_PER_E_FOLD

LOG_G = (4.5, 5.0)
RANGE_UM = (0.3, 10.0)
JOIN_K = 3500.0
FADED_OUT_K = 4500.0
WAVELENGTH_FADE = 0.25  # in ln wavelength: 0.645 um to 0.50 um, 2.555 um to 3.28 um
JOIN_WINDOW = 0.02  # in ln wavelength: over which the two models are compared
HOTTEST_K = 7000.0
ROUNDING = 1e-5  # of the wavelengths in the source files

FILES = {
    "btsettl": "models/btsettl08_logg{}_solar_spexprism.csv.gz",
    "nextgen": "models/nextgen_logg{}_solar_R1000bins.csv.gz",
    "atlas9": "models/atlas9_k93_logg{}_solar_native.csv.gz",
}
SOURCES = [
    "BT-Settl08: Allard, Homeier & Freytag 2012, Phil. Trans. R. Soc. A 370, 2765 (solar, SpeX prism resolution)",
    "PHOENIX NextGen: Hauschildt, Allard & Baron 1999, ApJ 512, 377 (solar)",
    "ATLAS9: Kurucz 1993, CD-ROM 13 (solar, microturbulence 2 km/s)",
]
TERMS = (
    "Published for free use with citation of the sources; these are means over wide bins, not the originals."
)


def read_model(path: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Read one published grid: wavelengths (L,), micrometre; temperatures (T,), K; fluxes (T, L), W m-2 um-1."""
    with gzip.open(path, "rt") as lines:
        rows = [line.strip().split(",") for line in lines if not line.startswith("#")]
    teff_k = np.array([float(name.removeprefix("T")) for name in rows[0][1:]])
    values = np.array(rows[1:], dtype=float)
    return values[:, 0], teff_k, values[:, 1:].T


def bin_means(wavelength_um: np.ndarray, flux: np.ndarray, edges_um: np.ndarray, binned: bool) -> np.ndarray:
    """Means over bins of a flux; the integral is kept.

    Parameters
    ----------
    wavelength_um : ndarray, shape (P,)
    flux : ndarray, shape (T, P)
    edges_um : ndarray, shape (L + 1,)
    binned : bool
        Whether the fluxes are means of neighbouring bins with these geometric centres; else they are values at points,
        and the flux is linear between them.

    Returns
    -------
    ndarray, shape (T, L)
        NaN in bins that the wavelengths do not span.
    """
    points = wavelength_um
    if binned:
        inner = np.sqrt(wavelength_um[1:] * wavelength_um[:-1])
        points = np.concatenate(
            [[wavelength_um[0] ** 2 / inner[0]], inner, [wavelength_um[-1] ** 2 / inner[-1]]]
        )
        pieces = flux * np.diff(points)
    spanned = (edges_um > points[0] * (1 - ROUNDING)) & (edges_um < points[-1] * (1 + ROUNDING))
    if not binned:
        points = np.union1d(wavelength_um, edges_um[spanned])
        values = np.array([np.interp(points, wavelength_um, row) for row in flux])
        pieces = (values[:, 1:] + values[:, :-1]) / 2 * np.diff(points)
    integral = np.concatenate([np.zeros((len(flux), 1)), np.cumsum(pieces, axis=1)], axis=1)
    at_edges = np.array([np.interp(edges_um, points, row) for row in integral])
    return np.where(spanned[1:] & spanned[:-1], np.diff(at_edges, axis=1) / np.diff(edges_um), np.nan)


def joined_in_wavelength(inner: np.ndarray, outer: np.ndarray, centre_um: np.ndarray) -> np.ndarray:
    """ln flux of one temperature: `inner` where it exists, `outer` scaled to meet it elsewhere, all shape (L,)."""
    out = np.where(np.isfinite(inner), inner, outer)
    known = np.flatnonzero(np.isfinite(inner))
    for end, outside in ((known[0], np.arange(known[0])), (known[-1], np.arange(known[-1] + 1, len(out)))):
        distance = np.abs(np.log(centre_um / centre_um[end]))
        window = known[distance[known] <= JOIN_WINDOW]
        step = (inner[window] - outer[window]).mean()
        out[outside] += step * np.maximum(1 - distance[outside] / WAVELENGTH_FADE, 0)
    return out


def continued_above(
    ln_below: np.ndarray, ln_same: np.ndarray, ln_above: np.ndarray, teff_k: np.ndarray
) -> np.ndarray:
    """Scale a grid above the temperature of a join to what is below it, less so the hotter.

    Parameters
    ----------
    ln_below, ln_same : ndarray, shape (L,)
        At the join: as adopted below it, and of the grid above it.
    ln_above : ndarray, shape (T, L)
    teff_k : ndarray, shape (T,)

    Returns
    -------
    ndarray, shape (T, L)
    """
    share = np.clip((FADED_OUT_K - teff_k) / (FADED_OUT_K - JOIN_K), 0, 1)
    return ln_above + share[:, None] * (ln_below - ln_same)


def build_grids(source: Path, log_g: float, edges_um: np.ndarray) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Both grids of one gravity.

    Parameters
    ----------
    source : Path
    log_g : float
    edges_um : ndarray, shape (L + 1,)

    Returns
    -------
    dict of str to tuple
        "main" and "other": temperatures (T,), ln flux (T, L) with NaN where there is no model.
    """
    centre_um = np.sqrt(edges_um[1:] * edges_um[:-1])
    binned = {}
    for name, pattern in FILES.items():
        wavelength_um, teff_k, flux = read_model(source / pattern.format(log_g))
        means = np.log(bin_means(wavelength_um, flux, edges_um, binned=name == "nextgen"))
        binned[name] = dict(zip(teff_k, means, strict=True))
    settl, nextgen, atlas = (binned[name] for name in FILES)
    nothing = np.full(len(centre_um), np.nan)
    cool = {t: joined_in_wavelength(settl[t], nextgen.get(t, nothing), centre_um) for t in settl}
    warm_k = np.array([t for t in nextgen if t > JOIN_K])
    warm = np.array([nextgen[t] for t in warm_k])
    warm = continued_above(cool[JOIN_K], nextgen[JOIN_K], warm, warm_k)
    last_k = warm_k[-1]
    atlas_there = _at(atlas, last_k)
    hot = atlas[HOTTEST_K] + (nextgen[last_k] - atlas_there)
    main_k = np.array([*cool, *warm_k, HOTTEST_K])
    main = np.vstack([*cool.values(), warm, hot])
    cool_k = np.array([t for t in nextgen if t <= JOIN_K])
    hot_k = np.array([t for t in atlas if t > JOIN_K])
    above = continued_above(nextgen[JOIN_K], atlas[JOIN_K], np.array([atlas[t] for t in hot_k]), hot_k)
    other = np.vstack([[nextgen[t] for t in cool_k], above])
    return {"main": (main_k, main), "other": (np.concatenate([cool_k, hot_k]), other)}


def _at(grid: dict[float, np.ndarray], teff_k: float) -> np.ndarray:
    """ln flux at a temperature between two of a grid, linear in 1/T."""
    below = max(t for t in grid if t <= teff_k)
    above = min(t for t in grid if t >= teff_k)
    share = 0.0 if above == below else (1 / below - 1 / teff_k) / (1 / below - 1 / above)
    return (1 - share) * grid[below] + share * grid[above]


@click.command()
@click.option(
    "--source",
    type=click.Path(path_type=Path, exists=True, file_okay=False),
    required=True,
    help="Folder with models/ as docs/stars.md lists them.",
)
@click.option("--out", type=click.Path(path_type=Path), required=True, help="The file to write (.npz).")
def main(source: Path, out: Path) -> None:
    """Compute the shipped spectra of stars from published grids."""
    n_bins = int(np.ceil(np.log(RANGE_UM[1] / RANGE_UM[0]) * BINS_PER_E_FOLD))
    edges_um = RANGE_UM[0] * np.exp(np.arange(n_bins + 1) / BINS_PER_E_FOLD)
    edges_um[-1] = RANGE_UM[1]
    header = {"format": "leadline-stars-1", "sources": SOURCES, "terms": TERMS, "log_g": LOG_G}
    arrays = {"header": np.array(json.dumps(header)), "edges_um": edges_um}
    for log_g in LOG_G:
        for name, (teff_k, ln_flux) in build_grids(source, log_g, edges_um).items():
            arrays[f"teff_k_{name}_{log_g}"] = teff_k
            arrays[f"ln_flux_{name}_{log_g}"] = ln_flux.astype(np.float32)
    np.savez_compressed(out, **arrays)
    click.echo(f"{out}: {n_bins} bins, {out.stat().st_size / 1e6:.2f} MB", err=True)


if __name__ == "__main__":
    main()
