"""The program as a user meets it: the demo, the same numbers again, and every kind of input that must be refused."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

from transit.cli.main import cli
from transit.opacity import default_folder

ROOT = Path(__file__).resolve().parents[2]
DEMO = ROOT / "demo"
GOOD_ROWS = ["1.10,0.01,14500,40", "1.12,0.01,14510,40", "1.14,0.01,14520,40", "1.16,0.01,14530,40"]
HEADER = "wavelength_um,half_width_um,depth_ppm,depth_err_ppm"
SYSTEM = """
[star]
radius_rsun = 1.19
teff_k = 6091
[planet]
radius_rjup = 1.39
mass_mjup = 0.73
equilibrium_temperature_k = 1459
"""


def run(*arguments: str):
    return CliRunner().invoke(cli, list(map(str, arguments)))


@pytest.fixture(scope="module")
def demo_results(tmp_path_factory):
    """Both demo spectra, checked quickly with one worker."""
    out = tmp_path_factory.mktemp("demo")
    for name in ("with_band", "look_alike"):
        table = DEMO / f"{name}.csv"
        result = run(
            "check",
            table,
            "--system",
            DEMO / "system.toml",
            "--species",
            "H2O",
            "--quick",
            "--workers",
            1,
            "--out",
            out / name,
        )
        assert result.exit_code == 0, result.output
    return out


def document(folder: Path) -> dict:
    return json.loads((folder / "result.json").read_text())


def test_demo_band_is_found_and_look_alike_is_not(demo_results):
    """The spectrum that holds water shows it; the flat one with the same errors does not."""
    assert document(demo_results / "with_band")["verdict"]["species"] == {"H2O": "present"}
    assert document(demo_results / "look_alike")["verdict"]["species"] == {"H2O": "not shown"}


def test_result_holds_the_promised_names(demo_results):
    """Other programs read these names."""
    result = document(demo_results / "with_band")
    assert result["format"] == "leadline-check-2"
    names = {"program", "spectrum", "system", "settings", "hypotheses", "comparisons", "verdict"}
    assert names <= set(result)
    assert {"file", "sha256", "n_bins"} <= set(result["spectrum"])
    assert [h["name"] for h in result["hypotheses"]] == ["flat", "slope", "continuum", "H2O"]
    for hypothesis in result["hypotheses"]:
        assert {
            "species", "n_free", "ln_evidence", "ln_evidence_err", "chi2", "dof", "p_chi2", "bic", "parameters",
            "model", "sampling",
        } <= set(hypothesis)  # fmt: skip
        assert {"steps", "walkers", "autocorr_steps", "ess", "likelihood_calls", "flags"} <= set(
            hypothesis["sampling"]
        )
    alone = [c for c in result["comparisons"] if c["kind"] == "alone"]
    assert [c["against"] for c in alone] == ["flat", "slope", "continuum"]
    assert sum(c["best_null"] for c in alone) == 1
    assert {p.name for p in (demo_results / "with_band").iterdir()} == {
        "result.json", "summary.txt", "figure.png", "figure.pdf", "draws.npz", "timing.json",
    }  # fmt: skip


def test_recovers_what_was_put_in(demo_results):
    """The truth behind the demo lies within the central 99 per cent of the draws, parameter by parameter."""
    with np.load(demo_results / "with_band" / "draws.npz") as archive:
        draws = dict(zip(archive["H2O.names"], archive["H2O"].T, strict=True))
    for name, truth in (("temperature_k", 760.0), ("log10_vmr_H2O", -3.3), ("log10_deck_pressure_bar", -1.6)):
        share = np.mean(draws[name] < truth)
        assert 0.005 < share < 0.995, name


def test_same_seed_same_files_whatever_the_workers(demo_results, tmp_path):
    """Two processes give byte for byte what one gave, figures included; wall times live apart."""
    result = run(
        "check", DEMO / "look_alike.csv", "--system", DEMO / "system.toml", "--species", "H2O",
        "--quick", "--workers", 2,
        "--out", tmp_path / "again",
    )  # fmt: skip
    assert result.exit_code == 0, result.output
    for name in ("result.json", "summary.txt", "figure.png", "figure.pdf", "draws.npz"):
        first = (demo_results / "look_alike" / name).read_bytes()
        assert (tmp_path / "again" / name).read_bytes() == first, name


def test_another_seed_gives_other_draws(demo_results, tmp_path):
    """The seed is really used."""
    run(
        "check", DEMO / "look_alike.csv", "--system", DEMO / "system.toml", "--species", "H2O",
        "--quick", "--workers", 1, "--seed", 2, "--out", tmp_path / "other",
    )  # fmt: skip
    one, two = document(demo_results / "look_alike"), document(tmp_path / "other")
    assert one["hypotheses"][3]["ln_evidence"] != two["hypotheses"][3]["ln_evidence"]


def test_readme_shows_the_python_interface_that_exists():
    """The five lines of the README run up to the check itself."""
    code = re.search(r"```python\n(.*?)```", (ROOT / "README.md").read_text(), re.DOTALL).group(1)
    names = re.search(r"from transit import (.*)", code).group(1).split(", ")
    import transit

    assert all(hasattr(transit, name) for name in names)
    before_check = code.split("result =")[0].replace("demo/", f"{DEMO}/")
    scope: dict = {}
    exec(before_check, scope)
    assert scope["spectrum"].n_bins == 39


def with_cell(row: int, column: int, text: str) -> str:
    rows = [line.split(",") for line in GOOD_ROWS]
    rows[row][column] = text
    return "\n".join([HEADER, *(",".join(r) for r in rows)]) + "\n"


BAD_TABLES = {
    "empty": b"",
    "binary": bytes(range(256)) * 20,
    "no header": "\n".join(GOOD_ROWS).encode(),
    "no units": ("wavelength,depth,error\n" + "1.1,0.0145,1e-4\n1.2,0.0146,1e-4\n1.3,0.0145,1e-4\n").encode(),
    "all missing": "\n".join([HEADER, *(f"1.{k},0.01,nan,40" for k in range(1, 6))]).encode(),
    "zero error": with_cell(1, 3, "0").encode(),
    "negative error": with_cell(1, 3, "-40").encode(),
    "depth above one": with_cell(1, 2, "2000000").encode(),
    "nanometres named um": "\n".join([HEADER, *(f"{1100 + k},1,14500,40" for k in range(5))]).encode(),
    "two bins": "\n".join([HEADER, *GOOD_ROWS[:2]]).encode(),
    "a word in a cell": with_cell(2, 2, "fine").encode(),
    "infinite": with_cell(2, 2, "inf").encode(),
    "another planet": "\n".join([HEADER, *(r.replace(",145", ",45") for r in GOOD_ROWS)]).encode(),
}


@pytest.mark.parametrize("kind", BAD_TABLES)
def test_bad_tables_get_one_clear_sentence(kind, tmp_path):
    """Exit 1, one line that names the file, no traceback, nothing written."""
    table, system = tmp_path / "bad.csv", tmp_path / "system.toml"
    table.write_bytes(BAD_TABLES[kind])
    system.write_text(SYSTEM)
    result = run("check", table, "--system", system, "--species", "H2O", "--out", tmp_path / "out")
    assert result.exit_code == 1, result.output
    message = result.stderr.strip()
    assert message.startswith("leadline: ")
    assert "\n" not in message
    assert "bad.csv" in message
    assert not (tmp_path / "out").exists()


BAD_SYSTEMS = {
    "syntax": SYSTEM.replace("radius_rsun = 1.19", "radius_rsun = "),
    "unknown key": SYSTEM + 'colour = "red"\n',
    "gravity": SYSTEM.replace("mass_mjup = 0.73", "mass_mjup = 0.0001"),
    "negative": SYSTEM.replace("radius_rsun = 1.19", "radius_rsun = -1"),
    "both radii": SYSTEM + "radius_rearth = 3\n",
    "reversed prior": SYSTEM + "[priors]\nlog10_vmr = [-1, -12]\n",
}


@pytest.mark.parametrize("kind", BAD_SYSTEMS)
def test_bad_system_files_get_one_clear_sentence(kind, tmp_path):
    """Exit 1, one line that names the file."""
    table, system = tmp_path / "good.csv", tmp_path / "system.toml"
    table.write_text("\n".join([HEADER, *GOOD_ROWS]))
    system.write_text(BAD_SYSTEMS[kind])
    result = run("check", table, "--system", system)
    assert result.exit_code == 1, result.output
    assert "system.toml" in result.stderr
    assert len(result.stderr.strip().splitlines()) == 1


def test_unknown_species_lists_the_known(tmp_path):
    """The message helps to spell."""
    table, system = tmp_path / "good.csv", tmp_path / "system.toml"
    table.write_text("\n".join([HEADER, *GOOD_ROWS]))
    system.write_text(SYSTEM)
    result = run("check", table, "--system", system, "--species", "H2O,CH5")
    assert result.exit_code == 1
    assert "CH5" in result.stderr
    assert "CH4" in result.stderr


def test_altered_opacity_table_is_refused(tmp_path, monkeypatch):
    """One flipped byte in a table stops the run with a sentence that names the file."""
    folder = tmp_path / "tables"
    shutil.copytree(default_folder(), folder)
    path = folder / "H2O.opacity"
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(bytes(data))
    monkeypatch.setattr("transit.opacity.default_folder", lambda: folder)
    result = run("check", DEMO / "with_band.csv", "--system", DEMO / "system.toml", "--species", "H2O")
    assert result.exit_code == 1
    assert "H2O.opacity" in result.stderr


# --- covariance, stars and steps that cannot be used


@pytest.fixture
def small(tmp_path):
    """A good table of four bins and its system file, in an empty directory."""
    (tmp_path / "table.csv").write_text("\n".join([HEADER, *GOOD_ROWS]))
    (tmp_path / "system.toml").write_text(SYSTEM)
    return tmp_path


def refusal(folder, *options):
    """Message of a check that must be refused: one line, exit 1, nothing written."""
    before = sorted(folder.iterdir())
    result = run(
        "check", folder / "table.csv", "--system", folder / "system.toml", "--species", "H2O", *options,
        "--out", folder / "out",
    )  # fmt: skip
    assert result.exit_code == 1, result.output
    assert result.stderr.count("\n") == 1, result.stderr
    assert "Traceback" not in result.output
    assert sorted(folder.iterdir()) == before
    return result.stderr


@pytest.mark.parametrize(
    ("matrix", "words"),
    [
        (np.eye(3) * 1600, ("3 x 3", "4")),
        (np.ones((4, 3)) * 1600, ("4 x 3",)),
        (1600 * (np.eye(4) + 2 * np.eye(4)[::-1]), ("positive definite",)),
        (1600 * np.eye(4) + np.triu(np.ones((4, 4)), 1), ("symmetric",)),
        (1600e-6 * np.eye(4), ("factor",)),
        (np.where(np.eye(4) > 0, np.nan, 0.0), ("finite",)),
    ],
    ids=["size", "not square", "indefinite", "not symmetric", "unit", "not finite"],
)
def test_unusable_covariance(small, matrix, words):
    """Each fault of a matrix is told with its numbers."""
    np.save(small / "cov.npy", matrix)
    message = refusal(small, "--covariance", small / "cov.npy", "--covariance-unit", "ppm")
    assert "cov.npy" in message
    for word in words:
        assert word in message


def test_covariance_beside_ar1_noise(small):
    """Both say how bins hang together; one has to go."""
    np.save(small / "cov.npy", 1600.0 * np.eye(4))
    message = refusal(
        small, "--covariance", small / "cov.npy", "--covariance-unit", "ppm", "--nuisance", "ar1"
    )
    assert "ar1" in message


def test_star_spectra_that_miss_the_bins(small):
    """Spectra of the star that begin beyond the first bin."""
    wavelength = np.linspace(1.2, 2.0, 50)
    rows = [f"{um},1.0,2.0,3.0" for um in wavelength]
    (small / "star.csv").write_text("\n".join(["wavelength_um,flux_4000K,flux_6091K,flux_6500K", *rows]))
    message = refusal(small, "--star-spectra", small / "star.csv")
    assert "1.2" in message
    assert "um" in message


def test_star_spectra_that_miss_the_temperatures(small):
    """Spectra of cool stars only, for a star of 6091 K."""
    rows = [f"{um},1.0,2.0" for um in np.linspace(0.5, 2.0, 50)]
    (small / "star.csv").write_text("\n".join(["wavelength_um,flux_3000K,flux_3500K", *rows]))
    message = refusal(small, "--star-spectra", small / "star.csv")
    assert "6091" in message or "6391" in message
    assert "K" in message


def test_step_outside_the_table(small):
    """The range of the spectrum is named."""
    message = refusal(small, "--step", "1.3")
    assert "1.3" in message
    assert "1.16" in message


def test_covariance_reaches_the_result(tmp_path):
    """A common offset with a shared error changes no band; strongly correlated neighbours do change ln B."""
    err = pd.read_csv(DEMO / "with_band.csv", comment="#")["depth_err_ppm"].to_numpy()
    place = np.arange(len(err))
    matrices = {
        "white": np.diag(err**2),
        "shared": np.diag(err**2) + 200.0**2,
        "ar1": np.outer(err, err) * 0.6 ** np.abs(place[:, None] - place),
    }
    found = {}
    for name, matrix in matrices.items():
        np.savetxt(tmp_path / f"{name}.csv", matrix, delimiter=",")
        result = run(
            "check", DEMO / "with_band.csv", "--system", DEMO / "system.toml", "--species", "H2O", "--quick",
            "--workers", 1, "--covariance", tmp_path / f"{name}.csv", "--covariance-unit", "ppm",
            "--nuisance", "none", "--out", tmp_path / name,
        )  # fmt: skip
        assert result.exit_code == 0, result.output
        comparisons = document(tmp_path / name)["comparisons"]
        found[name] = min(c["ln_bayes_factor"] for c in comparisons if c["kind"] == "alone")
    assert found["shared"] == pytest.approx(found["white"], abs=1.0)
    assert abs(found["ar1"] - found["white"]) > 5
