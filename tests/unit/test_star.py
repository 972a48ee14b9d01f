"""Spectra of the star: reading the user's, averaging over bins, interpolation, Planck curves, contamination."""

from __future__ import annotations

import gzip
import pickle

import numpy as np
import pytest
from astropy import units as u
from astropy.modeling.physical_models import BlackBody
from astropy.table import Table
from scipy.integrate import quad

from transit.errors import InputFileError, SettingError
from transit.star import StarInBins, StarSpectra, contamination, load_star_spectra, read_star_spectra
from transit.stellar_builder import FILES, bin_means, build_grids
from transit.stellar_grid import StellarGrid, ln_planck, photon_flux_in_bins, widened, with_planck

WAVELENGTH_UM = np.array([1.0, 1.5, 2.0])
FLUX = {3000: (3.0, 2.0, 1.0), 3300: (6.0, 4.0, 2.5), 3600: (9.0, 7.0, 4.0)}
WIDE = "wavelength_um,flux_3000k,flux_3300k,flux_3600k\n1.0,3,6,9\n1.5,2,4,7\n2.0,1,2.5,4\n"
LONG = "wavelength_um,teff_k,flux\n" + "".join(
    f"{w},{t},{f}\n" for t, row in FLUX.items() for w, f in zip(WAVELENGTH_UM, row, strict=True)
)


@pytest.fixture
def read(tmp_path):
    """Write a text to a file and read it as spectra of a star."""

    def write_and_read(text, name="star.csv"):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return read_star_spectra(path)

    return write_and_read


@pytest.fixture
def refused(read):
    """Read a text that must be refused, and return the message without the directory."""

    def message(text, name="star.csv"):
        with pytest.raises(InputFileError) as caught:
            read(text, name)
        return str(caught.value)[str(caught.value).index(name) :]

    return message


def planck_spectra(teff_k, low_um=0.5, high_um=6.0, path="planck.csv"):
    """Spectra of black bodies as a user's file would give them."""
    edges_um = np.geomspace(low_um, high_um, 4001)
    centre_um = np.sqrt(edges_um[1:] * edges_um[:-1])
    grid = StellarGrid("planck", edges_um, np.asarray(teff_k), ln_planck(centre_um, np.c_[teff_k]))
    return StarSpectra((grid,), "black bodies", path)


def black_body(wavelength_um, temperature_k):
    """Planck's law as a general reference library has it (astropy), W m-2 um-1 sr-1."""
    law = BlackBody(temperature_k * u.K, scale=1 * u.Unit("W m-2 um-1 sr-1"))
    return law(wavelength_um * u.um).value


# --- Planck and contamination -------------------------------------------------------------------------------


@pytest.mark.parametrize("temperature_k", [1500.0, 3000.0, 6000.0])
def test_ln_planck_against_a_reference_library(temperature_k):
    """Ratios of wavelengths and of temperatures: astropy's BlackBody."""
    wavelength_um = np.array([0.3, 1.0, 4.5, 12.0])
    ours = ln_planck(wavelength_um, temperature_k) - ln_planck(1.4, 3300.0)
    theirs = np.log(black_body(wavelength_um, temperature_k) / black_body(1.4, 3300.0))
    assert ours == pytest.approx(theirs, abs=1e-5)


def test_contamination_by_hand():
    """f_s = 0.2, F_s/F_p = 0.5: 1/0.9; with f_f = 0.1, F_f/F_p = 1.5 besides: 1/0.95 (arithmetic)."""
    one, half = np.ones((1, 1)), np.full((1, 1), 0.5)
    share, none = np.array([0.2]), np.zeros(1)
    assert contamination(share, none, one, half, one) == pytest.approx(1 / 0.9)
    assert contamination(share, np.array([0.1]), one, half, 1.5 * one) == pytest.approx(1 / 0.95)


def test_contamination_is_one_without_contrast():
    """A spot as bright as the photosphere changes nothing, however large (definition)."""
    flux = np.full((2, 3), 7.0)
    assert np.all(contamination(np.array([0.1, 0.5]), np.array([0.2, 0.4]), flux, flux, flux) == 1.0)


# --- bins and temperatures ----------------------------------------------------------------------------------


def test_bins_are_weighted_by_photons():
    """integral(lambda F)/integral(lambda) of a black body: adaptive quadrature (scipy) of astropy's law."""
    spectra = planck_spectra([2900.0, 3100.0])
    star = spectra.in_bins(np.array([1.0, 2.2]), np.array([0.2, 0.05]), 3000.0, 2900.0, 3100.0)
    expected = []
    for low, high in ((0.8, 1.2), (2.15, 2.25)):
        expected.append(quad(lambda w: w * black_body(w, 2900.0), low, high)[0] / ((high**2 - low**2) / 2))
    found = star.photon_flux(np.array([2900.0]))[0]
    assert found[0] / found[1] == pytest.approx(expected[0] / expected[1], rel=1e-5)


def test_neighbouring_bins_keep_every_photon():
    """Photons of two halves of a bin add up to those of the whole, also inside one bin of the grid (definition)."""
    grid = StellarGrid("g", np.array([1.0, 1.1, 1.2, 1.3]), np.array([3000.0]), np.log([[1.0, 3.0, 2.0]]))
    halves = photon_flux_in_bins(grid, np.array([1.1125, 1.1375]), np.array([0.0125, 0.0125]))[0]
    whole = photon_flux_in_bins(grid, np.array([1.125]), np.array([0.025]))[0]
    weight = np.array([1.125**2 - 1.1**2, 1.15**2 - 1.125**2])
    assert (halves * weight).sum() / weight.sum() == pytest.approx(whole[0])
    full = photon_flux_in_bins(grid, np.array([1.15]), np.array([0.05]))[0]
    assert full[0] == pytest.approx(3.0)


def test_interpolation_in_temperature_of_black_bodies():
    """Held-out temperature 3050 K between 3000 and 3100 K against astropy's law: Wien's law is linear in 1/T."""
    wavelength_um, half = np.array([0.8, 1.4, 4.5]), np.full(3, 1e-3)
    star = planck_spectra([3000.0, 3100.0]).in_bins(wavelength_um, half, 3050.0, 3000.0, 3100.0)
    found = star.photon_flux(np.array([3050.0, 3000.0]))
    expected = black_body(wavelength_um, 3050.0) / black_body(wavelength_um, 3000.0)
    assert found[0] / found[1] == pytest.approx(expected, rel=2e-4)


def test_nodes_are_met_exactly_and_grids_blend_in_ln_flux():
    """Flux at a node is the node's; halfway between two grids it is their geometric mean (definitions)."""
    ln_photons = np.log([[1.0, 2.0], [4.0, 5.0], [9.0, 8.0]])
    star = StarInBins(3000.0, np.array([2500.0, 3000.0, 3500.0]), ln_photons, np.log(np.full((3, 2), 4.0)))
    assert star.n_grids == 2
    at_nodes = star.photon_flux(np.array([2500.0, 3000.0, 3500.0]))
    assert at_nodes == pytest.approx(np.exp(ln_photons))
    mixed = star.photon_flux(np.array([3000.0, 3000.0, 3000.0]), np.array([0.0, 0.5, 1.0]))
    assert mixed[:, 0] == pytest.approx([4.0, 8.0, 16.0])


def test_star_in_bins_travels_to_other_processes():
    """Pickled it is small, and gives the same fluxes and key."""
    bins = np.linspace(0.7, 5.0, 100), np.full(100, 0.02)
    star = load_star_spectra(5.0).in_bins(*bins, 3300.0, 1800.0, 3600.0)
    stored = pickle.dumps(star)
    again = pickle.loads(stored)
    temperature_k, mix = np.linspace(1800.0, 3600.0, 32), np.linspace(0, 1, 32)
    assert len(stored) < 100_000
    assert again.key == star.key
    assert np.array_equal(again.photon_flux(temperature_k, mix), star.photon_flux(temperature_k, mix))
    other = load_star_spectra(5.0).in_bins(*bins, 3310.0, 1800.0, 3600.0)
    assert other.key != star.key


def test_equal_temperatures_are_served():
    """Without any contrast allowed all three surfaces have one flux."""
    star = planck_spectra([3000.0, 3100.0]).in_bins(np.array([1.4]), np.array([0.1]), 3100.0, 3100.0, 3100.0)
    assert np.all(np.isfinite(star.photon_flux(np.array([3100.0]))))


@pytest.mark.parametrize(
    "temperatures", [(3000.0, 3100.0, 3200.0), (3000.0, -5.0, 3200.0), (3000.0, 2900.0, 2950.0)]
)
def test_temperatures_out_of_order_are_refused(temperatures):
    """Spots cooler, faculae hotter than the photosphere, all positive."""
    with pytest.raises(SettingError, match="increasing order"):
        load_star_spectra().in_bins(np.array([1.4]), np.array([0.1]), *temperatures)


# --- shipped spectra ----------------------------------------------------------------------------------------


def test_gravity_chooses_the_nearest_table():
    """4.5 for the Sun (log g 4.44), 5.0 for an M dwarf and by default; a giant is refused."""
    assert "log g 4.5" in load_star_spectra(4.44).source
    assert "log g 5" in load_star_spectra(5.1).source
    assert load_star_spectra().source == load_star_spectra(5.0).source
    with pytest.raises(SettingError, match="dwarfs"):
        load_star_spectra(2.0)
    with pytest.raises(SettingError, match="dwarfs"):
        load_star_spectra(float("nan"))


def test_planck_is_reported_where_no_model_stands():
    """Below 2300 K beyond 2.56 um, and beyond 10 um; nowhere for a warm star in the near infrared (docs/stars.md)."""
    spectra = load_star_spectra()
    near, far, half = np.linspace(1.1, 1.7, 7), np.array([3.0, 10.5]), 0.04
    cool = spectra.in_bins(near, np.full(7, half), 3000.0, 2300.0, 3200.0)
    assert cool.planck_bins == 0
    assert not any("Planck" in note for note in cool.notes)
    cool = spectra.in_bins(far, np.full(2, half), 3000.0, 1800.0, 3200.0)
    assert cool.planck_bins == 2
    assert any("main grid below 2300 K and outside 0.3-10 um in 2 of 2" in note for note in cool.notes)
    assert any("Planck has no molecular bands" in note for note in cool.notes)
    warm = spectra.in_bins(far, np.full(2, half), 5000.0, 4000.0, 5200.0)
    assert warm.planck_bins == 1


def test_grid_spread_is_that_of_the_contamination():
    """Recomputed from the fluxes: 20 % cooler spots, 10 % of the disc, peak to peak, per cent."""
    wavelength_um = np.linspace(1.1, 1.7, 15)
    star = load_star_spectra().in_bins(wavelength_um, np.full(15, 0.02), 3300.0, 1800.0, 3600.0)
    factor = []
    for mix in (np.zeros(1), np.ones(1)):
        photosphere, spot = (star.photon_flux(np.array([t]), mix) for t in (3300.0, 2640.0))
        factor.append(1 / (1 - 0.1 * (1 - spot / photosphere)))
    assert star.grid_spread_percent == pytest.approx(100 * np.ptp(factor[1] - factor[0]))
    assert any("two grids" in note for note in star.notes)


def test_planck_joins_the_models_without_a_step():
    """A grid that misses cool stars beyond 2 um: the filled flux meets the known one and has no band of its own."""
    edges_um = np.geomspace(1.0, 4.0, 101)
    centre_um = (edges_um[1:] + edges_um[:-1]) / 2
    teff_k = np.array([2000.0, 2300.0, 2600.0])
    truth = ln_planck(centre_um, teff_k[:, None]) + 0.1
    truth[0] -= 0.4  # a cool model fainter than its black body
    ln_flux = np.where((centre_um > 2.0) & (teff_k[:, None] < 2300.0), np.nan, truth)
    filled = with_planck(StellarGrid("g", edges_um, teff_k, ln_flux)).ln_flux
    assert filled == pytest.approx(truth, abs=1e-9)


def test_planck_continues_beyond_wavelengths_and_temperatures():
    """Black bodies continued by their own law stay black bodies: astropy's BlackBody."""
    spectra = planck_spectra([2900.0, 3100.0], 1.0, 2.0).grids[0]
    grid = with_planck(widened(spectra, 0.5, 8.0, 2500.0, 3600.0))
    assert grid.teff_k[0] == 2500.0
    assert grid.teff_k[-1] == 3600.0
    assert grid.edges_um[0] <= 0.5
    assert grid.edges_um[-1] >= 8.0
    expected = np.log([black_body(grid.centre_um, t) for t in grid.teff_k])
    assert np.ptp(grid.ln_flux - expected) < 1e-3


# --- building the shipped spectra ---------------------------------------------------------------------------


def test_bin_means_keep_the_integral():
    """Of a straight line, given at points and as means of bins: its value at the middle of a bin (arithmetic)."""
    edges_um = np.array([0.9, 1.0, 1.07, 1.31, 2.5])
    points_um = np.linspace(0.95, 2.0, 38)
    means = bin_means(points_um, np.array([3 * points_um - 1]), edges_um, binned=False)[0]
    assert means[1:3] == pytest.approx(3 * (edges_um[1:3] + edges_um[2:4]) / 2 - 1)
    assert np.isnan(means[[0, 3]]).all()
    fine_um = np.exp(np.arange(-106, 701) * 1e-3)
    centre_um, inner = np.sqrt(fine_um[1:] * fine_um[:-1]), (fine_um[1:] + fine_um[:-1]) / 2
    means = bin_means(centre_um, np.array([3 * inner - 1]), edges_um, binned=True)[0]
    # A step of the source that straddles an edge is split evenly: at most slope x step^2 / 8 of 0.07 um, twice.
    assert means[:3] == pytest.approx(
        3 * (edges_um[:3] + edges_um[1:4]) / 2 - 1, abs=2 * 3 * 1.07e-3**2 / 8 / 0.07
    )


def write_black_bodies(path, wavelength_um, teff_k, offset=0.0):
    """A source file in the layout of the published grids, of black bodies times exp(offset)."""
    path.parent.mkdir(exist_ok=True)
    lines = ["# black bodies", "wave_um," + ",".join(f"T{t:.0f}" for t in teff_k)]
    for w in wavelength_um:
        row = np.exp(ln_planck(w, np.asarray(teff_k)) + offset)
        lines.append(f"{w:.8g}," + ",".join(f"{value:.8e}" for value in row))
    path.write_bytes(gzip.compress("\n".join(lines).encode()))


@pytest.mark.parametrize("offset", [0.0, 0.3])
def test_grids_are_joined_without_a_step(tmp_path, offset):
    """Three invented sources: black bodies (ln_planck, checked above), the first of them brighter by a constant.

    Then fluxes are a black body plus that constant inside the first source, and fade smoothly to none beyond.
    """
    fine_um = np.geomspace(0.3, 10.0, 3508)
    fine_um = np.sqrt(fine_um[1:] * fine_um[:-1])
    nextgen_k = [2300.0, 3500.0, 4000.0, 4600.0, 6800.0]
    write_black_bodies(
        tmp_path / FILES["btsettl"].format(5.0), np.geomspace(0.645, 2.555, 564), [2000, 2300, 3500], offset
    )
    write_black_bodies(tmp_path / FILES["nextgen"].format(5.0), fine_um, nextgen_k)
    write_black_bodies(
        tmp_path / FILES["atlas9"].format(5.0), np.geomspace(0.2, 10.1, 1500), [3500, 4000, 6750, 7000]
    )
    edges_um = np.geomspace(0.3, 10.0, 702)
    centre_um = np.sqrt(edges_um[1:] * edges_um[:-1])
    grids = build_grids(tmp_path, 5.0, edges_um)
    teff_k, ln_flux = grids["main"]
    assert list(teff_k) == [2000.0, 2300.0, 3500.0, 4000.0, 4600.0, 6800.0, 7000.0]
    excess = ln_flux - ln_planck(centre_um, teff_k[:, None])
    inside = (centre_um > 0.66) & (centre_um < 2.5)
    assert excess[1, inside] == pytest.approx(offset, abs=2e-3)
    assert excess[3, inside] == pytest.approx(offset / 2, abs=2e-3)  # half faded out at 4000 K
    assert excess[4:] == pytest.approx(0.0, abs=2e-3)
    far = (centre_um < 0.5) | (centre_um > 3.3)
    assert excess[1, far] == pytest.approx(0.0, abs=2e-3)
    assert np.abs(np.diff(excess[1])).max() < offset * 0.03 + 2e-3
    assert np.isnan(excess[0, far]).all()
    assert np.isfinite(excess[0, inside]).all()
    other_k, other = grids["other"]
    assert list(other_k) == [2300.0, 3500.0, 4000.0, 6750.0, 7000.0]
    assert other - ln_planck(centre_um, other_k[:, None]) == pytest.approx(0.0, abs=2e-3)


# --- the user's spectra -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "text",
    [
        WIDE,
        LONG,
        WIDE.replace("flux_3000k,flux_3300k,flux_3600k", "3000K,3300K,3600K"),
        WIDE.replace("flux_3000k,flux_3300k,flux_3600k", "3000,3300,3600"),
        WIDE.replace("flux_3000k,flux_3300k,flux_3600k", "T3000,T3300,T3600"),
        WIDE.replace("_um", "_nm")
        .replace("1.0,3", "1000,3")
        .replace("1.5,2", "1500,2")
        .replace("2.0,1", "2000,1"),
        WIDE.replace("_um", "_angstrom")
        .replace("1.0,3", "1e4,3")
        .replace("1.5,2", "1.5e4,2")
        .replace("2.0,1", "2e4,1"),
        "# my star\n" + WIDE.replace(",", " "),
        gzip.compress(WIDE.encode()),
        gzip.compress(WIDE.replace("flux_3000k,flux_3300k,flux_3600k", "3000,3300,3600").encode()),
        "wavelength_um,3600,3000,3300\n1.0,9,3,6\n1.5,7,2,4\n2.0,4,1,2.5\n",
    ],
)
def test_layouts_are_read_alike(read, text):
    """Every layout gives the same grid: photon means between the wavelengths, by hand."""
    spectra = read(text)
    grid = spectra.grids[0]
    assert grid.teff_k == pytest.approx([3000, 3300, 3600])
    assert grid.edges_um == pytest.approx(WAVELENGTH_UM)
    # (1.0 x 3 + 1.5 x 2) / 2.5 and (1.5 x 2 + 2 x 1) / 3.5
    assert np.exp(grid.ln_flux[0]) == pytest.approx([6 / 2.5, 5 / 3.5])
    assert "star.csv (3 temperatures, 3000-3600 K" in spectra.source


@pytest.mark.parametrize(
    ("name", "options"), [("star.fits", {}), ("star.ecsv", {}), ("star.vot", {"format": "votable"})]
)
def test_other_formats_are_read(tmp_path, name, options):
    """FITS, ECSV and VOTable, written by astropy, with the unit of the wavelength in the header."""
    table = Table(
        {"wavelength": WAVELENGTH_UM * 1e3 * u.nm, **{f"flux_{t}k": row for t, row in FLUX.items()}}
    )
    table.write(tmp_path / name, **options)
    grid = read_star_spectra(tmp_path / name).grids[0]
    assert grid.edges_um == pytest.approx(WAVELENGTH_UM)
    assert np.exp(grid.ln_flux[2, 1]) == pytest.approx((1.5 * 7 + 2 * 4) / 3.5)


def test_written_spectra_give_their_own_contamination(tmp_path):
    """The shipped main grid, written out as a user would and read back, contaminates as it did (round trip)."""
    shipped = load_star_spectra(5.0)
    grid = shipped.grids[0]
    bins = np.array([1.29, 1.42]), np.array([0.02, 0.02])
    inside = (grid.centre_um > 1.0) & (grid.centre_um < 2.0)
    table = Table({"wavelength_um": grid.centre_um[inside]})
    for row, teff_k in enumerate(grid.teff_k):
        if 2700 <= teff_k <= 3400:
            table[f"flux_{teff_k:.0f}k"] = np.exp(grid.ln_flux[row, inside])
    table.write(tmp_path / "mine.csv")
    factors = []
    for spectra in (shipped, read_star_spectra(tmp_path / "mine.csv")):
        star = spectra.in_bins(*bins, 3300.0, 2800.0, 3400.0)
        photosphere, spot = (star.photon_flux(np.array([t])) for t in (3300.0, 2800.0))
        factors.append(contamination(np.array([0.1]), np.zeros(1), photosphere, spot, photosphere)[0])
    # Bins of the table are read back as points: a difference of the order of their width squared.
    assert factors[1] == pytest.approx(factors[0], abs=2e-4)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (WIDE.replace("1.5,2,4,7", "1.5,2,-4,7"), ("line 3", "'flux_3300k'", "-4", "positive number")),
        (WIDE.replace("1.5,2,4,7", "1.5,2,0,7"), ("line 3", "positive number", "cut the table")),
        (WIDE.replace("1.5,2,4,7", "1.5,2,,7"), ("line 3", "positive number")),
        (WIDE.replace("1.5,2,4,7", "1.5,2,nan,7"), ("line 3", "positive number")),
        (WIDE.replace("1.5,2,4,7", "1.5,2,inf,7"), ("line 3", "inf")),
        (WIDE.replace("1.5,2,4,7", "1.5,2,four,7"), ("line 3", "four")),
        (WIDE.replace("1.5,2", "-1.5,2"), ("line 3", "wavelength", "positive")),
        (WIDE.replace("1.5,2", "1.0,2"), ("line 3", "occurs twice", "remove duplicates")),
        (WIDE.replace("1.5,2", "0.5,2"), ("line 3", "follows 1 um", "Sort")),
        (WIDE.replace("wavelength_um", "wavelength"), ("unit", "not stated", "wavelength_um")),
        (WIDE.replace("wavelength_um", "wavelength_ppm"), ("wavelength", "wavelength_um")),
        (WIDE.replace("wavelength_um", "colour"), ("No column", "'colour'", "wavelength_um")),
        (WIDE.replace("flux_3600k", "notes"), ("'notes'", "named by its kelvin")),
        (WIDE.replace("flux_3600k", "flux_3300K"), ("Two columns", "3300 K")),
        (WIDE.replace("flux_3600k", "flux_36k"), ("36 K", "500-60000 K")),
        ("wavelength_um,flux_3000k\n1,2\n2,3\n", ("1 temperature", "at least two")),
        ("wavelength_um,flux_3000k,flux_3300k\n1,2,3\n", ("one wavelength", "at least two")),
        (LONG.replace("flux\n", "brightness\n"), ("0 columns named flux", "'brightness'")),
        (LONG.replace("2.0,3600,4.0\n", ""), ("3600 K", "other wavelengths", "Resample")),
        (LONG.replace("1.5,3300", "1.0,3300"), ("line 6", "occurs twice")),
        (LONG.replace("1.5,3300", "1.5,0"), ("line 6", "temperature", "positive")),
        ("1.0,3,6,9\n1.5,2,4,7\n", ("no line with column names", "wavelength_um")),
        ("# " + WIDE.replace("1.5,2,4,7", "1.5,2,4"), ("line 3", "3 cells", "expected 4")),
        ("wavelength_um,3000,3300\n1.0,3\n", ("line 2", "2 cells")),
        ("", ("empty",)),
        ("# nothing\n", ("comments only",)),
        (b"%PDF-1.4 \x00\x01", ("PDF",)),
    ],
)
def test_unusable_spectra_are_refused_in_one_sentence(refused, text, words):
    """Each says where, what was found and what was expected."""
    message = refused(text)
    assert "\n" not in message
    for word in words:
        assert word in message


def test_fluxes_per_frequency_are_refused(tmp_path):
    """Jansky in the header: the ratio of two temperatures would be right, the photon weight in a bin would not."""
    table = Table({"wavelength_um": WAVELENGTH_UM, **{f"flux_{t}k": row * u.Jy for t, row in FLUX.items()}})
    table.write(tmp_path / "jy.ecsv")
    with pytest.raises(InputFileError, match="per frequency"):
        read_star_spectra(tmp_path / "jy.ecsv")


def test_missing_files_and_directories_are_refused(tmp_path):
    """No traceback for a wrong path."""
    with pytest.raises(InputFileError, match="no such file"):
        read_star_spectra(tmp_path / "absent.csv")
    with pytest.raises(InputFileError, match="directory"):
        read_star_spectra(tmp_path)


def test_spectra_that_miss_bins_or_temperatures_are_refused(read):
    """The user's spectra are never continued: the user knows better than Planck."""
    spectra = read(WIDE)
    inside, half = np.array([1.2, 1.8]), np.array([0.1, 0.1])
    star = spectra.in_bins(inside, half, 3300.0, 3000.0, 3600.0)
    assert star.n_grids == 1
    assert star.grid_spread_percent is None
    assert star.planck_bins == 0
    with pytest.raises(InputFileError, match=r"star.csv: .*span 1-2 um, but 1 of 2 bins"):
        spectra.in_bins(np.array([1.2, 2.2]), half, 3300.0, 3000.0, 3600.0)
    with pytest.raises(InputFileError, match=r"3000-3600 K.*allowed 2800-3400 K.*spot_contrast_k"):
        spectra.in_bins(inside, half, 3300.0, 2800.0, 3400.0)
    with pytest.raises(InputFileError, match="allowed 3100-3900 K"):
        spectra.in_bins(inside, half, 3300.0, 3100.0, 3900.0)
