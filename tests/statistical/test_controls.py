"""Controls that must fail: spectra without an absorber whose cause is known, each caught by what is meant for it.

The stars are spotted with observed spectra of dwarfs, not with the models that the rival is built on.
"""

import dataclasses
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from transit.check import check_spectrum
from transit.records import DepthSpectrum, Nuisances, System
from transit.units import PPM

EDGES_UM = np.geomspace(1.1, 1.68, 29)
CENTRE_UM, HALF_UM = (EDGES_UM[1:] + EDGES_UM[:-1]) / 2, np.diff(EDGES_UM) / 2
LEVEL_PPM, ERR_PPM = 14600.0, 40.0
# Star and planet like HD 209458 (Torres, Winn & Holman 2008, ApJ 677, 1324, from memory).
SUN_LIKE = System(
    star_radius_rsun=1.155,
    planet_radius_rjup=1.359,
    planet_mass_mjup=0.685,
    equilibrium_temperature_k=1449.0,
    star_teff_k=6065.0,
)
# A sub-Neptune of an M3 dwarf; star after the dwarf sequence of Pecaut & Mamajek 2013, ApJS 208, 9.
M_DWARF = System(
    star_radius_rsun=0.36,
    planet_radius_rjup=0.42,
    planet_mass_mjup=0.04,
    equilibrium_temperature_k=600.0,
    star_teff_k=3400.0,
)
DWARFS = Path(__file__).parents[1] / "reference/data/dwarf_spectra.csv"


def spectrum_of(depth_ppm, seed, err_ppm=ERR_PPM, true_over_quoted=1.0, segment=None):
    """Depths with Gaussian noise on the common bins."""
    noise = np.random.default_rng([88, seed]).standard_normal(len(CENTRE_UM))
    depth = np.broadcast_to(depth_ppm, len(CENTRE_UM)) + err_ppm * true_over_quoted * noise
    names = ("all",) if segment is None else tuple(f"part {k}" for k in range(max(segment) + 1))
    return DepthSpectrum(
        CENTRE_UM,
        HALF_UM,
        depth * PPM,
        np.full(len(CENTRE_UM), err_ppm * PPM),
        segment=segment,
        segment_names=names,
    )


def check(spectrum, system=SUN_LIKE, **options):
    """A rough check for water in this process."""
    return check_spectrum(spectrum, system, species=("H2O",), quick=True, workers=1, seed=2, **options)


def rival(result, name):
    """One rival of a result, on the nulls."""
    return next(r for r in result.rivals if r.name == name and r.base == "null")


@pytest.mark.parametrize("seed", [1, 2])
def test_errors_understated_by_two(seed):
    """Noise twice as large as quoted: no species, and the sentence says that the errors look too small."""
    result = check(spectrum_of(LEVEL_PPM, seed, true_over_quoted=2.0))
    assert result.inflated
    assert result.verdict.feature not in ("present", "hint")
    assert result.verdict.species["H2O"] not in ("present", "hint")
    assert "understated" in result.verdict.sentence
    factor = max(result.inflated, key=lambda fit: fit.ln_evidence).parameters["error_factor"]
    assert factor.median == pytest.approx(2.0, rel=0.35)  # the scatter of 28 bins is known to 13 per cent


@pytest.mark.parametrize("where", [12, 18])
def test_one_bad_bin(where):
    """One bin inside or outside the water band is high by seven of its errors: named, with its wavelength."""
    depth = np.full(len(CENTRE_UM), LEVEL_PPM)
    depth[where] += 7 * ERR_PPM
    result = check(spectrum_of(depth, 3))
    assert result.verdict.species["H2O"] not in ("present", "hint")
    found = rival(result, "one-bin")
    assert found.ln_evidence > result.fit("flat").ln_evidence + 2.5
    assert f"{CENTRE_UM[where]:.2f} um" in result.verdict.sentence


def test_detector_step_between_segments():
    """Two detectors that differ by 400 ppm, the offset four times as large as its prior is wide."""
    segment = (CENTRE_UM > 1.33).astype(int)
    depth = LEVEL_PPM + 400.0 * segment
    result = check(spectrum_of(depth, 4, segment=segment), SUN_LIKE)
    assert result.verdict.species["H2O"] not in ("present", "hint")
    assert rival(result, "step").ln_evidence > result.fit("flat").ln_evidence
    assert "step" in result.verdict.sentence


def test_detector_step_at_a_named_wavelength():
    """The same step in a table without segments, its place named by the user."""
    depth = LEVEL_PPM + 300.0 * (CENTRE_UM > 1.33)
    result = check(spectrum_of(depth, 5), nuisances=Nuisances(step_um=(1.33,)))
    assert result.verdict.species["H2O"] not in ("present", "hint")
    step = rival(result, "step")
    assert step.ln_evidence == max(
        [step.ln_evidence, *(fit.ln_evidence for fit in result.fits)]
    )  # nothing explains it better
    assert "step at 1.33 um" in result.verdict.sentence


def observed_flux(spectral_type):
    """Observed photon flux of a dwarf over the bins."""
    table = pd.read_csv(DWARFS, comment="#")
    wavelength = table["wavelength_um"].to_numpy()
    flux = table[f"flux_{spectral_type}"].to_numpy() * wavelength
    fine = np.linspace(EDGES_UM[:-1], EDGES_UM[1:], 40)
    return np.interp(fine, wavelength, flux).mean(axis=0)


@pytest.mark.parametrize(("photosphere", "spot", "fraction"), [("M3", "M6", 0.20), ("M3", "M7", 0.12)])
def test_spotted_star(photosphere, spot, fraction):
    """Unocculted spots of an M dwarf put water bands into the depth of a planet without an atmosphere.

    Factor: Rackham, Apai & Giampapa 2018, ApJ 853, 122. Spectra: observed standards of the SpeX Prism Library.
    """
    ratio = observed_flux(spot) / observed_flux(photosphere)
    depth = LEVEL_PPM / (1 - fraction * (1 - ratio))
    result = check(spectrum_of(depth, 6), M_DWARF)
    star = rival(result, "star")
    assert star.ln_evidence > result.fit("flat").ln_evidence + 5  # there is something to be caught
    assert result.verdict.species["H2O"] not in ("present", "hint")
    assert "star" in result.verdict.sentence
    spots = star.parameters["spot_fraction"]
    assert spots.lower > 0.01


def test_water_is_not_explained_away():
    """The same checks leave a band of three scale heights of a quiet star standing."""
    from transit.simulate import Truth, clean_depth

    truth = Truth(1300.0, {"H2O": -3.0}, log10_deck_pressure_bar=-1.5)
    depth = clean_depth(truth, SUN_LIKE, CENTRE_UM, HALF_UM) / PPM
    result = check(spectrum_of(depth, 7))
    assert result.verdict.species["H2O"] == "present"
    assert dataclasses.asdict(result.verdict)["feature"] == "present"
