"""From line lists and band means to distributions: parsing, summing, slicing, completing."""

import gzip
import os
import subprocess
import sys
from pathlib import Path

import judge
import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

from transit.errors import InputFileError
from transit.opacity import available, band_edges_cm1, load_table
from transit.opacity_builder.__main__ import main
from transit.opacity_builder.alkali import doublet_cross_section_cm2, read_doublet
from transit.opacity_builder.bandmeans import BandMeans, effective_width_cm1, read_band_means
from transit.opacity_builder.completion import completed, missing_mean_cm2
from transit.opacity_builder.distributions import slice_means
from transit.opacity_builder.linelists import LineList, lines_from_gf, read_hitran, read_partition_sums
from transit.opacity_builder.profiles import SegmentSpectrum
from transit.opacity_builder.recipes import mean_width, slices_from_lines

ROOT = Path(__file__).resolve().parents[2]
RECORDS = (
    judge.DATA / "hitran_H2O_3750.par.gz"
)  # HITRAN2020 (Gordon et al. 2022, JQSRT 277, 107949), 26 lines


@pytest.fixture
def rng():
    """Random numbers with a fixed seed."""
    return np.random.default_rng(20)


@pytest.fixture(scope="module")
def sums():
    """Excerpt of TIPS (Gamache et al. 2021, JQSRT 271, 107713)."""
    return read_partition_sums(judge.DATA / "partition_sums.csv")


@pytest.fixture
def records():
    """The 160-character records as a list of text lines."""
    return gzip.decompress(RECORDS.read_bytes()).decode().splitlines()


def line_list(species: str) -> LineList:
    """An excerpt as the builder's line list."""
    x = judge.excerpt(species)
    return LineList(x.nu, x.intensity, x.energy, x.gamma, x.exponent, x.isotopologue, x.mass, x.partition)


# --- parsing -----------------------------------------------------------------------------------------------


def test_hitran_records_are_read_by_column(records, sums):
    """Wavenumber, intensity, width, energy and exponent come from the columns that HITRAN defines."""
    lines = read_hitran(RECORDS, sums)
    assert len(lines.intensity) == len(records) == 26
    assert np.all(np.diff(lines.wavenumber_cm1) >= 0)
    first = records[0]
    assert lines.wavenumber_cm1[0] == float(first[3:15])
    assert lines.intensity[0] == float(first[15:25])
    assert lines.gamma[0] == float(first[35:40])
    assert lines.lower_energy_cm1[0] == float(first[45:55])
    assert lines.gamma_exponent[0] == float(first[55:59])
    assert lines.molar_mass == pytest.approx(18.010565)
    assert set(lines.isotopologue) == {1}


def test_hitran_plain_text_reads_like_gzip(records, sums, tmp_path):
    """An unpacked file gives the same lines."""
    path = tmp_path / "01.par"
    path.write_text("\n".join(records) + "\n")
    assert np.array_equal(read_hitran(path, sums).intensity, read_hitran(RECORDS, sums).intensity)


def test_hitran_unsorted_records_are_sorted(records, sums, tmp_path):
    """The order of records in the file does not matter."""
    path = tmp_path / "01.par"
    path.write_text("\n".join(records[::-1]) + "\n")
    assert np.array_equal(read_hitran(path, sums).intensity, read_hitran(RECORDS, sums).intensity)


def test_hitran_short_record_is_refused_with_its_number(records, sums, tmp_path):
    """A record cut short is refused; the message names the file and the record."""
    path = tmp_path / "01.par"
    path.write_text("\n".join([*records[:3], records[3][:40], *records[4:]]) + "\n")
    with pytest.raises(InputFileError, match=r"01\.par, line 4: .*cut short"):
        read_hitran(path, sums)


def test_hitran_cut_inside_a_column_is_refused(records, sums, tmp_path):
    """A last record cut in the middle of a number is refused, not read as a smaller number."""
    path = tmp_path / "01.par"
    path.write_text("\n".join([*records[:-1], records[-1][:57]]) + "\n")
    with pytest.raises(InputFileError, match=r"01\.par"):
        read_hitran(path, sums)


def test_hitran_non_number_is_refused(records, sums, tmp_path):
    """Text in a number's column is refused."""
    path = tmp_path / "01.par"
    path.write_text("\n".join([records[0][:15] + " 1.2x4E-21" + records[0][25:], *records[1:]]) + "\n")
    with pytest.raises(InputFileError, match=r"01\.par.*expected a number"):
        read_hitran(path, sums)


def test_weighted_oscillator_strengths_reproduce_intensities(sums):
    """A line of gf has S = 8.85282e-13 gf exp(-c2 E/T) (1 - exp(-c2 nu/T))/Q: HITRAN's CO R(0) of 1-0, 2 %.

    R(0) at 2147.081 cm-1: A(1-0 R0) = 11.9 s-1 and S = 9.5e-20 cm/molecule (HITRAN2012, from memory); gf from A by
    gf = 1.4992 g' A / nu^2 (cgs, NIST Atomic Spectroscopy compendium), g' = 3.
    """
    grid_k, q = sums[5, 1]
    gf = 1.4992 * 3 * 11.9 / 2147.081**2
    lines = lines_from_gf(
        [2147.081], [0.0], [np.log10(gf)], [0.986544], [1], 0.06, 0.7, 28.0, {1: (grid_k, q)}
    )
    assert lines.intensity[0] == pytest.approx(9.5e-20, rel=0.02)


def test_within_and_mean_width():
    """`within` cuts by wavenumber; the mean width is weighted by strength."""
    lines = line_list("H2O").within(3690, 3700)
    assert lines.wavenumber_cm1.min() >= 3690
    assert lines.wavenumber_cm1.max() <= 3700
    gamma, exponent = mean_width(lines, 1e-23)
    strong = lines.intensity > 1e-23
    assert lines.gamma[strong].min() <= gamma <= lines.gamma[strong].max()
    assert lines.gamma_exponent[strong].min() <= exponent <= lines.gamma_exponent[strong].max()


# --- band means --------------------------------------------------------------------------------------------

# Riviere & Soufiani 2012, Int. J. Heat Mass Transfer 55, 3349: six bands, 300-1600 K.
BAND_MEANS = {name: judge.DATA / f"band_means_{name}.txt.gz" for name in ("CH4", "CO2")}


def write_gz(path, text):
    """Write gzip text and return its path."""
    path.write_bytes(gzip.compress(text.encode()))
    return path


def test_band_means_are_read():
    """Centres, temperatures and units: k (cm-1 atm-1) becomes k kB T / (1 atm)."""
    means = read_band_means(BAND_MEANS["CH4"])
    assert means.centre_cm1 == pytest.approx([2975, 3000, 3025, 3050, 3075, 3100])
    assert means.temperature_k == pytest.approx(np.arange(300, 1700, 100))
    first = [float(w) for w in gzip.decompress(BAND_MEANS["CH4"].read_bytes()).split()[:2]]
    loschmidt = 101325.0 / (1.380649e-23 * 300.0) * 1e-6  # CODATA 2018
    assert means.cross_section_cm2[0, 0] == pytest.approx(first[1] / loschmidt)


def band_average(means: BandMeans, centre_cm1: float, temperature_k: float) -> float:
    """Mean over a band of the continuous curve through the band means, cm2."""
    points = centre_cm1 + 25 * ((np.arange(500) + 0.5) / 500 - 0.5)
    return float(np.exp(means.ln_mean_at(points, temperature_k)).mean())


def test_band_means_are_kept_by_the_curve():
    """The continuous curve has the mean of every inner band; outside the bands there is nothing."""
    means = read_band_means(BAND_MEANS["CO2"])
    for band in range(1, 5):
        for column, temperature_k in ((0, 300.0), (2, 500.0), (-1, 9000.0)):
            found = band_average(means, means.centre_cm1[band], temperature_k)
            assert found == pytest.approx(means.cross_section_cm2[band, column], rel=0.01)
    assert np.all(np.isneginf(means.ln_mean_at(np.array([1900.0, 2300.0]), 500.0)))


@pytest.mark.parametrize(
    "text",
    ["2000 1 2\n2025 1 2\n2000 3 4\n", "2000 1 2\n2025 1 2\n2000 3 4\n2050 3 4\n", "2000 1 2\n2000 3\n"],
    ids=["odd", "centres differ", "lengths differ"],
)
def test_band_means_of_another_layout_are_refused(tmp_path, text):
    """Rows that do not come in two equal blocks are refused with the path."""
    with pytest.raises(InputFileError, match=r"bad\.txt\.gz.*two blocks"):
        read_band_means(write_gz(tmp_path / "bad.txt.gz", text))


def test_band_means_non_number_is_refused(tmp_path):
    """A word among the numbers is refused as a fault of the file."""
    with pytest.raises(InputFileError, match=r"bad\.txt\.gz"):
        read_band_means(write_gz(tmp_path / "bad.txt.gz", "2000 1 x\n2000 3 4\n"))


def test_low_temperature_continuation_meets_lines():
    """Down to the lowest trusted temperature, band means of CH4 continue to what lines give (HITRAN2020): 0.25 in ln k.

    The continuation is linear in 1/T from 300 and 400 K; offsets that lines and band means have at 300 K are kept.
    """
    part = next(p for p in load_table("CH4").trusted if p["low_um"] <= 3.3 <= p["high_um"])
    means = read_band_means(BAND_MEANS["CH4"])
    lines = line_list("CH4")

    def gap(centre, temperature_k):
        inside = np.abs(lines.wavenumber_cm1 - centre) < 12.5
        summed = np.log(lines.intensity_at(temperature_k)[inside].sum() / 25.0)
        return np.log(band_average(means, centre, temperature_k)) - summed

    for centre in (3000.0, 3025.0, 3050.0, 3075.0):
        assert abs(gap(centre, 300.0)) < 0.15
        assert gap(centre, part["t_min_k"]) == pytest.approx(gap(centre, 300.0), abs=0.25)


@pytest.mark.parametrize("species", ["CO2", "CH4"])
def test_effective_width_is_positive_and_grows(species):
    """Positive and finite everywhere, growing with the Lorentz width, below the Doppler width in thin gas."""
    lorentz = np.geomspace(1e-9, 1.0, 60)
    for doppler in (1e-3, 1e-2):
        for density in (1e-3, 1.0, 100.0):
            width = effective_width_cm1(species, lorentz, doppler, density)
            assert np.all(np.isfinite(width))
            assert np.all(width > 0)
            assert np.all(np.diff(width) > 0)
            assert width[0] < doppler


# --- slices ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("count", [1, 7, 16, 33, 160, 1001])
def test_slice_means_keep_the_mean(count, rng):
    """Slices increase and their mean is the mean of the samples, also when the count is no multiple of 16."""
    samples = rng.normal(-50, 4, count)
    slices = slice_means(samples)
    assert slices.mean() == pytest.approx(samples.mean(), abs=1e-10)
    assert np.all(np.diff(slices) >= -1e-9)


def test_slice_means_are_plain_means_of_sorted_groups(rng):
    """With 4 samples a slice, each slice is the mean of 4 sorted samples."""
    samples = rng.normal(size=64)
    assert slice_means(samples) == pytest.approx(np.sort(samples).reshape(16, 4).mean(axis=1))


# --- summed lines ------------------------------------------------------------------------------------------


def random_lines(rng, count=60) -> LineList:
    """Lines of random place, strength and width near 3000 cm-1."""
    return LineList(
        wavenumber_cm1=np.sort(rng.uniform(2960, 3050, count)),
        intensity=10 ** rng.uniform(-24, -20, count),
        lower_energy_cm1=rng.uniform(0, 2000, count),
        gamma=rng.uniform(0.02, 0.12, count),
        gamma_exponent=rng.uniform(0.4, 0.8, count),
        isotopologue=np.ones(count, int),
        molar_mass=18.0,
        partition={1: (np.array([100.0, 3000.0]), np.array([30.0, 6000.0]))},
    )


@pytest.mark.parametrize("pressure_bar", [1e-5, 1e-2, 1.0])
def test_convolution_meets_direct_sum(rng, pressure_bar):
    """Placing lines on a grid and convolving gives the direct sum of Voigt profiles: 0.01 in the mean of ln k."""
    lines = random_lines(rng)
    segment = SegmentSpectrum(lines, 2990.0, 3020.0, 900.0)
    found = segment.cross_section_cm2(pressure_bar)
    plain = judge.Lines(
        lines.wavenumber_cm1,
        lines.intensity_at(900.0),
        np.zeros(60),
        lines.gamma,
        lines.gamma_exponent,
        lines.isotopologue,
        18.0,
        {1: (np.array([100.0, 296.0, 900.0, 3000.0]), np.ones(4))},
    )
    # Its intensities hold at 900 K already: undo the factor that the judge applies.
    undo = judge.intensities(plain, 900.0) / plain.intensity
    plain = judge.Lines(
        plain.nu, plain.intensity / undo, *[getattr(plain, n) for n in ("energy", "gamma", "exponent")],
        plain.isotopologue, 18.0, plain.partition,
    )  # fmt: skip
    exact = judge.ln_cross_sections(plain, segment.grid_cm1, 900.0, np.array([pressure_bar]), near_cm1=25.0)
    difference = np.log(found) - exact[:, 0]
    assert abs(difference.mean()) < 0.01
    assert np.sqrt(np.mean(difference**2)) < 0.1


def test_segment_without_lines_is_empty(rng):
    """A stretch that no line reaches is transparent."""
    segment = SegmentSpectrum(random_lines(rng), 4000.0, 4010.0, 500.0)
    assert not segment.cross_section_cm2(1.0).any()


def test_segment_keeps_the_strength(rng):
    """Away from its ends the integral over a stretch is the sum of the intensities."""
    lines = random_lines(rng)
    segment = SegmentSpectrum(lines, 2900.0, 3110.0, 500.0)
    total = segment.cross_section_cm2(1e-3).sum() * segment.step_cm1
    assert total == pytest.approx(lines.intensity_at(500.0).sum(), rel=1e-3)


# --- completion --------------------------------------------------------------------------------------------


def flat_means(value_cm2: float) -> BandMeans:
    """Band means of 2950 to 3050 cm-1, the same at all temperatures."""
    centre = np.arange(2950.0, 3051.0, 25.0)
    grid_k = np.array([300.0, 1000.0, 2000.0])
    return BandMeans(centre, grid_k, np.full((5, 3), value_cm2), np.ones((5, 3)))


def test_completion_adds_exactly_what_is_missing(rng):
    """Over the middle bands, completed lines have the mean that the band means demand."""
    lines = random_lines(rng, 400)
    means = flat_means(1e-18)
    missing = missing_mean_cm2(lines, means, 1000.0)
    assert np.all(missing > 0)
    segment = SegmentSpectrum(lines, 2940.0, 3060.0, 1000.0)
    k = segment.cross_section_cm2(1e-3)
    done = completed(k, segment.grid_cm1, missing, means.centre_cm1)
    inside = (segment.grid_cm1 > 2962.5) & (segment.grid_cm1 < 3037.5)
    expected = np.interp(segment.grid_cm1[inside], means.centre_cm1, missing).mean()
    assert (done - k)[inside].mean() == pytest.approx(expected, rel=0.15)
    assert np.all(done >= k)


def test_completion_leaves_full_lines_alone(rng):
    """Where the lines hold as much as the band means, nothing is added."""
    lines = random_lines(rng)
    means = flat_means(1e-30)
    missing = missing_mean_cm2(lines, means, 1000.0)
    assert not missing[lines.intensity_at(1000.0).sum() > 0 and slice(1, 4)].any()
    segment = SegmentSpectrum(lines, 2990.0, 3010.0, 1000.0)
    k = segment.cross_section_cm2(1e-3)
    assert np.array_equal(completed(k, segment.grid_cm1, np.zeros(5), means.centre_cm1), k)


def test_slices_of_lines_keep_mean_and_band_sum():
    """Slices of summed lines: the band mean of k times the width is the sum of the intensities, 2 % over many bands."""
    lines = line_list("CO")
    slices, ln_mean = slices_from_lines(lines, 570, 12, 1000.0, np.array([1e-3, 1e-2]))

    edges = band_edges_cm1(570, 12)
    inside = (lines.wavenumber_cm1 >= edges[0]) & (lines.wavenumber_cm1 < edges[-1])
    assert 2060 < edges[0] < edges[-1] < 2186
    assert np.exp(ln_mean) @ np.diff(edges) == pytest.approx(
        lines.intensity_at(1000.0)[inside].sum(), rel=0.02
    )
    assert np.all(np.diff(slices, axis=2) >= 0)


# --- alkali doublets ---------------------------------------------------------------------------------------

# Morton 2003, ApJS 149, 205.
DOUBLETS = """\
species,lambda_air_A,lambda_vac_A,nu_vac_cm-1,E_lower_cm-1,g_lower,g_upper,A_ul_s-1,f_lu,log10_gf,damping_gamma_rad_s-1
Na I,5895.9242,5897.5581,16956.17025,0,2,2,61390000.0,0.3201,-0.194,61390000.0
Na I,5889.951,5891.5833,16973.36616,0,2,4,61570000.0,0.6408,0.108,61570000.0
K I,7698.9645,7701.0835,12985.1858,0,2,2,37420000.0,0.3327,-0.177,37420000.0
K I,7664.8991,7667.0089,13042.896,0,2,4,37910000.0,0.6682,0.126,37910000.0
"""


def test_doublet_strength_and_centre(tmp_path):
    """Na D lines: the integral is 8.85282e-13 f; in thin gas at 1000 K the D2 centre is that of a Doppler line."""
    path = tmp_path / "atoms.csv"
    path.write_text(DOUBLETS)
    doublet = read_doublet(path, "Na")
    grid = np.arange(16900.0, 17030.0, 0.002)
    k = doublet_cross_section_cm2(grid, doublet, "Na", 1000.0, 1e-4)
    assert k.sum() * 0.002 == pytest.approx(8.85282e-13 * (0.3201 + 0.6408), rel=0.01)
    # Peak of a Doppler line: sqrt(ln 2/pi) / HWHM, with 0.0400890 cm-1; natural damping takes a few per cent off.
    peak = 8.85282e-13 * 0.6408 * np.sqrt(np.log(2) / np.pi) / 0.0400890
    assert k.max() == pytest.approx(peak, rel=0.02)


# --- the command -------------------------------------------------------------------------------------------


def test_command_has_help():
    """`--help` works and names the options."""
    result = CliRunner().invoke(main, ["--help"])
    assert result.exit_code == 0
    assert "--source" in result.output
    assert "--species" in result.output


def test_command_refuses_unknown_species(tmp_path):
    """A species without a recipe is refused with the list of those there are, exit 2."""
    result = CliRunner().invoke(
        main, ["--source", str(tmp_path), "--out", str(tmp_path / "o"), "--species", "TiO"]
    )
    assert result.exit_code == 2
    assert "No recipe for TiO; there are H2O, CO" in result.output


def test_command_builds_a_table(tmp_path):
    """From a source folder to a registered table that loads, in a fresh process."""
    (tmp_path / "cia").mkdir()
    nu = np.array([20.0, 2000.0, 4000.0, 20000.0])
    parts = {
        "h2he_rt_fp0.25_40-400K": ([40, 200, 400], 1e-7),
        "h2he_fundamental_fp0.25_40-400K": ([40, 200, 400], 2e-7),
        "H2-He_jorgensen_1000-7000K": ([1000, 4000, 7000], 6e-7),
    }
    for name, (grid_k, value) in parts.items():
        table = pd.DataFrame({"nu_cm-1": nu} | {str(t): np.full(4, value) for t in grid_k})
        table.to_csv(tmp_path / "cia" / f"{name}.csv.gz", index=False)
    out = tmp_path / "tables"
    subprocess.run(
        [sys.executable, "-m", "transit.opacity_builder", "--source", tmp_path, "--out", out,
         "--species", "H2-He", "--workers", "1"],
        check=True, capture_output=True, cwd=ROOT, env=os.environ | {"PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert available(out) == ["H2-He"]
    table = load_table("H2-He", out)
    per_unit = np.exp(table.ln_mean) / 1.38527e-39
    cold, hot = list(table.temperature_k).index(300.0), list(table.temperature_k).index(1500.0)
    assert per_unit[:, cold] == pytest.approx(3e-7, rel=0.01)  # two parts that add
    assert per_unit[:, hot] == pytest.approx(6e-7, rel=0.01)
