import dataclasses
import json
import os

import numpy as np
import pytest
from synthetic import (
    LN_EVIDENCE_LEVEL,
    check_result,
    false_alarms_record,
    fit_record,
    rival_record,
    sensitivity_record,
    spectrum_record,
)

from transit import writers
from transit.errors import OutputError
from transit.report import summary
from transit.thresholds import Thresholds
from transit.writers import FILE_NAMES, check_output_dir, result_document, write_result

TOP_KEYS = [
    "format",
    "program",
    "spectrum",
    "system",
    "settings",
    "hypotheses",
    "comparisons",
    "rivals",
    "with_star",
    "false_alarms",
    "sensitivity",
    "verdict",
    "warnings",
]
HYPOTHESIS_KEYS = {
    "name",
    "species",
    "n_free",
    "ln_evidence",
    "ln_evidence_err",
    "chi2",
    "dof",
    "p_chi2",
    "bic",
    "parameters",
    "model",
    "sampling",
}


def names_in(folder):
    return sorted(path.name for path in folder.iterdir())


# --- the document


def test_document_has_the_agreed_names():
    document = result_document(check_result(("H2O", "CO2")))
    assert list(document) == TOP_KEYS
    assert document["format"] == "leadline-check-2"
    assert set(document["program"]) == {"name", "version", "python", "packages"}
    assert set(document["spectrum"]) == {
        "file",
        "sha256",
        "n_bins",
        "wavelength_um",
        "half_width_um",
        "depth_ppm",
        "depth_err_ppm",
        "segment",
        "notes",
    }
    assert all(set(entry) == HYPOTHESIS_KEYS for entry in document["hypotheses"])
    assert set(document["hypotheses"][0]["model"]) == {"unit", "median", "lower", "upper"}
    assert set(document["verdict"]) == {"feature", "species", "sentence"}
    assert document["system"]["scale_height_km"] == 610.0
    assert document["system"]["priors"]["log10_vmr"] == [-12.0, -1.0]
    assert [c["kind"] for c in document["comparisons"]] == ["alone"] * 6 + ["left_out"] * 2 + ["feature"]


def test_document_survives_json():
    document = result_document(check_result(("H2O", "CO2"), ln_evidences_inflated={"H2O": 3.0}))
    assert json.loads(json.dumps(document, allow_nan=False)) == document


def test_values_are_those_of_the_result():
    result = check_result(spectrum=spectrum_record(wide_points_um=((3.6, 0.4),)))
    document = result_document(result)
    np.testing.assert_array_equal(document["spectrum"]["depth_ppm"], result.spectrum.depth_ppm)
    assert document["spectrum"]["segment"][-1] == "point 1"
    np.testing.assert_allclose(
        np.array(document["hypotheses"][0]["model"]["median"]) * 1e-6, result.fits[0].model_median, rtol=1e-12
    )
    assert document["verdict"]["sentence"] == result.verdict.sentence


def test_inflated_fits_only_where_there_are_some():
    assert "inflated" not in result_document(check_result())["hypotheses"][0]
    entry = result_document(check_result(ln_evidences_inflated={"H2O": 3.0}))["hypotheses"][3]
    assert entry["inflated"]["ln_evidence"] == pytest.approx(203.0)
    assert entry["inflated"]["error_factor"] == {"median": 1.4, "lower": 1.2, "upper": 1.7}


def result_with_everything():
    return check_result(
        ("H2O", "CO2"),
        ln_evidences_inflated={"H2O": 6.0},
        rivals=(
            rival_record("star", LN_EVIDENCE_LEVEL + 1.0, LN_EVIDENCE_LEVEL + 0.5, chi2=33.0),
            rival_record("bump", LN_EVIDENCE_LEVEL, counts={"H2O": False, "CO2": True}),
            rival_record("one-bin", LN_EVIDENCE_LEVEL, species="CO2"),
        ),
        false_alarms=false_alarms_record({"H2O": 1e-3, "CO2": 0.2}, 2e-3, {"H2O": 0.03}),
        sensitivity={"H2O": sensitivity_record(1.2), "CO2": sensitivity_record(None)},
        thresholds=Thresholds(hint_ln_b=3.0),
    )


def test_rivals_chances_and_sensitivity_are_written():
    document = result_document(result_with_everything())
    assert list(document) == TOP_KEYS
    assert document["settings"]["thresholds"]["hint_ln_b"] == 3.0
    star, bump, one_bin = document["rivals"]
    assert (star["name"], star["base"], star["species"]) == ("star", "null", None)
    assert star["ln_evidence_inflated"] == pytest.approx(LN_EVIDENCE_LEVEL + 0.5)
    assert star["parameters"]["amplitude_ppm"]["unit"] == "ppm"
    assert bump["counts"] == {"H2O": False, "CO2": True}
    assert (one_bin["base"], one_bin["ln_evidence_inflated"]) == ("all-CO2", None)
    assert document["sensitivity"]["H2O"]["amplitude_scale_heights"] == 1.2
    assert document["sensitivity"]["CO2"]["amplitude_scale_heights"] is None
    alarms = document["false_alarms"]
    assert len(alarms["p_best_of_n"]) == len(alarms["ln_bayes_factor"]) == len(alarms["p_named"]["H2O"])
    assert set(alarms["observed"]) == {"H2O", "CO2", "best"}
    assert alarms["left_out"]["H2O"]["p_named"] == 0.03


def test_comparisons_hold_chances_and_rivals():
    document = result_document(result_with_everything())
    entries = document["comparisons"]
    assert [c["kind"] for c in entries] == ["alone"] * 6 + ["left_out"] * 2 + ["feature"] + ["rival"] * 7
    named = next(c for c in entries if c["kind"] == "alone" and c["species"] == "H2O" and c["best_null"])
    assert (named["p_named"], named["p_best_of_n"], named["p_null"]["slope"]) == (1e-3, 2e-3, 1e-3)
    bumps = {c["species"]: c["counts"] for c in entries if c["kind"] == "rival" and c["against"] == "bump"}
    assert bumps == {"H2O": False, "CO2": True, None: False}
    without_chi2 = next(c for c in entries if c["against"] == "bump")
    assert without_chi2["delta_chi2"] is None
    assert json.loads(json.dumps(document, allow_nan=False)) == document


def test_fits_with_a_star_are_written(tmp_path):
    result = dataclasses.replace(
        check_result(), with_star=(fit_record("star+H2O", ("H2O",), 209.0, n_bins=28),)
    )
    assert [entry["name"] for entry in result_document(result)["with_star"]] == ["star+H2O"]
    with np.load(write_result(result, tmp_path / "out") / "draws.npz", allow_pickle=False) as draws:
        assert "star+H2O" in draws.files


def test_nothing_simulated_is_null():
    document = result_document(check_result())
    assert (document["rivals"], document["false_alarms"], document["sensitivity"]) == ([], None, {})
    assert {c["p_named"] for c in document["comparisons"]} == {None}


def test_what_is_not_finite_becomes_null(tmp_path):
    result = check_result()
    broken = dataclasses.replace(result.fits[0], p_chi2=np.nan, sampling={"ess": np.float32(np.inf)})
    settings = result.settings | {"count": np.int64(3), "odd": np.array([1.0, np.nan]), "on": np.bool_(True)}
    result = dataclasses.replace(result, fits=(broken, *result.fits[1:]), settings=settings)
    write_result(result, tmp_path / "out")
    document = json.loads((tmp_path / "out" / "result.json").read_text())
    assert document["hypotheses"][0]["p_chi2"] is None
    assert document["hypotheses"][0]["sampling"] == {"ess": None}
    assert document["settings"]["count"] == 3
    assert document["settings"]["odd"] == [1.0, None]
    assert document["settings"]["on"] is True


def test_settings_of_an_unknown_kind_are_a_bug():
    result = check_result()
    with pytest.raises(TypeError, match="object"):
        result_document(dataclasses.replace(result, settings={"x": object()}))


# --- files


def test_writes_every_file(tmp_path):
    result = check_result(("H2O", "CO2"), ln_evidences_inflated={"H2O": 3.0})
    out_dir = write_result(result, tmp_path / "deep" / "out")
    assert names_in(out_dir) == sorted(FILE_NAMES)
    assert names_in(tmp_path / "deep") == ["out"]
    assert json.loads((out_dir / "result.json").read_text(encoding="utf-8")) == result_document(result)
    assert (out_dir / "summary.txt").read_text(encoding="utf-8") == summary(result) + "\n"
    assert json.loads((out_dir / "timing.json").read_text()) == result.timing
    assert (out_dir / "figure.png").read_bytes().startswith(b"\x89PNG")
    assert (out_dir / "figure.pdf").read_bytes().startswith(b"%PDF")


def test_draws_can_be_read_without_pickle(tmp_path):
    result = check_result(("H2O", "CO2"), ln_evidences_inflated={"H2O": 3.0})
    out_dir = write_result(result, tmp_path / "out")
    with np.load(out_dir / "draws.npz", allow_pickle=False) as draws:
        np.testing.assert_array_equal(draws["all"], result.fit("all").draws)
        assert tuple(draws["all.names"]) == result.fit("all").draw_names
        assert "error_factor" in draws["H2O.inflated.names"]
        assert len(draws.files) == 4 * len(result.fits)


def test_lists_of_numbers_take_one_line(tmp_path):
    result = check_result(warnings=("a list [1,\n  2] inside a text stays",))
    out_dir = write_result(result, tmp_path / "out")
    lines = (out_dir / "result.json").read_text().splitlines()
    assert sum('"depth_ppm": [' in line and line.endswith("],") for line in lines) == 1
    assert json.loads("\n".join(lines))["warnings"] == ["a list [1,\n  2] inside a text stays"]


def test_same_result_same_bytes(tmp_path):
    for name in ("a", "b"):
        write_result(check_result(("H2O", "CO2")), tmp_path / name)
    for name in FILE_NAMES:
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes(), name


def test_text_beyond_ascii_is_kept(tmp_path):
    out_dir = write_result(check_result(planet_name="Planète ζ $b"), tmp_path / "out")
    assert "Planète ζ $b" in (out_dir / "result.json").read_text(encoding="utf-8")


# --- what is there already


def test_refuses_an_earlier_result(tmp_path):
    write_result(check_result(), tmp_path / "out")
    before = (tmp_path / "out" / "result.json").read_bytes()
    with pytest.raises(OutputError, match=r"already holds .*result\.json.*--force"):
        write_result(check_result(ln_evidences={}), tmp_path / "out")
    assert (tmp_path / "out" / "result.json").read_bytes() == before


@pytest.mark.parametrize("name", FILE_NAMES)
def test_refuses_any_file_of_that_name(tmp_path, name):
    (tmp_path / name).write_text("mine")
    with pytest.raises(OutputError, match=name):
        check_output_dir(tmp_path)
    assert (tmp_path / name).read_text() == "mine"


def test_force_replaces_our_files_only(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    (tmp_path / "draws").mkdir()
    write_result(check_result(), tmp_path)
    result = check_result(ln_evidences={"H2O": 1.0})
    write_result(result, tmp_path, force=True)
    assert names_in(tmp_path) == sorted([*FILE_NAMES, "notes.txt", "draws"])
    assert (tmp_path / "notes.txt").read_text() == "mine"
    assert json.loads((tmp_path / "result.json").read_text()) == result_document(result)


def test_directory_with_other_files_is_fine(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    check_output_dir(tmp_path)
    write_result(check_result(), tmp_path)
    assert (tmp_path / "notes.txt").read_text() == "mine"


def test_check_makes_nothing(tmp_path):
    check_output_dir(tmp_path / "a" / "b")
    assert names_in(tmp_path) == []


def test_refuses_a_file_as_directory(tmp_path):
    (tmp_path / "out").write_text("mine")
    for place in (tmp_path / "out", tmp_path / "out" / "deeper"):
        with pytest.raises(OutputError, match="is a file"):
            check_output_dir(place, force=True)


def test_refuses_a_directory_in_the_place_of_a_file(tmp_path):
    (tmp_path / "figure.png").mkdir()
    with pytest.raises(OutputError, match=r"figure\.png is a directory"):
        check_output_dir(tmp_path, force=True)


def test_refuses_a_place_that_is_not_writable(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    with pytest.raises(OutputError, match="not writable"):
        check_output_dir(tmp_path / "out")


@pytest.mark.parametrize("exists", [False, True])
@pytest.mark.parametrize("fault", [KeyboardInterrupt, OSError(28, "No space left on device")])
def test_interruption_leaves_nothing(tmp_path, monkeypatch, exists, fault):
    if exists:
        (tmp_path / "out").mkdir()

    def fail(_result):
        raise fault

    monkeypatch.setattr(writers, "check_figure", fail)
    with pytest.raises(KeyboardInterrupt if fault is KeyboardInterrupt else OutputError):
        write_result(check_result(), tmp_path / "out")
    assert names_in(tmp_path) == (["out"] if exists else [])
    assert not exists or names_in(tmp_path / "out") == []


def test_interruption_keeps_the_earlier_result(tmp_path, monkeypatch):
    out_dir = write_result(check_result(), tmp_path / "out")
    before = {name: (out_dir / name).read_bytes() for name in FILE_NAMES}

    def fail(_result):
        raise KeyboardInterrupt

    monkeypatch.setattr(writers, "check_figure", fail)
    with pytest.raises(KeyboardInterrupt):
        write_result(check_result(ln_evidences={}), out_dir, force=True)
    assert {name: (out_dir / name).read_bytes() for name in FILE_NAMES} == before
    assert names_in(out_dir) == sorted(FILE_NAMES)
