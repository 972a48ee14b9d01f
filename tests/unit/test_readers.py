"""Reading depth tables: every format, every refusal, and the properties that no layout may change."""

from __future__ import annotations

import gzip
import hashlib
import subprocess
import sys
from contextlib import suppress
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from transit.errors import InputFileError, SettingError
from transit.readers import ReadOptions, read_depth_table
from transit.readers.bins import fill_half_widths, kind_from_spacing, spacing_ratio
from transit.readers.cells import is_missing, parse_number
from transit.readers.names import describe
from transit.readers.quantities import format_number, standard_unit
from transit.records import System

DATA = Path(__file__).parents[1] / "data"
# NASA Exoplanet Archive composite values.
WASP_39 = System(0.918, 1.332, 0.28, 1166.0, planet_name="WASP-39 b")
WASP_12 = System(1.66, 1.94, 1.47, 2581.0, planet_name="WASP-12 b")  # values from memory
LHS_475 = System(0.2789, 0.08841, 0.00296, 586.0, planet_name="LHS 475 b")
ROUND = System(1.0, 1.0, 1.0, 1000.0)  # squared radius ratio 10560 ppm

HEADER = "wavelength_um,half_width_um,depth_ppm,depth_err_ppm"
ROWS = ("1.1,0.05,10000,50", "1.2,0.05,10100,51", "1.3,0.05,10200,52", "1.4,0.05,10300,53")


@pytest.fixture
def read(tmp_path):
    """Write a text (or bytes) to a file and read it, with options as keywords."""

    def write_and_read(text, name="spectrum.csv", system=None, **options):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return read_depth_table(path, system=system, options=ReadOptions(**options))

    return write_and_read


@pytest.fixture
def refused(read):
    """Read a text that must be refused, and return the message without the directory."""

    def message(text, name="spectrum.csv", **options):
        with pytest.raises(InputFileError) as caught:
            read(text, name, **options)
        return str(caught.value)[str(caught.value).index(name) :]

    return message


def table(rows=ROWS, header=HEADER, sep=","):
    return "\n".join([header, *rows]).replace(",", sep) + "\n"


def swap(line, rows=ROWS):
    """Replace the second row, line 3 of the file."""
    return table([rows[0], line, *rows[2:]])


def notes_of(spectrum):
    return "\n".join(spectrum.notes)


class TestNativeTable:
    def test_values_source_checksum(self, read):
        text = "# reference: Author et al. 2020\n" + table()
        spectrum = read(text)
        np.testing.assert_allclose(spectrum.wavelength_um, [1.1, 1.2, 1.3, 1.4])
        np.testing.assert_allclose(spectrum.half_width_um, 0.05)
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10200, 10300])
        np.testing.assert_allclose(spectrum.depth_err_ppm, [50, 51, 52, 53])
        assert spectrum.source == "spectrum.csv (Author et al. 2020)"
        assert spectrum.sha256 == hashlib.sha256(text.encode()).hexdigest()
        assert spectrum.segment_names == ("all",)

    def test_asymmetric_errors_are_symmetrised(self, read):
        rows = [f"{row},{minus}" for row, minus in zip(ROWS, (50, 51, 52, 30), strict=True)]
        spectrum = read(table(rows, HEADER + ",depth_err_minus_ppm"))
        np.testing.assert_allclose(spectrum.depth_err_ppm, [50, 51, 52, 41.5])
        assert "differ by more than a factor of 1.2 in 1 of 4 bins" in notes_of(spectrum)

    def test_segments_in_order_of_wavelength(self, read):
        rows = [f"{row},{name}" for row, name in zip(ROWS, ("Z", "Z", "A", "A"), strict=True)]
        spectrum = read(table(rows, HEADER + ",segment"))
        assert spectrum.segment_names == ("Z", "A")
        assert spectrum.segment.tolist() == [0, 0, 1, 1]
        assert "2 segments that may be offset: Z, A" in notes_of(spectrum)

    def test_nan_half_width_is_unknown(self, read):
        spectrum = read(swap("1.2,nan,10100,51"))
        np.testing.assert_allclose(spectrum.half_width_um, 0.05)
        assert "1 of 4 bins have no width" in notes_of(spectrum)


class TestSeparatedText:
    @pytest.mark.parametrize("sep", [",", ";", "\t", " ", "   ", ", "])
    def test_separators(self, read, sep):
        assert read(table(sep=sep)).n_bins == 4

    @pytest.mark.parametrize("ending", ["\r\n", "\r"])
    def test_line_ends(self, read, ending):
        assert read(table().replace("\n", ending)).n_bins == 4

    def test_byte_order_mark_utf16_and_gzip(self, read):
        plain = read(table())
        for content in (b"\xef\xbb\xbf" + table().encode(), table().encode("utf-16")):
            np.testing.assert_array_equal(read(content).depth, plain.depth)
        np.testing.assert_array_equal(read(gzip.compress(table().encode()), "a.csv.gz").depth, plain.depth)

    def test_latin1_header(self, read):
        text = table(header="wavelength (µm),half width,depth (ppm),error").encode("latin-1")
        assert "not UTF-8" in notes_of(read(text))

    def test_content_decides_and_not_the_suffix(self, read):
        assert read(table(), "spectrum.fits").n_bins == 4

    @pytest.mark.parametrize("sep", [" ", ","])
    def test_names_in_a_comment_before_blank_separated_rows(self, read, sep):
        text = "# made by a script\n# " + HEADER.replace(",", sep) + "\n" + "\n".join(ROWS).replace(",", " ")
        assert read(text).n_bins == 4

    def test_blank_lines_and_comments_between_rows(self, read):
        assert read(table([ROWS[0], "", "# moved", *ROWS[1:]])).n_bins == 4

    def test_units_row(self, read):
        text = table(
            ["nm,nm,%,%", *(f"1{i}00,100,1.0{i},0.01" for i in range(4))], "wave,full width,depth,err"
        )
        spectrum = read(text)
        np.testing.assert_allclose(spectrum.wavelength_um, [1.0, 1.1, 1.2, 1.3])
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10200, 10300])

    def test_units_from_comments(self, read):
        text = "# wave_unit: um\n# depth_unit = percent\n" + table(
            ["1.1,1.0,0.01", "1.2,1.1,0.01", "1.3,1.2,0.02"], "wave,depth,err"
        )
        np.testing.assert_allclose(read(text).depth_ppm, [10000, 11000, 12000])

    def test_unused_columns_may_hold_anything(self, read):
        assert read(table([row + ",inf" for row in ROWS], HEADER + ",remark")).n_bins == 4

    def test_leading_index_column_without_a_name(self, read):
        assert read(table([f"{i},{row}" for i, row in enumerate(ROWS)], "," + HEADER)).n_bins == 4

    def test_fortran_exponents_and_unicode_minus(self, read):
        spectrum = read(swap("1.2D0,5.0d-02,1.01D+4,51"))
        np.testing.assert_allclose(spectrum.depth_ppm[1], 10100)
        assert parse_number("\N{MINUS SIGN}1.5") == -1.5

    def test_decimal_commas_with_semicolons(self, read):
        spectrum = read(table(sep=";").replace(".", ","))
        np.testing.assert_allclose(spectrum.wavelength_um, [1.1, 1.2, 1.3, 1.4])
        assert "Decimal commas were read as decimal points in wavelength_um, half_width_um" in notes_of(
            spectrum
        )

    @pytest.mark.parametrize("mark", ["", "...", "--", "null", "NaN", "N/A", "masked"])
    def test_missing_marks(self, read, mark):
        spectrum = read(swap(f"1.2,0.05,{mark},51"))
        assert spectrum.n_bins == 3
        assert "1 row without a value in depth_ppm left out" in notes_of(spectrum)

    def test_declared_missing_number(self, read):
        assert read("# missing: -99\n" + swap("1.2,0.05,-99.0,51")).n_bins == 3

    def test_limits_are_left_out(self, read):
        rows = [ROWS[0] + ",0", ROWS[1] + ",1", *(row + ",0" for row in ROWS[2:])]
        assert "1 row left out as limits" in notes_of(read(table(rows, HEADER + ",depth_lim")))
        assert read(swap("1.2,0.05,<10100,51")).n_bins == 3


class TestRefusedText:
    @pytest.mark.parametrize("cell", ["abc", "inf", "-Infinity", "1_0", "1.2±0.1", "1e999", "True"])
    def test_bad_cell_with_its_line(self, refused, cell):
        message = refused("# comment\n\n" + swap(f"1.2,0.05,{cell},51"))
        assert message.startswith(f"spectrum.csv, line 5: depth_ppm is '{cell}', expected a finite number.")

    @pytest.mark.parametrize("cell", ["0", "-51"])
    def test_error_not_positive(self, refused, cell):
        message = refused(swap(f"1.2,0.05,10100,{cell}"))
        assert message.startswith(f"spectrum.csv, line 3: depth_err_ppm is {cell}, expected a positive error")

    def test_undeclared_missing_number_tells_how_to_declare(self, refused):
        assert "# missing: -99" in refused(swap("1.2,0.05,10100,-99"))

    @pytest.mark.parametrize("cell", ["0", "-0.05"])
    def test_width_not_positive(self, refused, cell):
        assert "line 3: half_width_um is" in refused(swap(f"1.2,{cell},10100,51"))

    def test_negative_wavelength(self, refused):
        assert "line 3: wavelength_um is -1.2, expected a positive wavelength" in refused(
            swap("-1.2,0.05,10100,51")
        )

    def test_wavelength_out_of_range(self, refused):
        message = refused(swap("1200,0.05,10100,51"))
        assert message.startswith("spectrum.csv, line 3: wavelength_um is 1200 um")
        assert "0.1 to 30 um" in message
        assert "--wavelength-unit" in message

    def test_depth_above_one(self, refused):
        message = refused(swap("1.2,0.05,2000000,51"))
        assert message.startswith("spectrum.csv, line 3: depth_ppm is a depth of 2")
        assert "--depth-unit" in message

    def test_too_few_bins(self, refused):
        message = refused(swap("1.2,0.05,,51", ROWS[:3]))
        assert "2 usable bins are left, expected at least 3. 1 row without a value in depth_ppm" in message

    def test_column_without_numbers(self, refused):
        rows = ["1.1,0.05,nan,50", "1.2,0.05,,51", "1.3,0.05,--,52"]
        assert "Column 'depth_ppm' holds no number at all" in refused(table(rows))

    def test_no_header(self, refused):
        message = refused("\n".join(ROWS))
        assert message.startswith("spectrum.csv, line 1: The first row is '1.1,0.05,10000,50'")
        assert "wavelength_um,half_width_um,depth_ppm,depth_err_ppm" in message

    def test_repeated_header_name(self, refused):
        message = refused("# c\n" + table(["1,2,3"], "wave_um,depth,depth"))
        assert message.startswith("spectrum.csv, line 2: The header names 'depth' more than once")

    def test_row_of_another_length(self, refused):
        message = refused(swap("1.2,0.05,10100"))
        assert message.startswith("spectrum.csv, line 3: The row has 3 cells, expected 4 as in the header")

    def test_decimal_commas_between_commas(self, refused):
        assert "decimal commas" in refused(table([row.replace(".", ",") for row in ROWS]))

    def test_decimal_commas_between_blanks(self, refused):
        message = refused(table(sep=" ").replace(".", ","))
        assert message.startswith(
            "spectrum.csv, line 2: wavelength_um is '1,1', which looks like a decimal comma"
        )
        assert "semicolons" in message

    def test_mixed_decimal_signs(self, refused):
        assert "mixes decimal commas" in refused(table(sep=";").replace("1.2", "1,2"))

    @pytest.mark.parametrize(
        ("content", "said"),
        [
            (b"", "The file is empty"),
            (b"  \n\n", "The file is empty"),
            (b"# only this\n", "holds comments only"),
            (HEADER.encode(), "a header line but no rows"),
            (b"um\x00\x01", "binary file of no known kind"),
            (b"%PDF-1.7 ...", "a PDF document"),
            (b"PK\x03\x04....", "a zip archive or spreadsheet"),
            (b"\x1f\x8b\x08broken", "gzip compression is damaged"),
            (b"<!DOCTYPE html><html></html>", "a web page"),
        ],
    )
    def test_not_a_table(self, refused, content, said):
        assert said in refused(content)

    def test_missing_file_and_directory(self, tmp_path):
        with pytest.raises(InputFileError, match=r"none\.csv: There is no such file"):
            read_depth_table(tmp_path / "none.csv")
        with pytest.raises(InputFileError, match="This is a directory"):
            read_depth_table(tmp_path)

    @pytest.mark.parametrize(
        ("header", "flag"),
        [
            ("position,half_width_um,depth_ppm,err", "--wavelength-column"),
            ("wavelength_um,half_width_um,signal,err", "--depth-column"),
            ("wavelength_um,half_width_um,depth_ppm,quality", "--error-column"),
        ],
    )
    def test_unknown_column_names_the_option(self, refused, header, flag):
        message = refused(table(header=header))
        assert "was recognised; its columns are" in message
        assert flag in message

    def test_several_candidates(self, refused):
        message = refused(table([row + ",1" for row in ROWS], HEADER + ",transit_depth_ppm"))
        assert "Several columns could be the transit depth: 'depth_ppm', 'transit_depth_ppm'" in message
        assert "--depth-column" in message

    def test_bounds_in_the_error_columns(self, refused):
        rows = [f"1.{i},1000{i},10100,9900" for i in range(4)]
        message = refused(table(rows, "wl_um,depth_ppm,depth_err_up,depth_err_low"))
        assert "hold the bounds of the depth itself" in message


class TestNames:
    @pytest.mark.parametrize(
        ("name", "role", "unit"),
        [
            ("wavelength_um", "wavelength", "um"),
            ("Wavelength (microns)", "wavelength", "um"),
            ("WAVE [nm]", "wavelength", "nm"),
            ("lambda_angstrom", "wavelength", "angstrom"),
            ("λ (µm)", "wavelength", "um"),
            ("wl", "wavelength", None),
            ("Wavelength, um", "wavelength", "um"),
            ("central wavelength", "wavelength", None),
            ("wavenumber", "wavelength", "cm-1"),
            ("half_width_um", "half", "um"),
            ("halfWidth", "half", None),
            ("Wavelength Full Widths (microns)", "full", "um"),
            ("bin_width", "width", None),
            ("bandwidth_nm", "width", "nm"),
            ("dlambda", "width", None),
            ("wave_err", "width", None),
            ("wave_low_um", "low", "um"),
            ("bin upper edge (nm)", "high", "nm"),
            ("wl_max", "high", None),
            ("depth_ppm", "depth", "ppm"),
            ("Transit Depth (%)", "depth", "percent"),
            ("transit_depth", "depth", None),
            ("Transit Depth (Rp/Rs)^2", "depth", "fraction"),
            ("(Rp/R*)^2 [ppm]", "depth", "ppm"),
            ("rp/rs", "ratio", "radius-ratio"),
            ("Rp_Rs", "ratio", "radius-ratio"),
            ("segment", "segment", None),
            ("airmass", "", None),
            ("chi2", "", None),
        ],
    )
    def test_roles(self, name, role, unit):
        column = describe(name)
        assert column.role == role
        assert (standard_unit(column.unit.unit) if column.unit else None) == unit

    @pytest.mark.parametrize(
        ("name", "target", "direction"),
        [
            ("depth_err_ppm", "depth", ""),
            ("depth_err_minus_ppm", "depth", "minus"),
            ("Transit Depth Uncertainty", "depth", ""),
            ("depth_ppm_err", "depth", ""),
            ("sigma", "", ""),
            ("error (+)", "", "plus"),
            ("error-", "", "minus"),
            ("depth_errm", "depth", "minus"),
            ("rprs_err1", "ratio", "plus"),
            ("e_depth", "depth", ""),
            ("1-sigma error", "", ""),
            ("upper error", "", "plus"),
        ],
    )
    def test_errors(self, name, target, direction):
        column = describe(name)
        assert (column.role, column.target, column.direction) == ("error", target, direction)

    def test_overrides(self, read):
        text = table(header="x,y,z,w")
        spectrum = read(
            text,
            wavelength_column="x",
            width_column="Y",
            depth_column="z",
            error_column="w",
            wavelength_unit="um",
            depth_unit="ppm",
            width_kind="half",
        )
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10200, 10300])
        np.testing.assert_allclose(spectrum.half_width_um, 0.05)

    def test_override_of_a_column_that_is_not_there(self, refused):
        message = refused(table(), depth_column="D")
        assert "There is no column 'D' as --depth-column asks; its columns are 'wavelength_um'" in message


class TestImport:
    def test_astropy_is_loaded_only_to_read(self):
        code = "import sys, transit.readers; sys.exit('astropy' in sys.modules or 'pandas' in sys.modules)"
        assert subprocess.run([sys.executable, "-c", code], cwd=DATA.parents[1], check=False).returncode == 0


class TestUnits:
    def test_wavelength_unit_is_never_guessed(self, refused):
        message = refused(table(header="wave,half_width,depth_ppm,err"))
        assert "The unit of column 'wave' is not stated; its median is 1.25" in message
        assert "0.00125 um if nm" in message
        assert message.endswith("--wavelength-unit.")

    def test_depth_unit_is_never_guessed(self, refused):
        message = refused(table(header="wave_um,half_width,depth,err"), system=ROUND)
        assert "The unit of column 'depth' is not stated; its median is 10150" in message
        assert "10150 ppm if ppm" in message
        assert "10560 ppm, which agrees with ppm. Name the unit with --depth-unit." in message

    def test_explicit_unit_settles(self, read):
        text = table(header="wave,half_width,depth,err")
        spectrum = read(text, system=ROUND, wavelength_unit="um", depth_unit="ppm")
        assert spectrum.n_bins == 4

    def test_stated_unit_that_contradicts_the_system(self, refused):
        message = refused(table().replace("ppm", "pct"), system=ROUND)
        assert "read as percent (its name)" in message
        assert "more than a factor of 2 away" in message
        assert "If ppm is right, give --depth-unit ppm" in message

    def test_explicit_unit_that_contradicts_the_system(self, refused):
        message = refused(table(), system=ROUND, depth_unit="percent")
        assert "read as percent (--depth-unit)" in message
        assert "--depth-unit ppm" in message

    def test_no_unit_agrees_with_the_system(self, refused):
        message = refused(table(), system=System(1.0, 0.5, 1.0, 1000.0))
        assert "No unit agrees" in message

    def test_option_against_a_stated_unit_wins_and_is_noted(self, read):
        rows = [row.replace("10", "1.0", 1) for row in ("1.1,0.05,1,.01", "1.2,0.05,1,.01", "1.3,0.05,1,.02")]
        spectrum = read(table(rows), depth_unit="percent")
        np.testing.assert_allclose(spectrum.depth_ppm, 10000)
        np.testing.assert_allclose(spectrum.depth_err_ppm, [100, 100, 200])
        assert (
            "--depth-unit percent was used for column 'depth_ppm', although its name says 'ppm'"
            in notes_of(spectrum)
        )

    def test_unknown_header_unit(self, refused):
        message = refused(table(header="wave_um,half_width,depth [mmag],err"))
        assert "The unit of column 'depth [mmag]' is 'mmag' according to its name" in message
        assert "--depth-unit" in message

    def test_label_of_a_squared_ratio_needs_a_system(self, read, refused):
        rows = [f"1.{i},0.010{i},0.0001" for i in range(4)]
        text = table(rows, "wave_um,(Rp/Rs)^2,err")
        assert "--depth-unit" in refused(text)
        np.testing.assert_allclose(read(text, system=ROUND).depth_ppm, [10000, 10100, 10200, 10300])

    def test_radius_ratio_is_squared(self, read):
        spectrum = read(table(["1.1,0.1,0.001", "1.2,0.11,0.001", "1.3,0.12,0.001"], "wl_um,Rp/Rs,err"))
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 12100, 14400])
        np.testing.assert_allclose(spectrum.depth_err_ppm, [200, 220, 240])
        assert "squared from the radius ratio" in notes_of(spectrum)

    def test_depth_is_preferred_to_the_ratio(self, read):
        rows = [f"1.{i},0.5,1000{i},50" for i in range(4)]
        spectrum = read(table(rows, "wl_um,rprs,depth_ppm,depth_err"))
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10001, 10002, 10003])

    def test_error_in_another_unit(self, read):
        rows = [f"1.{i},1.0{i},50" for i in range(4)]
        spectrum = read(table(rows, "wl_um,depth_percent,err_ppm"))
        np.testing.assert_allclose(spectrum.depth_err_ppm, 50)
        assert "All errors in column 'err_ppm' are equal (50): probably a placeholder" in notes_of(spectrum)

    def test_wavenumbers_keep_the_edges(self, read):
        rows = [f"{nu},50,10000,5{i}" for i, nu in enumerate((8000, 8100, 8200))]
        spectrum = read(table(rows, "wavenumber,half_width,depth_ppm,err"))
        np.testing.assert_allclose(
            spectrum.wavelength_um[-1] + spectrum.half_width_um[-1], 1e4 / 7950, rtol=1e-12
        )
        np.testing.assert_allclose(
            spectrum.wavelength_um[0] - spectrum.half_width_um[0], 1e4 / 8250, rtol=1e-12
        )
        assert "falling order of wavelength" in notes_of(spectrum)

    def test_width_in_another_unit_than_the_wavelength(self, read):
        rows = [f"1.{i},100,10000,5{i}" for i in range(4)]
        spectrum = read(table(rows, "wl_um,width_nm,depth_ppm,err"))
        np.testing.assert_allclose(spectrum.half_width_um, 0.05)
        wide = [f"{nu},100,10000,5{i}" for i, nu in enumerate((8000, 7900, 7800))]
        spectrum = read(table(wide, "wavenumber,width,depth_ppm,err"))
        np.testing.assert_allclose(np.diff(spectrum.wavelength_um), [0.0160, 0.0164], atol=3e-4)

    def test_width_wider_than_the_wavenumber(self, refused):
        rows = ["8000,9000,10000,50", "7900,50,10000,50", "7800,50,10000,51"]
        message = refused(table(rows, "wavenumber,half_width,depth_ppm,err"))
        assert message.startswith("spectrum.csv, line 2: half_width is 9000 cm-1 from centre to edge")

    def test_number_format(self):
        assert [format_number(v) for v in (0.0, 1061.3, 106900.0, 1.25, 1e-9)] == [
            "0",
            "1061",
            "106900",
            "1.25",
            "1e-09",
        ]


class TestBins:
    def rows(self, width, step=0.05, n=6):
        return [f"{1 + step * i:.4f},{width},10000,5{i}" for i in range(n)]

    def test_full_and_half_width_from_the_spacing(self, read):
        header = "wl_um,width_um,depth_ppm,err"
        for width, kind in ((0.05, "full"), (0.025, "half")):
            spectrum = read(table(self.rows(width), header))
            np.testing.assert_allclose(spectrum.half_width_um, 0.025)
            assert f"Column 'width_um' was read as {kind} width" in notes_of(spectrum)

    @pytest.mark.parametrize("width", [0.005, 0.034, 0.2])
    def test_ambiguous_width(self, read, refused, width):
        text = table(self.rows(width), "wl_um,width_um,depth_ppm,err")
        message = refused(text)
        assert "Column 'width_um' may hold half or full widths" in message
        assert "--width-kind half or --width-kind full" in message
        np.testing.assert_allclose(read(text, width_kind="full").half_width_um, width / 2)

    def test_width_kind_against_the_name(self, read):
        spectrum = read(table(), width_kind="full")
        np.testing.assert_allclose(spectrum.half_width_um, 0.025)
        assert "against its name" in notes_of(spectrum)

    def test_name_against_the_spacing_is_noted(self, read):
        spectrum = read(table([row.replace("0.05", "0.1") for row in ROWS]))
        np.testing.assert_allclose(spectrum.half_width_um, 0.1)
        assert "called half width, but the spacing of the bins is 1.00 times" in notes_of(spectrum)

    def test_edges(self, read):
        rows = [f"{1 + 0.1 * i:.1f},{1.1 + 0.1 * i:.1f},10000,5{i}" for i in range(4)]
        spectrum = read(table(rows, "wave_low_um,wave_high_um,depth_ppm,err"))
        np.testing.assert_allclose(spectrum.wavelength_um, [1.05, 1.15, 1.25, 1.35])
        np.testing.assert_allclose(spectrum.half_width_um, 0.05)

    def test_reversed_edges(self, refused):
        rows = ["1.0,1.1,10000,50", "1.2,1.1,10000,50", "1.2,1.3,10000,50"]
        message = refused(table(rows, "wave_low_um,wave_high_um,depth_ppm,err"))
        assert message.startswith("spectrum.csv, line 3: wave_low_um is 1.2 and wave_high_um is 1.1")

    def test_edges_with_centres(self, read, refused):
        rows = [f"{1.05 + 0.1 * i:.2f},{1 + 0.1 * i:.1f},{1.1 + 0.1 * i:.1f},10000,5{i}" for i in range(4)]
        header = "wave,wave_low,wave_high,depth_ppm,err"
        assert read(table(rows, header), wavelength_unit="um").n_bins == 4
        rows[1] = rows[1].replace("1.15", "1.25")
        assert "line 3: wave is 1.25 um, outside its bin" in refused(
            table(rows, header), wavelength_unit="um"
        )

    def test_centres_only(self, read):
        rows = [f"{w},10000,5{i}" for i, w in enumerate((1.0, 1.1, 1.3))]
        spectrum = read(table(rows, "wl_um,depth_ppm,err"))
        # Edges 0.95, 1.05, 1.20, 1.40.
        np.testing.assert_allclose(spectrum.half_width_um, [0.05, 0.075, 0.1])
        assert "3 of 3 bins have no width" in notes_of(spectrum)

    def test_gap_does_not_widen_bins(self):
        centre = np.array([1.0, 1.1, 1.2, 2.0, 2.1, 2.2])
        filled = fill_half_widths(centre, np.full(6, np.nan), np.zeros(6, int))
        np.testing.assert_allclose(filled, 0.05)

    def test_missing_widths_use_neighbours_of_the_segment(self):
        centre = np.array([1.0, 1.05, 1.1, 1.2])
        half = np.array([np.nan, 0.01, np.nan, np.nan])
        filled = fill_half_widths(centre, half, np.array([0, 1, 0, 0]))
        np.testing.assert_allclose(filled, [0.05, 0.01, 0.05, 0.05])

    def test_spacing_needs_two_neighbours(self):
        assert np.isnan(spacing_ratio(np.array([1.0, 2.0]), np.array([0.1, 0.1]), np.zeros(2, int)))
        assert kind_from_spacing(float("nan")) is None

    def test_sorted_and_noted(self, read):
        spectrum = read(table([ROWS[2], ROWS[0], ROWS[3], ROWS[1]]))
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10200, 10300])
        assert "not in order of wavelength and were sorted" in notes_of(spectrum)

    def test_exact_duplicates(self, read):
        spectrum = read(table([*ROWS, ROWS[1], ROWS[1]]))
        assert spectrum.n_bins == 4
        assert "2 exactly repeated rows dropped" in notes_of(spectrum)

    def test_repeated_centre_and_overlap(self, read):
        spectrum = read(table([*ROWS, "1.2,0.05,10500,51"]))
        assert spectrum.n_bins == 5
        assert "1 centre wavelength repeats (1.2 um), within one segment" in notes_of(spectrum)
        assert "1 of 4 pairs of neighbouring bins overlap; the overlap fraction is 20.0 per cent" in notes_of(
            spectrum
        )

    def test_overlap_between_segments(self, read):
        rows = [f"{row},A" for row in ROWS] + ["1.4,0.05,10500,51,B", "1.5,0.05,10500,51,B"]
        spectrum = read(table(rows, HEADER + ",segment"))
        assert "segments 'A' and 'B' overlap between 1.35 and 1.45 um" in notes_of(spectrum)
        assert "in different segments" in notes_of(spectrum)
        assert "pairs of neighbouring" not in notes_of(spectrum)

    def test_gap(self, read):
        assert "1 gap wider than the bins beside: 1.45-1.95 um" in notes_of(
            read(table([*ROWS, "2.0,0.05,10500,51"]))
        )


class TestAstropyFormats:
    @pytest.fixture
    def written(self):
        from astropy.table import MaskedColumn, Table

        return Table(
            {
                "wavelength_nm": [1100.0, 1200.0, 1300.0, 1400.0],
                "half_width_nm": [50.0] * 4,
                "depth_pct": MaskedColumn([1.0, 1.01, 1.02, 1.03], mask=[False, False, True, False]),
                "error": [0.01, 0.01, 0.01, 0.02],
                "segment": ["A", "A", "B", "B"],
            }
        )

    @pytest.mark.parametrize(
        ("kind", "name"),
        [
            ("fits", "t.fits"),
            ("votable", "t.xml"),
            ("ascii.ecsv", "t.ecsv"),
            ("ascii.ipac", "t.tbl"),
            ("ascii.csv", "t.csv"),
        ],
    )
    def test_masked_cells_and_segments(self, written, tmp_path, kind, name):
        written.write(tmp_path / name, format=kind)
        spectrum = read_depth_table(tmp_path / name)
        np.testing.assert_allclose(spectrum.wavelength_um, [1.1, 1.2, 1.4])
        np.testing.assert_allclose(spectrum.half_width_um, 0.05)
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10300])
        np.testing.assert_allclose(spectrum.depth_err_ppm, [100, 100, 200])
        assert spectrum.segment_names == ("A", "B")
        assert "1 row without a value in depth_pct left out" in notes_of(spectrum)

    @pytest.mark.parametrize(
        ("kind", "name"), [("fits", "t.fits"), ("ascii.ecsv", "t.ecsv"), ("ascii.ipac", "t.tbl")]
    )
    def test_units_in_the_header(self, written, tmp_path, kind, name):
        written.rename_columns(
            ["wavelength_nm", "half_width_nm", "depth_pct"], ["wavelength", "half_width", "depth"]
        )
        for column, unit in (("wavelength", "nm"), ("half_width", "nm"), ("depth", "%")):
            written[column].unit = unit
        written.write(tmp_path / name, format=kind)
        spectrum = read_depth_table(tmp_path / name)
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10300])
        np.testing.assert_allclose(spectrum.wavelength_um, [1.1, 1.2, 1.4])

    @pytest.mark.parametrize(
        ("kind", "name", "line"), [("ascii.ecsv", "t.ecsv", 12), ("ascii.ipac", "t.tbl", 6)]
    )
    def test_bad_cell_with_its_line(self, written, tmp_path, kind, name, line):
        written.write(tmp_path / name, format=kind)
        path = tmp_path / name
        path.write_text(path.read_text().replace("1.01", "1.x1"))
        with pytest.raises(InputFileError, match=rf"{name}, line {line}: depth_pct is '1\.x1'"):
            read_depth_table(path)

    def test_bad_votable_cell(self, written, tmp_path):
        path = tmp_path / "t.xml"
        written.write(path, format="votable")
        text = path.read_text()
        line = text[: text.index("<TD>1.01</TD>")].count("\n") + 1
        path.write_text(text.replace("<TD>1.01</TD>", "<TD>1.x1</TD>"))
        with pytest.raises(InputFileError, match=rf"t\.xml, line {line}: A cell is '1\.x1'"):
            read_depth_table(path)

    def test_damaged_votable(self, written, tmp_path):
        path = tmp_path / "t.xml"
        written.write(path, format="votable")
        path.write_text(path.read_text()[:600])
        with pytest.raises(InputFileError, match=r"t\.xml: The VOTable cannot be read"):
            read_depth_table(path)

    def test_bad_ecsv_header(self, refused):
        assert "The ECSV header cannot be read" in refused("# %ECSV 1.0\n# ---\n# datatype: [\na b\n1 2\n")

    def test_bad_number_in_fits_counts_rows(self, written, tmp_path):
        written["error"][1] = -1.0
        written.write(tmp_path / "t.fits")
        with pytest.raises(InputFileError, match=r"t\.fits: row 2: error is -1, expected a positive error"):
            read_depth_table(tmp_path / "t.fits")

    def test_damaged_fits_and_image(self, written, tmp_path):
        from astropy.io import fits

        written.write(tmp_path / "t.fits")
        content = (tmp_path / "t.fits").read_bytes()
        (tmp_path / "cut.fits").write_bytes(content[: 2880 * 2 + 40])
        with pytest.raises(InputFileError, match=r"cut\.fits: The FITS file"):
            read_depth_table(tmp_path / "cut.fits")
        fits.PrimaryHDU(np.zeros((3, 3))).writeto(tmp_path / "image.fits")
        with pytest.raises(InputFileError, match="holds no table"):
            read_depth_table(tmp_path / "image.fits")

    def test_spectrum_as_one_row_of_arrays(self, tmp_path):
        from astropy.table import Table

        Table(
            {
                "wavelength_um": [[1.1, 1.2, 1.3]],
                "depth_ppm": [[10000.0, 10100.0, np.nan]],
                "err": [[50.0, 50.0, 50.0]],
            }
        ).write(tmp_path / "t.fits")
        with pytest.raises(InputFileError, match="2 usable bins are left"):
            read_depth_table(tmp_path / "t.fits")

    def test_journal_table(self, read):
        text = """Title: An invented spectrum
Authors: Nobody N.
Table: One
================================================================================
Byte-by-byte Description of file: table1.txt
--------------------------------------------------------------------------------
   Bytes Format Units  Label      Explanations
--------------------------------------------------------------------------------
   1-  6 F6.4   um     Wave       Wavelength
   8- 13 F6.4   um     HalfWidth  Half width
  15- 22 F8.2   ppm    Depth      ?=-99 Depth
  24- 28 F5.2   ppm  E_Depth      Upper error
  30- 34 F5.2   ppm  e_Depth      Lower error
--------------------------------------------------------------------------------
1.1000 0.0500 10000.00 50.00 40.00
1.2000 0.0500 10100.00 50.00 40.00
1.3000 0.0500   -99    50.00 40.00
1.4000 0.0500 10200.00 50.00 40.00
"""
        spectrum = read(text, "table1.txt")
        np.testing.assert_allclose(spectrum.depth_ppm, [10000, 10100, 10200])
        np.testing.assert_allclose(spectrum.depth_err_ppm, 45)
        bad = text.replace("10100.00", "101x0.00")
        with pytest.raises(InputFileError, match=r"table1\.txt, line 16: Depth is '101x0\.00'"):
            read(bad, "table1.txt")


class TestArchiveExcerpts:
    """Excerpts of real files; sources are listed in tests/data/README.md."""

    @pytest.mark.parametrize("system", [None, WASP_39])
    def test_nircam_as_downloaded(self, system):
        # Ahrer et al. 2023, Nature 614, 653.
        spectrum = read_depth_table(DATA / "archive_spectrum_nircam_excerpt.tbl", system=system)
        assert spectrum.n_bins == 8
        np.testing.assert_allclose(spectrum.wavelength_um[:2], [2.4275, 2.4425])
        np.testing.assert_allclose(spectrum.half_width_um, 0.0075)
        np.testing.assert_allclose(spectrum.depth_ppm[:2], [21211.8, 20998.0])
        np.testing.assert_allclose(spectrum.depth_err_ppm[:2], [184.5, 156.0])
        assert "Ahrer-et-al.-2022" in spectrum.source
        assert "Column 'BANDWIDTH' was read as full width" in notes_of(spectrum)

    def test_wfc3_as_downloaded(self):
        # Wakeford et al. 2018, AJ 155, 29.
        spectrum = read_depth_table(DATA / "archive_spectrum_wfc3_excerpt.tbl", system=WASP_39)
        np.testing.assert_allclose(spectrum.half_width_um, 0.0093)
        np.testing.assert_allclose(spectrum.depth_ppm[0], 21219.7)

    def test_author_names_with_blanks(self, read):
        text = (DATA / "archive_spectrum_nircam_excerpt.tbl").read_text()
        assert read(text.replace("Ahrer-et-al.-2022 https", "Ahrer et al. 2022 https"), "a.tbl").n_bins == 8

    def test_bad_cell_in_an_archive_file(self, refused):
        text = (DATA / "archive_spectrum_nircam_excerpt.tbl").read_text().replace("2.09980", "2.0x980")
        assert refused(text, "a.tbl").startswith("a.tbl, line 14: PL_TRANDEP is '2.0x980'")

    def test_null_cells_and_limits(self, read):
        lines = (DATA / "archive_spectrum_nircam_excerpt.tbl").read_text().splitlines()
        lines[13] = lines[13].replace("2.09980", "   null")
        lines[14] = lines[14].replace("-0.01547             0", "-0.01547             1")
        spectrum = read("\n".join(lines), "a.tbl")
        assert spectrum.n_bins == 6
        assert "1 row without a value in PL_TRANDEP left out" in notes_of(spectrum)
        assert "1 row left out as limits" in notes_of(spectrum)

    def test_eclipse_is_refused(self, refused):
        text = (DATA / "archive_spectrum_nircam_excerpt.tbl").read_text()
        assert "SPEC_TYPE = Eclipse" in refused(text.replace("= Transmission", "= Eclipse"), "a.tbl")

    def test_other_planet_than_the_system_is_noted(self):
        spectrum = read_depth_table(
            DATA / "archive_spectrum_nircam_excerpt.tbl",
            system=System(0.918, 1.332, 0.28, 1166.0, planet_name="HD 1 b"),
        )
        assert "The table is of 'WASP-39 b', but the system file is of 'HD 1 b'." in spectrum.notes

    def test_mislabelled_percent(self):
        # Lustig-Yaeger & Fu et al. 2023, Nature Astronomy 7, 1317: labelled (Rp/Rs)^2, holds per cent.
        path = DATA / "authors_percent_excerpt.ecsv"
        with pytest.raises(InputFileError) as caught:
            read_depth_table(path, system=LHS_475)
        for part in ("'Transit Depth (Rp/Rs)^2'", "1061 ppm", "if percent", "--depth-unit percent"):
            assert part in str(caught.value)
        with pytest.raises(InputFileError, match="--depth-unit"):
            read_depth_table(path)
        with pytest.raises(InputFileError, match=r"read as ppm \(--depth-unit\)"):
            read_depth_table(path, system=LHS_475, options=ReadOptions(depth_unit="ppm"))
        spectrum = read_depth_table(path, system=LHS_475, options=ReadOptions(depth_unit="percent"))
        np.testing.assert_allclose(spectrum.depth_ppm[0], 1120.803859)
        np.testing.assert_allclose(spectrum.half_width_um[0], 0.0200385)

    def test_many_planets(self):
        # Sing et al. 2013, MNRAS 436, 2956; Kreidberg et al. 2014, Nature 505, 69.
        path = DATA / "archive_all_planets_excerpt.csv"
        with pytest.raises(InputFileError, match=r"'GJ 1214 b', 'WASP-12 b'\. Choose one with --planet"):
            read_depth_table(path)
        with pytest.raises(InputFileError, match=r"--planet is 'WASP-13 b', but column 'plntname' holds"):
            read_depth_table(path, options=ReadOptions(planet="WASP-13 b"))
        gj_1214 = read_depth_table(path, options=ReadOptions(planet="gj1214b"))
        np.testing.assert_allclose(gj_1214.depth_ppm[0], 13495.0)
        wasp_12 = read_depth_table(path, system=WASP_12, options=ReadOptions(planet="WASP-12 b"))
        assert wasp_12.source == "archive_all_planets_excerpt.csv (Sing et al. 2013)"
        np.testing.assert_allclose(wasp_12.depth[0], 0.12135**2)
        assert wasp_12.segment_names == (
            "Space Telescope Imaging Spectrograph",
            "Infrared Array Camera (IRAC)",
        )
        assert "2 of 7 bins have no width" in notes_of(wasp_12)

    def test_several_references(self, read, refused):
        text = (DATA / "archive_all_planets_excerpt.csv").read_text().replace("GJ 1214 b", "WASP-12 b")
        message = refused(text)
        assert "'Kreidberg et al. 2014', 'Sing et al. 2013'. Choose with --reference" in message
        assert read(text, reference="KREIDBERG").source == "spectrum.csv (Kreidberg et al. 2014)"
        assert "Several references are left" in refused(text, reference="et al")
        assert "--reference is 'Nobody'" in refused(text, reference="Nobody")

    def test_planet_option_without_a_planet(self, refused):
        assert "the table names no planets" in refused(table(), planet="X b")
        assert "header says that the planet is 'Y b'" in refused("# planet: Y b\n" + table(), planet="X b")


class TestOptions:
    @pytest.mark.parametrize(
        ("name", "value"),
        [("wavelength_unit", "micron"), ("depth_unit", "%"), ("width_kind", "double"), ("planet", " ")],
    )
    def test_refused(self, name, value):
        with pytest.raises(SettingError, match="--" + name.replace("_", "-")):
            ReadOptions(**{name: value})


# --- properties -------------------------------------------------------------------------------------------

_SETTINGS = settings(
    max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)


@st.composite
def spectra(draw):
    n = draw(st.integers(3, 12))
    steps = draw(st.lists(st.floats(0.01, 0.2), min_size=n, max_size=n))
    centre = np.round(0.5 + np.cumsum(steps), 5)
    half = np.round(draw(st.lists(st.floats(0.004, 0.1), min_size=n, max_size=n)), 6)
    depth = np.array(draw(st.lists(st.floats(0.005, 0.02), min_size=n, max_size=n)))
    err = np.array(draw(st.lists(st.floats(1e-5, 1e-3), min_size=n, max_size=n)))
    return centre, half, depth, err


def as_csv(spectrum, wave="um", depth_unit="ppm", order=None):
    """Write a spectrum as an observer would, in these units."""
    centre, half, depth, err = spectrum
    per_um = {"um": 1.0, "nm": 1e3, "angstrom": 1e4}[wave]
    if depth_unit == "rp/rs":
        depth, err = np.sqrt(depth), err / (2 * np.sqrt(depth))
    else:
        scale = {"ppm": 1e6, "percent": 1e2, "fraction": 1.0}[depth_unit]
        depth, err = depth * scale, err * scale
    columns = (centre * per_um, half * per_um, depth, err)
    name = "rp/rs" if depth_unit == "rp/rs" else f"depth_{depth_unit}"
    lines = [
        ",".join(repr(float(c[i])) for c in columns) for i in (range(len(depth)) if order is None else order)
    ]
    return "\n".join([f"wavelength_{wave},half_width_{wave},{name},error", *lines])


def assert_same(first, second, rtol=0.0):
    for name in ("wavelength_um", "half_width_um", "depth", "depth_err", "segment"):
        np.testing.assert_allclose(getattr(first, name), getattr(second, name), rtol=rtol, err_msg=name)


class TestProperties:
    @_SETTINGS
    @given(spectrum=spectra(), random=st.randoms(use_true_random=False))
    def test_row_order_changes_nothing(self, read, spectrum, random):
        order = list(range(len(spectrum[0])))
        random.shuffle(order)
        assert_same(read(as_csv(spectrum)), read(as_csv(spectrum, order=order)))

    @_SETTINGS
    @given(
        spectrum=spectra(),
        wave=st.sampled_from(["um", "nm", "angstrom"]),
        depth_unit=st.sampled_from(["ppm", "percent", "fraction", "rp/rs"]),
    )
    def test_unit_changes_commute(self, read, spectrum, wave, depth_unit):
        assert_same(read(as_csv(spectrum)), read(as_csv(spectrum, wave, depth_unit)), rtol=1e-12)

    @_SETTINGS
    @given(spectrum=spectra())
    def test_write_and_read_is_the_identity(self, read, spectrum):
        found = read(as_csv(spectrum, depth_unit="fraction"))
        for array, expected in zip(
            (found.wavelength_um, found.half_width_um, found.depth, found.depth_err), spectrum, strict=True
        ):
            np.testing.assert_array_equal(array, expected)

    @_SETTINGS
    @given(text=st.text(max_size=200))
    def test_any_text_is_read_or_refused(self, read, text):
        with suppress(InputFileError):
            read(text.encode("utf-8", "replace"))

    @_SETTINGS
    @given(
        cells=st.lists(
            st.sampled_from(["1", "1,5", "x", "", '"', ";", "#", "|", "um", "\t", "e"]), max_size=30
        )
    )
    def test_any_cells_are_read_or_refused(self, read, cells):
        with suppress(InputFileError):
            read(HEADER + "\n" + ",".join(cells).replace(",;", "\n"))

    @given(value=st.floats(allow_nan=False, allow_infinity=False))
    def test_numbers_survive(self, value):
        assert parse_number(repr(value)) == value

    def test_missing_marks_of_numbers(self):
        assert is_missing(float("nan"))
        assert is_missing(None)
        assert is_missing("-99.00", frozenset({"-99"}))
        assert not is_missing("-99")
