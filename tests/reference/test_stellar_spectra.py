"""Shipped spectra of stars against published models' own numbers, black bodies, observed dwarfs, and the Sun.

Observed: SpeX Prism Library standards (dwarf_spectra.csv), IRTF Spectral Library ratios (dwarf_band_indices.csv), the
mean dwarf sequence of Pecaut & Mamajek 2013, ApJS 208, 9 (dwarf_sequence.csv); each file tells its source. Temperatures
of types are those of the sequence, +-50-100 K. Limits are what was found, rounded up: docs/stars.md has the tables.
"""

from functools import cache

import judge
import numpy as np
import pandas as pd
import pytest

from transit.star import StarSpectra, contamination, load_star_spectra
from transit.stellar_grid import StellarGrid, ln_planck, widened, with_planck

STEFAN_BOLTZMANN = 5.670374419e-8  # CODATA 2018
PARSEC_M = 3.0856775815e16
SOLAR_RADIUS_M = 6.957e8
AU_M = 1.495978707e11
ZERO_POINT = {"J": 3.129e-9, "H": 1.133e-9, "Ks": 4.283e-10}  # W m-2 um-1, Cohen et al. 2003, AJ 126, 1090
MAIN, OTHER = 0.0, 1.0

shipped = cache(load_star_spectra)


@cache
def excerpt(name):
    """Rows of an excerpt in tests/reference/data."""
    return pd.read_csv(judge.DATA / name, comment="#")


@cache
def teff_of_type():
    """Mean temperature of a spectral type, K."""
    rows = excerpt("dwarf_sequence.csv")
    return dict(zip(rows["sptype"], rows["teff_k"].astype(float), strict=True))


def photon_flux(teff_k, windows_um, mix, log_g=5.0):
    """Photon-weighted flux of the shipped spectra in windows (low, high)."""
    low, high = np.array(windows_um).T
    star = shipped(log_g).in_bins((low + high) / 2, (high - low) / 2, teff_k, teff_k, teff_k)
    return star.photon_flux(np.array([teff_k]), np.array([mix]))[0]


def observed_photon_flux(sptype, windows_um):
    """The same of an observed dwarf; bins of resolving power 100 are taken whole by their centres."""
    rows = excerpt("dwarf_spectra.csv")
    wavelength_um, flux = rows["wavelength_um"].to_numpy(), rows[f"flux_{sptype}"].to_numpy()
    out = []
    for low, high in windows_um:
        inside = (wavelength_um > low) & (wavelength_um < high)
        out.append(np.average(flux[inside], weights=wavelength_um[inside] ** 2))
    return np.array(out)


def spotted(photosphere, spot, fraction=0.1):
    """Contamination by spots alone."""
    none = np.zeros(1)
    return contamination(np.array([fraction]), none, photosphere[None], spot[None], photosphere[None])[0]


# --- numbers of the published models and of black bodies --------------------------------------------------------


@pytest.mark.parametrize(
    ("mix", "expected"), [(MAIN, (1.0370, 1.0498)), (OTHER, (1.0375, 1.0631))], ids=["BT-Settl08", "NextGen"]
)
def test_spot_on_an_m_dwarf(mix, expected):
    """3300 K, spots 2800 K, 10 % of the disc, at 1.27-1.31 and 1.40-1.44 um: the published models integrated directly.

    Their fluxes were averaged over wavelength without a photon weight; that and the joining leave less than 2e-4.
    """
    windows = [(1.27, 1.31), (1.40, 1.44)]
    factor = spotted(photon_flux(3300.0, windows, mix), photon_flux(2800.0, windows, mix))
    assert factor == pytest.approx(expected, abs=2e-4)


@pytest.mark.parametrize(
    ("photosphere_k", "spot", "facula", "expected"),
    [
        (3000.0, (2700.0, 0.08), (3000.0, 0.0), {0.7: 1.04456, 1.4: 1.02659, 4.5: 1.01304}),
        (5500.0, (4000.0, 0.02), (5500.0, 0.0), {0.7: 1.01540, 1.4: 1.01103, 4.5: 1.00717}),
        (2511.0, (2064.0, 0.08), (2612.0, 0.54), {1.4: 0.9550, 4.5: 0.9861}),
    ],
    ids=["M dwarf", "G dwarf", "spots and faculae"],
)
def test_contamination_of_black_bodies(photosphere_k, spot, facula, expected):
    """epsilon of Rackham, Apai & Giampapa 2018 (ApJ 853, 122) with Planck's law, evaluated by hand (CODATA)."""
    teff_k = np.unique([photosphere_k, spot[0], facula[0]])
    edges_um = np.geomspace(0.6, 5.0, 3001)
    centre_um = np.sqrt(edges_um[1:] * edges_um[:-1])
    grid = StellarGrid("planck", edges_um, teff_k, ln_planck(centre_um, teff_k[:, None]))
    wavelength_um = np.array(list(expected))
    star = StarSpectra((grid,), "black bodies", "planck.csv").in_bins(
        wavelength_um, np.full(len(wavelength_um), 2e-3), photosphere_k, teff_k[0], teff_k[-1]
    )
    flux = [star.photon_flux(np.array([t])) for t in (photosphere_k, spot[0], facula[0])]
    factor = contamination(np.array([spot[1]]), np.array([facula[1]]), *flux)[0]
    assert factor == pytest.approx(list(expected.values()), abs=6e-5)


@pytest.mark.parametrize("log_g", [4.5, 5.0])
@pytest.mark.parametrize(("grid", "worst"), [(0, 0.04), (1, 0.02)], ids=["main", "other"])
def test_energy(log_g, grid, worst):
    """Integral of the flux against sigma T^4 from 2300 to 7000 K; 4 % is what joining BT-Settl08 to NextGen leaves."""
    whole = with_planck(widened(shipped(log_g).grids[grid], 0.2, 40.0, 2300.0, 7000.0))
    modelled = whole.teff_k >= 2300.0
    integral = np.exp(whole.ln_flux[modelled]) @ np.diff(whole.edges_um)
    assert integral == pytest.approx(STEFAN_BOLTZMANN * whole.teff_k[modelled] ** 4, rel=worst)


# --- joins ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("log_g", [4.5, 5.0])
@pytest.mark.parametrize(("photosphere_k", "spot_k"), [(2900, 2400), (3300, 2800), (3500, 3000)])
def test_no_step_in_a_ratio_where_models_join(log_g, photosphere_k, spot_k):
    """The step of ln(F_phot/F_spot) across 0.645 and 2.555 um is no larger than steps of the models themselves nearby.

    Joined without scaling it would be 0.2-0.3 at 0.645 um.
    """
    grid = shipped(log_g).grids[0]
    row = {int(t): r for t, r in zip(grid.teff_k, grid.ln_flux, strict=True)}
    steps = np.diff(row[photosphere_k] - row[spot_k])
    covered = np.flatnonzero(np.isfinite(row[1500]))  # only BT-Settl08 has stars so cool
    for join in (covered[0] - 1, covered[-1]):
        near = np.abs(np.delete(steps[join - 10 : join + 11], 10))
        assert abs(steps[join]) <= near.max()


@pytest.mark.parametrize("log_g", [4.5, 5.0])
@pytest.mark.parametrize("grid", [0, 1], ids=["main", "other"])
def test_no_step_in_temperature_where_models_join(log_g, grid):
    """d ln F / d ln T (rms over 0.7-2.5 um) changes no more across the join at 3500 K than within the models.

    Joined without scaling it would change by 3 (main) and 1 (other), against 0.3-0.8 elsewhere.
    """
    g = shipped(log_g).grids[grid]
    inside = (g.centre_um > 0.7) & (g.centre_um < 2.5)
    slope = np.diff(g.ln_flux[:, inside], axis=0) / np.diff(np.log(g.teff_k))[:, None]
    change = np.sqrt((np.diff(slope, axis=0) ** 2).mean(axis=1))
    node_k = g.teff_k[1:-1]
    join = int(np.flatnonzero(node_k == 3500.0)[0])
    elsewhere = (node_k > 2600.0) & (node_k <= 4500.0)
    elsewhere[[join, join + 1]] = False
    assert change[[join, join + 1]].max() <= change[elsewhere].max()


@pytest.mark.parametrize("grid", [0, 1], ids=["main", "other"])
@pytest.mark.parametrize(
    ("teff_k", "worst"), [(2800.0, 0.02), (3000.0, 0.01), (3400.0, 0.01), (5000.0, 0.01), (6000.0, 0.01)]
)
def test_held_out_temperature(grid, teff_k, worst):
    """ln F of a node from its neighbours, which are twice as far apart as nodes in use: rms over 0.5-10 um.

    Interpolation between nodes is about four times better than this.
    """
    g = shipped(5.0).grids[grid]
    inside = g.centre_um > 0.5
    i = int(np.flatnonzero(g.teff_k == teff_k)[0])
    below, above = g.teff_k[i - 1], g.teff_k[i + 1]
    share = (1 / below - 1 / teff_k) / (1 / below - 1 / above)
    guess = (1 - share) * g.ln_flux[i - 1] + share * g.ln_flux[i + 1]
    difference = (guess - g.ln_flux[i])[inside]
    assert np.sqrt(np.nanmean(difference**2)) < worst


# --- observed dwarfs --------------------------------------------------------------------------------------------

WATER = [(1.40, 1.44), (1.27, 1.31)]
TIO = [(0.70, 0.72), (0.735, 0.755)]


@pytest.mark.parametrize(
    ("sptype", "main", "other"),
    [
        ("M2", 0.03, 0.10),
        ("M3", 0.04, 0.12),
        ("M4", 0.06, 0.20),
        ("M5", 0.03, 0.22),
        ("M6", 0.10, 0.37),
        ("M7", 0.06, 0.40),
        ("M8", 0.18, 0.52),
    ],
)
def test_water_band_of_m_dwarfs(sptype, main, other):
    """F(1.40-1.44)/F(1.27-1.31 um) of SpeX prism standards: relative error of each grid within its stated limit.

    The other grid is always the deeper one: the pair brackets how wrong band depths can be on that side only.
    """
    band, continuum = observed_photon_flux(sptype, WATER)
    found = {}
    for mix in (MAIN, OTHER):
        flux = photon_flux(teff_of_type()[sptype], WATER, mix)
        found[mix] = flux[0] / flux[1] / (band / continuum) - 1
    assert abs(found[MAIN]) < main
    assert abs(found[OTHER]) < other
    assert found[OTHER] < found[MAIN]


@pytest.mark.parametrize(
    ("sptype", "worst"), [("M0", 0.12), ("M2", 0.05), ("M3", 0.05), ("M4", 0.08), ("M5", 0.12), ("M6", 0.20)]
)
def test_titanium_oxide_of_m_dwarfs(sptype, worst):
    """F(0.70-0.72)/F(0.735-0.755 um) of SpeX prism standards; from M7 on the models' TiO is too weak (not tested)."""
    band, beside = observed_photon_flux(sptype, TIO)
    flux = photon_flux(teff_of_type()[sptype], TIO, MAIN)
    assert flux[0] / flux[1] == pytest.approx(band / beside, rel=worst)


@pytest.mark.parametrize("sptype", ["M0", "M2", "M3", "M4", "M5", "M6", "M7"])
def test_red_colours_of_m_dwarfs(sptype):
    """F(0.80-0.83)/F(1.27-1.31 um) falls from 1.6 to 0.6 along the sequence; SpeX prism standards, 10 %."""
    windows = [(0.80, 0.83), (1.27, 1.31)]
    red, infrared = observed_photon_flux(sptype, windows)
    flux = photon_flux(teff_of_type()[sptype], windows, MAIN)
    assert flux[0] / flux[1] == pytest.approx(red / infrared, rel=0.10)


@pytest.mark.parametrize(
    ("index", "top", "bottom", "worst"),
    [("r146", (1.455, 1.475), (1.58, 1.60), 0.12), ("r2015", (2.00, 2.03), (2.16, 2.19), 0.10)],
)
def test_band_ratios_of_the_irtf_library(index, top, bottom, worst):
    """Shoulders of the 1.4 and 1.9 um bands in M0-M8 dwarfs of the IRTF Spectral Library; main grid."""
    for _, row in excerpt("dwarf_band_indices.csv").iterrows():
        if row["sptype"] == "M9":
            continue
        flux = photon_flux(float(row["teff_k"]), [top, bottom], MAIN) / np.array([sum(top), sum(bottom)])
        assert flux[0] / flux[1] == pytest.approx(row[index] * sum(bottom) / sum(top), rel=worst)


@pytest.mark.parametrize(
    ("photosphere", "spot", "worst"),
    [
        ("M2", "M5", 0.2),
        ("M3", "M5", 0.2),
        ("M3", "M6", 0.4),
        ("M4", "M6", 0.3),
        ("M0", "M3", 0.5),
        ("M5", "M7", 0.4),
    ],
)
def test_false_water_of_observed_pairs(photosphere, spot, worst):
    """Rise of epsilon from 1.27-1.31 to 1.40-1.44 um if one observed dwarf were spotted (10 %) by another.

    This is what a planet's water is mistaken for. Main grid within `worst` of observation; the other overstates it.
    """
    windows = WATER
    band, continuum = spotted(*(observed_photon_flux(t, windows) for t in (photosphere, spot)))
    observed = band - continuum
    rises = []
    for mix in (MAIN, OTHER):
        band, continuum = spotted(
            *(photon_flux(teff_of_type()[t], windows, mix) for t in (photosphere, spot))
        )
        rises.append(band - continuum)
    assert rises[0] == pytest.approx(observed, rel=worst)
    assert rises[1] > observed


@cache
def magnitudes(sptype, grid):
    """Absolute 2MASS magnitudes of the shipped spectra at the mean temperature and radius of a type."""
    rows = excerpt("dwarf_sequence.csv").set_index("sptype")
    teff_k, radius = float(rows.loc[sptype, "teff_k"]), float(rows.loc[sptype, "radius_rsun"])
    g = shipped(5.0 if teff_k < 4000 else 4.5).grids[grid]
    responses = excerpt("dwarf_2mass_responses.csv")
    i = int(np.searchsorted(g.teff_k, teff_k)) - 1
    share = (1 / g.teff_k[i] - 1 / teff_k) / (1 / g.teff_k[i] - 1 / g.teff_k[i + 1])
    flux = np.exp((1 - share) * g.ln_flux[i] + share * g.ln_flux[i + 1])
    dilution = (radius * SOLAR_RADIUS_M / (10 * PARSEC_M)) ** 2
    out = {}
    for band, zero_point in ZERO_POINT.items():
        wavelength_um, response = (
            responses[responses["band"] == band][["wavelength_um", "response"]].to_numpy().T
        )
        there = np.interp(wavelength_um, g.centre_um, flux)
        mean = np.trapezoid(there * response, wavelength_um) / np.trapezoid(response, wavelength_um)
        out[band] = -2.5 * np.log10(mean * dilution / zero_point)
    return out


@pytest.mark.parametrize(
    ("sptypes", "j", "j_ks"),
    [
        (("F5", "G2", "G8", "K2", "K5", "K7"), 0.06, 0.08),
        (("M0", "M1", "M2", "M3", "M4", "M5", "M6"), 0.06, 0.09),
        (("M7", "M8"), 0.20, 0.25),
    ],
    ids=["F5-K7", "M0-M6", "M7-M8"],
)
def test_magnitudes_of_the_dwarf_sequence(sptypes, j, j_ks):
    """Absolute J and J-Ks of the main grid against the mean dwarf sequence of Pecaut & Mamajek 2013, magnitudes."""
    rows = excerpt("dwarf_sequence.csv").set_index("sptype")
    for sptype in sptypes:
        found = magnitudes(sptype, 0)
        row = rows.loc[sptype]
        assert found["J"] == pytest.approx(row["m_j"], abs=j)
        assert found["J"] - found["Ks"] == pytest.approx(row["j_h"] + row["h_ks"], abs=j_ks)


@pytest.mark.parametrize("mix", [MAIN, OTHER], ids=["main", "other"])
def test_sun(mix):
    """Band means at 1 au, W m-2 um-1: ASTM E490-00a; models at 5772 K and the Sun's radius, 3.5 %."""
    bands = {
        (0.5, 0.6): 1848.87, (0.6, 0.7): 1589.99, (0.8, 0.9): 1015.28, (1.15, 1.35): 459.85,
        (1.5, 1.8): 228.84, (2.0, 2.4): 83.51, (3.2, 3.8): 14.83, (4.5, 5.5): 3.65,
    }  # fmt: skip
    dilution = (SOLAR_RADIUS_M / AU_M) ** 2
    low, high = np.array(list(bands)).T
    star = shipped(4.5).in_bins((low + high) / 2, (high - low) / 2, 5772.0, 5772.0, 5772.0)
    # A photon-weighted mean is a little redder than the plain one: below 0.1 % in these bands.
    flux = star.photon_flux(np.array([5772.0]), np.array([mix]))[0] * dilution
    assert flux == pytest.approx(list(bands.values()), rel=0.035)
