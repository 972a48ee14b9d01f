"""The covariance of the bins from a file: every format, every refusal, and rows that follow the table's."""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from transit.errors import InputFileError, SettingError
from transit.likelihood import DepthLikelihood
from transit.linear import least_squares
from transit.readers import ReadOptions, covariance, read_depth_table

CASE = json.loads((Path(__file__).parents[1] / "reference/cases/golden_set.json").read_text())
WAVELENGTH_UM = np.array(CASE["wavelength_um"])
DEPTH_PPM = np.array(CASE["depth_ppm"], float)
N_BINS = len(DEPTH_PPM)
ERR_PPM = np.linspace(25.0, 40.0, N_BINS)
PLACE = np.arange(N_BINS)
# First order autoregressive noise: correlation rho^|i - j| (Box, Jenkins & Reinsel, Time Series Analysis, 3.2).
AR1 = 0.5 ** np.abs(PLACE[:, None] - PLACE)
MATRIX_PPM2 = np.outer(ERR_PPM, ERR_PPM) * AR1


def table_text(rows, unit="ppm", depth=DEPTH_PPM, err=ERR_PPM):
    lines = [f"wavelength_um,half_width_um,depth_{unit},depth_err_{unit}"]
    lines += [f"{WAVELENGTH_UM[i]},0.03,{depth[i]},{err[i]}" for i in rows]
    return "\n".join(lines) + "\n"


def text_of(matrix, separator=","):
    return "\n".join(separator.join(repr(float(value)) for value in row) for row in matrix) + "\n"


@pytest.fixture
def read(tmp_path):
    """Write a depth table and a matrix (array, text or bytes), and read both."""

    def write_and_read(matrix, name="cov.csv", rows=PLACE, table=None, **options):
        (tmp_path / "spectrum.csv").write_text(table_text(rows) if table is None else table)
        path = tmp_path / name
        content = text_of(matrix) if isinstance(matrix, np.ndarray) else matrix
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        return read_depth_table(tmp_path / "spectrum.csv", options=ReadOptions(covariance=path, **options))

    return write_and_read


@pytest.fixture
def refused(read):
    """Read a matrix that must be refused, and return the message without the directory."""

    def message(matrix, name="cov.csv", **options):
        with pytest.raises(InputFileError) as caught:
            read(matrix, name, **options)
        return str(caught.value)[str(caught.value).index(name) :]

    return message


def saved(array):
    """An array as the bytes of a .npy file."""
    import io

    buffer = io.BytesIO()
    np.save(buffer, array)
    return buffer.getvalue()


def fits_of(*hdus):
    """HDUs as the bytes of a FITS file."""
    import io

    buffer = io.BytesIO()
    fits.HDUList(list(hdus)).writeto(buffer)
    return buffer.getvalue()


class TestFormats:
    FILES = (
        ("cov.csv", text_of(MATRIX_PPM2)),
        ("tabs.txt", "# made up\n\n" + text_of(MATRIX_PPM2, "\t")),
        ("blanks.dat", text_of(MATRIX_PPM2, "   ")),
        ("header.csv", ",".join(f'"bin {i}"' for i in PLACE) + "\n" + text_of(MATRIX_PPM2)),
        ("decimal_comma.csv", text_of(MATRIX_PPM2, ";").replace(".", ",")),
        ("fortran.txt", text_of(MATRIX_PPM2, " ").replace("\n", "D0\n", 1)),
        ("cov.npy", saved(MATRIX_PPM2)),
        ("big_endian.npy", saved(MATRIX_PPM2.astype(">f8"))),
        ("primary.fits", fits_of(fits.PrimaryHDU(MATRIX_PPM2))),
        ("extension.fits", fits_of(fits.PrimaryHDU(np.zeros((3, 3))), fits.ImageHDU(MATRIX_PPM2))),
        ("packed.csv.gz", gzip.compress(text_of(MATRIX_PPM2).encode())),
    )

    @pytest.mark.parametrize(("name", "content"), FILES, ids=[name for name, _ in FILES])
    def test_every_format_gives_the_same_matrix(self, read, name, content):
        spectrum = read(content, name)
        np.testing.assert_allclose(spectrum.covariance, MATRIX_PPM2 * 1e-12, rtol=1e-13)
        np.testing.assert_allclose(spectrum.depth_err_ppm, ERR_PPM, rtol=1e-13)
        assert np.array_equal(spectrum.covariance, spectrum.covariance.T)

    def test_notes_say_what_was_read(self, read):
        notes = " ".join(read(4 * MATRIX_PPM2).notes)
        assert "read from cov.csv (text, 10 x 10, ppm squared" in notes
        assert "replaces the quoted errors: 2 times these in the median, 2 to 2" in notes
        assert "largest correlation is 0.5, of rows 1 and 2" in notes

    def test_diagonal_matrix_and_nearly_singular_one(self, read):
        assert "no bins are correlated" in " ".join(read(np.diag(ERR_PPM**2)).notes)
        common = np.outer(ERR_PPM, ERR_PPM) * (0.99995 + 0.00005 * np.eye(N_BINS))
        assert "smallest eigenvalue of the correlations is 5e-05" in " ".join(read(common).notes)


class TestMeaning:
    def test_golden_set(self, read):
        """Amplitude and chi-square of ten made-up bins with AR(1) noise of 0.5: golden set, computed apart."""
        spectrum = read(900 * AR1, table=table_text(PLACE, err=np.full(N_BINS, 30.0)))
        template = np.array(CASE["template"], float)
        ones, depth, ppm2 = np.ones(N_BINS), spectrum.depth_ppm, spectrum.covariance * 1e12
        band = least_squares(np.column_stack((ones, template)), depth, ppm2)
        assert band.estimate[1] == pytest.approx(99.00, abs=5e-3)
        assert band.error[1] == pytest.approx(26.83, abs=5e-3)
        assert band.z[1] == pytest.approx(3.690, abs=5e-4)
        assert least_squares(ones[:, None], depth, ppm2).chi2 == pytest.approx(16.953, abs=5e-4)

    def test_the_likelihood_uses_it(self, read):
        """chi-square of a flat spectrum as in the golden set, after integration over the level."""
        spectrum = read(900 * AR1, table=table_text(PLACE, err=np.full(N_BINS, 30.0)))
        flat = DepthLikelihood(spectrum, float(np.median(spectrum.depth)))
        zero = np.zeros((1, N_BINS))
        assert flat.collapse(zero, zero).chi2[0] == pytest.approx(16.953, abs=5e-4)

    @pytest.mark.parametrize(("unit", "scale"), [("percent", 1e-4), ("fraction", 1e-6), ("ppm", 1.0)])
    def test_the_unit_is_that_of_the_depths_or_named(self, read, unit, scale):
        table = table_text(PLACE, unit, DEPTH_PPM * scale, ERR_PPM * scale)
        own = read(MATRIX_PPM2 * scale**2, table=table)
        named = read(MATRIX_PPM2, table=table, covariance_unit="ppm")
        np.testing.assert_allclose(own.covariance, MATRIX_PPM2 * 1e-12, rtol=1e-12)
        np.testing.assert_allclose(named.covariance, MATRIX_PPM2 * 1e-12, rtol=1e-12)

    def test_radius_ratios_against_drawn_ones(self, read):
        """Covariance of the squares of 200 000 normal radius ratios, drawn with the matrix in the file."""
        ratio = np.sqrt(DEPTH_PPM * 1e-6)
        err = ERR_PPM * 1e-6 / (2 * ratio)
        matrix = np.outer(err, err) * AR1
        table = table_text(PLACE, "fraction", ratio, err).replace("depth_fraction", "rp_rs")
        table = table.replace("depth_err_fraction", "rp_rs_err")
        spectrum = read(matrix, table=table, depth_unit="radius-ratio")
        drawn = np.random.default_rng(5).multivariate_normal(ratio, matrix, 200_000, method="cholesky") ** 2
        product = np.outer(spectrum.depth_err, spectrum.depth_err)
        # Error of a sampled correlation: at most sqrt(2 / n) (Kendall & Stuart, Advanced Theory of Statistics).
        assert np.abs(np.cov(drawn.T) - spectrum.covariance).max() / product.max() < 5 * np.sqrt(2 / 200_000)

    @given(order=st.permutations(list(PLACE)))
    @settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=25, deadline=None)
    def test_rows_follow_the_table(self, read, order):
        """The order of the rows in both files together changes nothing."""
        shuffled = read(MATRIX_PPM2[np.ix_(order, order)], rows=order)
        np.testing.assert_array_equal(shuffled.wavelength_um, WAVELENGTH_UM)
        np.testing.assert_allclose(shuffled.covariance, MATRIX_PPM2 * 1e-12, rtol=1e-13)

    @pytest.mark.parametrize("whole", [True, False])
    def test_rows_left_out_and_repeated(self, read, whole):
        """Row 3 has no depth, row 6 repeats row 5, and the table falls in wavelength: the matrix may hold all rows."""
        order = [9, 8, 7, 6, 5, 5, 4, 3, 2, 1, 0]
        lines = table_text(order).splitlines()
        lines[3] = "1.52,0.03,,"
        in_file = np.array(order)
        matrix = MATRIX_PPM2[np.ix_(in_file, in_file)].copy()
        matrix[2], matrix[:, 2] = np.nan, np.nan
        if not whole:
            usable = np.delete(np.arange(11), 2)
            matrix = matrix[np.ix_(usable, usable)]
        spectrum = read(matrix, table="\n".join(lines))
        left = np.delete(PLACE, 7)
        np.testing.assert_array_equal(spectrum.wavelength_um, WAVELENGTH_UM[left])
        np.testing.assert_allclose(spectrum.covariance, MATRIX_PPM2[np.ix_(left, left)] * 1e-12, rtol=1e-13)

    def test_rows_of_another_planet_do_not_count(self, read):
        lines = table_text([*PLACE, *PLACE]).splitlines()
        named = [lines[0] + ",planet"] + [
            f"{x},{'a b' if i < 10 else 'c d'}" for i, x in enumerate(lines[1:])
        ]
        spectrum = read(MATRIX_PPM2, table="\n".join(named), planet="c d")
        np.testing.assert_allclose(spectrum.covariance, MATRIX_PPM2 * 1e-12, rtol=1e-13)

    def test_without_a_matrix_nothing_changes(self, tmp_path):
        (tmp_path / "spectrum.csv").write_text(table_text(PLACE))
        assert read_depth_table(tmp_path / "spectrum.csv").covariance is None


def changed(i, j, value, both=True):
    out = MATRIX_PPM2.copy()
    out[i, j] = value
    if both:
        out[j, i] = value
    return out


class TestRefusals:
    CASES = (
        (MATRIX_PPM2[:, :9], "is 10 x 9, expected a square one of 10 rows. A column of labels"),
        (MATRIX_PPM2[:4, :9], "is 4 x 9, expected a square one of 10 rows."),
        (MATRIX_PPM2[:9, :9], "is 9 x 9, expected 10 x 10, one row for each usable row"),
        (changed(2, 3, np.inf), "line 3: An element is 'inf', expected a number"),
        (changed(2, 3, np.nan), "row 3, column 4 of the matrix is nan, expected a finite number"),
        (changed(4, 4, -1.0), "variance in row 5 of the diagonal is -1, expected a positive"),
        (np.triu(MATRIX_PPM2), "not symmetric: row 1, column 2"),
        (changed(0, 1, 1001.0, both=False), "row 1, column 2 is 1001 and row 2, column 1 is 333.3"),
        (changed(0, 1, 1200.0), "not positive definite: the smallest eigenvalue"),
        (changed(0, 1, 1200.0), "of rows 1 and 2 of the matrix is 1.8, beyond 1"),
        (np.outer(ERR_PPM, ERR_PPM), "not positive definite"),
        (MATRIX_PPM2 * 1e-12, "1e-06 times the errors of the depth table"),
        (MATRIX_PPM2 * 1e-12, "give --covariance-unit fraction."),
        (MATRIX_PPM2 * 1e-8, "give --covariance-unit percent."),
        (AR1, "A diagonal of ones is a correlation matrix"),
        (
            MATRIX_PPM2 * 400,
            "20 times the errors of the depth table in the median, expected within a factor of 10",
        ),
        ("", "The file is empty"),
        ("# nothing\n", "comments only"),
        ("a,b,c\n", "a header but no rows"),
        ("1,2\n3\n", "line 2: The row has 1 elements, expected 2"),
        ("1,2\nabc,3\n", "line 2: An element is 'abc', expected a number"),
        (b"\x00\x01\x02", "binary file of no known kind"),
    )

    @pytest.mark.parametrize(("matrix", "said"), CASES, ids=range(len(CASES)))
    def test_one_clear_sentence(self, refused, matrix, said):
        message = refused(matrix)
        assert said in message
        assert "\n" not in message

    def test_two_sizes_are_named_when_rows_are_left_out(self, refused):
        lines = table_text(PLACE).splitlines()
        lines[3] = "1.22,0.03,,"
        message = refused(MATRIX_PPM2[:5, :5], table="\n".join(lines))
        assert "is 5 x 5, expected 9 x 9" in message
        assert "or 10 x 10, one for each of its rows" in message

    BINARY = (
        ("objects.npy", saved(np.array([[{}, {}]], object)), "The .npy file cannot be read"),
        ("complex.npy", saved(MATRIX_PPM2.astype(complex)), "of type complex128, expected real numbers"),
        (
            "infinite.npy",
            saved(changed(2, 3, np.inf)),
            "row 3, column 4 of the matrix is inf, expected a finite",
        ),
        ("vector.npy", saved(ERR_PPM), "The matrix is 10, expected a square one"),
        ("cut.npy", saved(MATRIX_PPM2)[:300], "The .npy file cannot be read"),
        ("cube.fits", fits_of(fits.PrimaryHDU(np.zeros((2, 3, 3)))), "The matrix is 2 x 3 x 3"),
        ("empty.fits", fits_of(fits.PrimaryHDU()), "holds no image"),
        ("cut.fits", fits_of(fits.PrimaryHDU(MATRIX_PPM2))[:2900], "FITS"),
        ("cut.gz", gzip.compress(text_of(MATRIX_PPM2).encode())[:60], "gzip compression is damaged"),
    )

    @pytest.mark.parametrize(("name", "content", "said"), BINARY, ids=[name for name, *_ in BINARY])
    def test_binary_files(self, refused, name, content, said):
        assert said in refused(content, name)

    def test_files_that_are_none(self, tmp_path):
        (tmp_path / "spectrum.csv").write_text(table_text(PLACE))
        for path, said in ((tmp_path, "is a directory"), (tmp_path / "none.csv", "no such file")):
            with pytest.raises(InputFileError, match=said):
                read_depth_table(tmp_path / "spectrum.csv", options=ReadOptions(covariance=path))

    def test_huge_file(self, refused, monkeypatch):
        monkeypatch.setattr(covariance, "_MAX_BYTES", 1000)
        assert "is larger than" in refused(MATRIX_PPM2)
        assert "unpacks to more than" in refused(gzip.compress(b"1 " * 2000), "bomb.gz")

    @pytest.mark.parametrize(
        ("options", "said"),
        [
            ({"covariance_unit": "ppm"}, "there is no covariance"),
            ({"covariance": "c.csv", "covariance_unit": "nm"}, "expected one of fraction, percent, ppm"),
            ({"covariance": " "}, "expected a text that is not empty"),
        ],
    )
    def test_options(self, options, said):
        with pytest.raises(SettingError, match=said):
            ReadOptions(**options)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (table_text(PLACE).replace("1.16,0.03", "1.16,30"), "line 3: The bin at 1.16 um reaches 30 um"),
        (
            "wavelength_um,depth_ppm,depth_err_ppm\n0.5,1e4,50\n9,1e4,50\n18,1e4,50\n",
            "where no width is given",
        ),
    ],
)
def test_bins_that_reach_below_zero_are_refused(tmp_path, text, said):
    """A width in another unit than its column says."""
    (tmp_path / "spectrum.csv").write_text(text)
    with pytest.raises(InputFileError, match=said):
        read_depth_table(tmp_path / "spectrum.csv")
