"""System files: what is accepted, what is computed, and the sentence for everything refused."""

from __future__ import annotations

import dataclasses
import re
import stat
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from transit.errors import OutputError, SystemFileError
from transit.records import Priors, System
from transit.system import read_system, write_new_system
from transit.thresholds import Thresholds, source_of

STAR = {"radius_rsun": "0.918"}
PLANET = {"radius_rjup": "1.332", "mass_mjup": "0.28", "equilibrium_temperature_k": "1166"}


@pytest.fixture
def read(tmp_path):
    """Write `[star]`, `[planet]` and `[priors]` from dictionaries of TOML values, and read the file."""

    def write_and_read(star=None, planet=None, priors=None, without=(), thresholds=None):
        tables = {
            "star": {**STAR, **(star or {})},
            "planet": {**PLANET, **(planet or {})},
            "priors": priors or {},
            "thresholds": thresholds or {},
        }
        text = ""
        for name, values in tables.items():
            text += f"[{name}]\n" + "".join(f"{k} = {v}\n" for k, v in values.items() if k not in without)
        return read_text(tmp_path, text)

    return write_and_read


def read_text(tmp_path, text):
    path = tmp_path / "target.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_system(path)


@pytest.fixture
def refused(read):
    """Return the message of a system that must be refused, without the directory."""

    def message(*args, **kwargs):
        with pytest.raises(SystemFileError) as caught:
            read(*args, **kwargs)
        return str(caught.value)[str(caught.value).index("target.toml") :]

    return message


class TestAccepted:
    def test_smallest_file(self, read):
        system = read()
        assert system == System(0.918, 1.332, 0.28, 1166.0, source="target.toml")

    def test_all_keys(self, read):
        system = read(
            {"teff_k": "5485", "j_mag": "10.663", "teff_k_err": "50"},
            {
                "name": '"WASP-39 b"',
                "semi_major_axis_au": "0.0486",
                "period_d": "4.055284",
                "background": '"N2"',
                "mass_mjup_err": "0.03",
            },
        )
        assert system.star_teff_k == 5485
        assert system.star_j_mag == 10.663
        assert system.planet_name == "WASP-39 b"
        assert system.period_d == 4.055284
        assert system.background == "N2"
        assert dict(system.errors) == {"star_teff_k": 50.0, "planet_mass_mjup": 0.03}

    def test_earth_units_are_converted_with_their_errors(self, read):
        earth = {"radius_rearth": "2.742", "mass_mearth": "8.17", "mass_mearth_err": "0.43"}
        system = read({"radius_rsun": "0.215"}, earth, without=("radius_rjup", "mass_mjup"))
        assert system.planet_radius_rjup == pytest.approx(2.742 * 6.3781e6 / 7.1492e7)
        assert system.planet_mass_mjup == pytest.approx(8.17 * 5.97217e24 / 1.89812e27)
        assert dict(system.errors)["planet_mass_mjup"] == pytest.approx(0.43 * 5.97217e24 / 1.89812e27)
        assert any("radius_rearth = 2.742 was converted" in note for note in system.notes)

    def test_temperature_is_computed_and_said(self, read):
        # The Earth for albedo 0: 278.33 K.
        system = read(
            {"radius_rsun": "1.0", "teff_k": "5772"},
            {"radius_rearth": "1", "mass_mearth": "1", "semi_major_axis_au": "1"},
            without=("radius_rjup", "mass_mjup", "equilibrium_temperature_k"),
        )
        assert system.equilibrium_temperature_k == pytest.approx(278.3, abs=0.1)
        assert any("albedo 0 and full redistribution" in note for note in system.notes)

    def test_priors(self, read):
        priors = read(
            priors={
                "temperature_k": "[500, 1500]",
                "log10_vmr_H2O": "[-8, -2]",
                "log10_vmr_CO2": "[-9, 0]",
                "radius_fraction": "0.5",
                "offset_ppm": "50",
            }
        ).priors
        assert priors == Priors(
            temperature_k=(500.0, 1500.0),
            log10_vmr_species=(("CO2", -9.0, 0.0), ("H2O", -8.0, -2.0)),
            radius_fraction=0.5,
            offset_ppm=50.0,
        )

    def test_priors_of_rivals_and_of_what_may_vary(self, read):
        priors = read(
            priors={
                "step_ppm": "200",
                "outlier_ppm": "400.0",
                "bump_scale_heights": "5",
                "spot_fraction": "[0, 0.3]",
                "spot_contrast_k": "[-900, -100]",
                "facula_fraction": "[0.1, 1]",
                "facula_contrast_k": "[0, 200]",
                "cloud_fraction": "[0.2, 0.8]",
                "ar1_coefficient": "[0, 0.99]",
            }
        ).priors
        assert priors == Priors(
            step_ppm=200.0,
            outlier_ppm=400.0,
            bump_scale_heights=5.0,
            spot_fraction=(0.0, 0.3),
            spot_contrast_k=(-900.0, -100.0),
            facula_fraction=(0.1, 1.0),
            facula_contrast_k=(0.0, 200.0),
            cloud_fraction=(0.2, 0.8),
            ar1_coefficient=(0.0, 0.99),
        )

    def test_thresholds(self, read):
        assert read().thresholds == Thresholds()
        thresholds = read(
            thresholds={"present_ln_b": "6", "hint_ln_b": "3.5", "poor_fit_p": "0.01"}
        ).thresholds
        assert thresholds == Thresholds(present_ln_b=6.0, hint_ln_b=3.5, poor_fit_p=0.01)

    def test_byte_order_mark_and_windows_line_ends(self, tmp_path):
        text = "[star]\r\nradius_rsun = 0.9\r\n[planet]\r\n" + "".join(
            f"{k} = {v}\r\n" for k, v in PLANET.items()
        )
        assert read_text(tmp_path, b"\xef\xbb\xbf" + text.encode()).star_radius_rsun == 0.9


class TestRefusedKeys:
    @pytest.mark.parametrize(
        ("table", "key", "said"),
        [
            ("star", "radius_sun", "Unknown key 'radius_sun' in [star]. Did you mean 'radius_rsun'?"),
            ("planet", "Radius_Rjup", "Did you mean 'radius_rjup'?"),
            ("planet", "teff_k", "Unknown key 'teff_k' in [planet]. It belongs under [star]."),
            ("star", "zzz", "Unknown key 'zzz' in [star]. Known are: radius_rsun, teff_k"),
            ("priors", "temperature", "Unknown key 'temperature' in [priors]. Did you mean 'temperature_"),
            ("priors", "log10_vmr_species", "Unknown key 'log10_vmr_species' in [priors]"),
            ("priors", "log10_vmr_h2o", "Did you mean 'log10_vmr_H2O'?"),
            ("priors", "spot_fracton", "Did you mean 'spot_fraction'?"),
            (
                "thresholds",
                "present_lnb",
                "Unknown key 'present_lnb' in [thresholds]. Did you mean 'present_ln_b'?",
            ),
            ("priors", "hint_ln_b", "It belongs under [thresholds]."),
        ],
    )
    def test_unknown(self, refused, table, key, said):
        assert said in refused(**{table: {key: "1.0"}})

    def test_key_outside_a_table(self, tmp_path):
        with pytest.raises(
            SystemFileError, match=r"'radius_rsun' at the top level\. It belongs under \[star\]"
        ):
            read_text(tmp_path, "radius_rsun = 1.0\n")
        with pytest.raises(SystemFileError, match="Did you mean 'planet'"):
            read_text(tmp_path, "[planets]\n")
        with pytest.raises(SystemFileError, match=r"star is 1, expected a table that begins with \[star\]"):
            read_text(tmp_path, "star = 1\n")

    def test_missing_table(self, tmp_path):
        with pytest.raises(SystemFileError, match=r"The table \[planet\] is missing"):
            read_text(tmp_path, "[star]\nradius_rsun = 1.0\n")

    @pytest.mark.parametrize(
        ("key", "said"),
        [
            ("radius_rsun", "[star] radius_rsun is missing"),
            ("radius_rjup", "The radius of the planet is missing; add [planet] radius_rjup or radius_rearth"),
            ("mass_mjup", "The mass of the planet is missing; add [planet] mass_mjup or mass_mearth"),
            ("equilibrium_temperature_k", "or both [star] teff_k and [planet] semi_major_axis_au"),
        ],
    )
    def test_missing_value(self, refused, key, said):
        assert said in refused(without=(key,))

    @pytest.mark.parametrize(
        ("planet", "said"),
        [
            ({"radius_rearth": "3"}, "radius_rjup and radius_rearth are both given and differ"),
            ({"radius_rearth": "14.93"}, "radius_rjup and radius_rearth are both given; keep one"),
            ({"mass_mearth": "1"}, "mass_mjup and mass_mearth are both given and differ"),
        ],
    )
    def test_contradictory_pairs(self, refused, planet, said):
        assert said in refused(planet=planet)


class TestRefusedValues:
    @pytest.mark.parametrize(
        ("table", "key", "value"),
        [
            ("star", "radius_rsun", "0"),
            ("star", "radius_rsun", "-1.0"),
            ("star", "radius_rsun", "nan"),
            ("star", "radius_rsun", "inf"),
            ("star", "radius_rsun", "true"),
            ("star", "radius_rsun", '"0.9"'),
            ("star", "radius_rsun", "[0.9]"),
            ("star", "radius_rsun", "101"),
            ("star", "teff_k", "1000"),
            ("star", "teff_k", "60000"),
            ("planet", "radius_rjup", "0"),
            ("planet", "mass_mjup", "-0.3"),
            ("planet", "equilibrium_temperature_k", "20"),
            ("planet", "equilibrium_temperature_k", "6000"),
            ("planet", "semi_major_axis_au", "0"),
            ("planet", "period_d", "-4"),
            ("planet", "name", "39"),
            ("planet", "name", '" "'),
            ("planet", "background", '"H2"'),
            ("planet", "background", "2"),
        ],
    )
    def test_value_is_named(self, refused, table, key, value):
        assert f"[{table}] {key} is " in refused(**{table: {key: value}})

    @pytest.mark.parametrize("value", ["0", "-0.1", "nan", "true", '"0.1"'])
    def test_error_must_be_positive(self, refused, value):
        assert "[planet] mass_mjup_err is " in refused(planet={"mass_mjup_err": value})

    def test_error_without_its_value(self, refused):
        assert "teff_k_err is given without teff_k" in refused({"teff_k_err": "50"})

    def test_planet_larger_than_star(self, refused):
        assert "larger than the star" in refused({"radius_rsun": "0.1"}, {"radius_rjup": "2.0"})

    @pytest.mark.parametrize("mass", ["0.003", "90"])
    def test_gravity(self, refused, mass):
        planet = {"mass_mjup": mass, "radius_rjup": "1.332" if mass == "0.003" else "0.5"}
        assert "expected 0.5 to 2000 m/s2" in refused(planet=planet)

    def test_orbit_inside_the_star(self, refused):
        message = refused(
            {"teff_k": "5485"}, {"semi_major_axis_au": "0.002"}, without=("equilibrium_temperature_k",)
        )
        assert "semi_major_axis_au is 0.002, inside the star" in message

    def test_computed_temperature_out_of_range(self, refused):
        message = refused(
            {"teff_k": "5485"}, {"semi_major_axis_au": "900"}, without=("equilibrium_temperature_k",)
        )
        assert "give an equilibrium temperature of" in message

    @pytest.mark.parametrize(
        ("key", "value", "said"),
        [
            ("log10_vmr", "[-1, -12]", "expected the lower bound before and below"),
            ("log10_vmr", "[-2, -2]", "expected the lower bound before and below"),
            ("log10_vmr", "[-12, nan]", "expected two finite numbers"),
            ("log10_vmr", "-3", "expected two finite numbers"),
            ("log10_vmr", "[-12, -6, -1]", "expected two finite numbers"),
            ("log10_vmr", '["a", "b"]', "expected two finite numbers"),
            ("log10_vmr", "[-12, 0.5]", "expected an upper bound of at most 0"),
            ("log10_vmr_H2O", "[-12, 1]", "expected an upper bound of at most 0"),
            ("temperature_teq", "[0, 1.2]", "expected positive bounds"),
            ("error_factor", "[-1, 2]", "expected positive bounds"),
            ("radius_fraction", "0.6", "more than 0 and at most 0.5"),
            ("radius_fraction", "0", "expected a positive number"),
            ("offset_ppm", "true", "expected a positive number"),
            ("slope_scale_heights", "[1, 2]", "expected a positive number"),
        ],
    )
    def test_priors(self, refused, key, value, said):
        message = refused(priors={key: value})
        assert f"[priors] {key} is " in message
        assert said in message

    @pytest.mark.parametrize(
        ("key", "value", "said"),
        [
            ("step_ppm", "0", "expected a positive number"),
            ("outlier_ppm", "[0, 500]", "expected a positive number"),
            ("bump_scale_heights", "-3", "expected a positive number"),
            ("spot_fraction", "[0, 1.2]", "expected bounds from 0 to 1"),
            ("facula_fraction", "[-0.1, 0.5]", "expected bounds from 0 to 1"),
            ("cloud_fraction", "0.5", "expected two finite numbers"),
            ("spot_contrast_k", "[-500, 100]", "expected bounds from -5000 to 0"),
            ("facula_contrast_k", "[-100, 300]", "expected bounds from 0 to 5000"),
            ("ar1_coefficient", "[0, 1]", "expected bounds from 0 to 0.99"),
            ("ar1_coefficient", "[-0.5, 0.5]", "expected bounds from 0 to 0.99"),
            ("ar1_coefficient", "[0.5, 0.5]", "expected the lower bound before and below"),
        ],
    )
    def test_priors_of_rivals(self, refused, key, value, said):
        message = refused(priors={key: value})
        assert f"[priors] {key} is " in message
        assert said in message

    @pytest.mark.parametrize(
        ("key", "value", "said"),
        [
            ("present_ln_b", '"5"', "expected a finite number from 0 to 100"),
            ("present_ln_b", "true", "expected a finite number from 0 to 100"),
            ("present_ln_b", "nan", "expected a finite number from 0 to 100"),
            ("present_ln_b", "inf", "expected a finite number from 0 to 100"),
            ("present_ln_b", "[5, 6]", "expected a finite number from 0 to 100"),
            ("present_ln_b", "2.4", "below hint_ln_b (2.5)"),
            ("hint_ln_b", "-0.1", "expected a finite number from 0 to 100"),
            ("poor_fit_p", "1.1", "expected a finite number from 0 to 1"),
            ("sensitivity_chance", "1", "expected a finite number from 0.01 to 0.99"),
            ("sensitivity_scale_heights", "0", "expected a finite number from 0.1 to 100"),
        ],
    )
    def test_thresholds(self, refused, key, value, said):
        message = refused(thresholds={key: value})
        assert message.startswith(
            "target.toml: [thresholds] present_ln_b"
            if "hint_ln_b (" in said
            else f"target.toml: [thresholds] {key} is "
        )
        assert said in message

    def test_two_temperature_priors(self, refused):
        priors = {"temperature_k": "[500, 900]", "temperature_teq": "[0.5, 1.2]"}
        assert "temperature_k and temperature_teq are both given" in refused(priors=priors)


class TestRefusedFiles:
    def test_syntax_error_with_its_line(self, tmp_path):
        with pytest.raises(SystemFileError, match=r"target\.toml, line 2: The TOML syntax is wrong"):
            read_text(tmp_path, "[star]\nradius_rsun = 0,918\n[planet]\n")

    def test_unfinished_text_names_the_last_line(self, tmp_path):
        with pytest.raises(SystemFileError, match=r"target\.toml, line 2: The TOML syntax is wrong"):
            read_text(tmp_path, '[planet]\nname = """X')

    def test_key_given_twice(self, tmp_path):
        with pytest.raises(SystemFileError, match=r"target\.toml, line 3: The TOML syntax is wrong"):
            read_text(tmp_path, "[star]\nradius_rsun = 1\nradius_rsun = 2\n")

    @pytest.mark.parametrize("content", [b"", b" \n", b"\xff\xfe\x00", b"\x00\x01"])
    def test_empty_or_binary(self, tmp_path, content):
        with pytest.raises(SystemFileError, match=r"target\.toml"):
            read_text(tmp_path, content)

    def test_missing_and_directory(self, tmp_path):
        with pytest.raises(SystemFileError, match=r"none\.toml: There is no such file.*leadline new-system"):
            read_system(tmp_path / "none.toml")
        with pytest.raises(SystemFileError, match="This is a directory"):
            read_system(tmp_path)


class TestTemplate:
    def test_is_accepted_as_written(self, tmp_path):
        path = write_new_system(tmp_path / "new.toml")
        system = read_system(path)
        assert system.planet_name.startswith("Invented")
        assert system.priors == Priors()
        assert system.notes == ()

    def test_every_optional_line_is_accepted(self, tmp_path):
        text = write_new_system(tmp_path / "new.toml").read_text()
        lines = [
            line[2:]
            if line.startswith("# ") and " = " in line and not line.startswith("# temperature_teq")
            else line
            for line in text.splitlines()
        ]
        system = read_text(tmp_path, "\n".join(lines))
        assert system.star_teff_k is not None
        assert system.thresholds == Thresholds()
        assert system.priors == Priors(
            temperature_k=(500.0, 1300.0), log10_vmr_species=(("H2O", -8.0, -2.0),)
        )

    def test_names_every_threshold(self, tmp_path):
        text = write_new_system(tmp_path / "new.toml").read_text()
        for field in dataclasses.fields(Thresholds):
            assert f"# {field.name} = {field.default}\n" in text

    def test_invented_numbers_agree_with_each_other(self, tmp_path):
        text = write_new_system(tmp_path / "new.toml").read_text()
        text = text.replace("equilibrium_temperature_k = ", "# ").replace("# teff_k", "teff_k")
        computed = read_text(tmp_path, text.replace("# semi_major", "semi_major")).equilibrium_temperature_k
        assert computed == pytest.approx(1060.0, rel=0.02)

    def test_refuses_to_overwrite(self, tmp_path):
        path = tmp_path / "new.toml"
        path.write_text("mine")
        with pytest.raises(OutputError, match=r"new\.toml is already there; .* --force"):
            write_new_system(path)
        assert path.read_text() == "mine"
        write_new_system(path, force=True)
        assert read_system(path).star_radius_rsun == 0.87
        assert [p.name for p in tmp_path.iterdir()] == ["new.toml"]

    def test_permissions_are_those_of_an_ordinary_file(self, tmp_path):
        other = tmp_path / "other"
        other.write_text("")
        path = write_new_system(tmp_path / "new.toml")
        assert stat.S_IMODE(path.stat().st_mode) == stat.S_IMODE(other.stat().st_mode)

    def test_directory_and_missing_directory(self, tmp_path):
        with pytest.raises(OutputError, match="is a directory"):
            write_new_system(tmp_path)
        with pytest.raises(OutputError, match="cannot be written"):
            write_new_system(tmp_path / "none" / "new.toml")


def test_documented_thresholds_are_those_of_the_program():
    text = (Path(__file__).parents[2] / "docs/method.md").read_text()
    rows = re.findall(r"^\| `(\w+)` \| ([-\d.e]+) \| [^|]+ \| ([^|]+) \|$", text, re.MULTILINE)
    documented = {name: (float(value), source) for name, value, source in rows}
    actual = {f.name: (f.default, source_of(f.name)) for f in dataclasses.fields(Thresholds)}
    assert documented == actual


_SETTINGS = settings(
    max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)


class TestProperties:
    @_SETTINGS
    @given(
        star=st.floats(0.3, 50.0),
        radius=st.floats(0.1, 2.0),
        gravity_share=st.floats(0.2, 20.0),
        temperature=st.floats(30.0, 5000.0),
    )
    def test_write_and_read_is_the_identity(self, read, star, radius, gravity_share, temperature):
        mass = gravity_share * radius**2  # keeps the gravity between 5 and 500 m/s2
        system = read(
            {"radius_rsun": repr(star)},
            {
                "radius_rjup": repr(radius),
                "mass_mjup": repr(mass),
                "equilibrium_temperature_k": repr(temperature),
            },
        )
        assert (system.star_radius_rsun, system.planet_radius_rjup) == (star, radius)
        assert (system.planet_mass_mjup, system.equilibrium_temperature_k) == (mass, temperature)
