import io
import json
import os
import subprocess
import sys
import threading
import types
from pathlib import Path

import pytest
from click.testing import CliRunner
from synthetic import check_result

import transit
from transit.cli.check import ProgressLine
from transit.cli.main import COMMANDS, cli
from transit.errors import InputFileError, SettingError
from transit.records import Nuisances
from transit.report import summary
from transit.writers import FILE_NAMES


@pytest.fixture
def run(tmp_path, monkeypatch):
    """Run the program inside an empty directory; gives the click result."""
    monkeypatch.chdir(tmp_path)
    return lambda *arguments: CliRunner().invoke(cli, arguments, prog_name="leadline")


@pytest.fixture
def stages(monkeypatch):
    """Replace reading and checking by stubs; gives the calls made, and lets a test set what a stage does."""
    calls = {}
    result = check_result()
    acts = {
        "read_system": lambda path: result.system,
        "read_depth_table": lambda path, *, system, options: result.spectrum,
        "check_spectrum": lambda spectrum, system, **settings: result,
    }

    def stage(name):
        def call(*arguments, **keywords):
            calls[name] = (arguments, keywords)
            return acts[name](*arguments, **keywords)

        return call

    system = types.SimpleNamespace(read_system=stage("read_system"))
    readers = types.SimpleNamespace(read_depth_table=stage("read_depth_table"), ReadOptions=dict)
    check = types.SimpleNamespace(check_spectrum=stage("check_spectrum"))
    for name, module in (("system", system), ("readers", readers), ("check", check)):
        monkeypatch.setitem(sys.modules, f"transit.{name}", module)
    return types.SimpleNamespace(calls=calls, acts=acts, result=result)


ARGUMENTS = ("check", "table.csv", "--system", "star.toml")


def raising(error):
    def act(*_arguments, **_keywords):
        raise error

    return act


# --- the group


def test_lists_its_commands(run):
    result = run("--help")
    assert result.exit_code == 0
    for name, (_, _, line) in COMMANDS.items():
        assert name in result.output
        assert line in result.output


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_help_with_an_example(run, name):
    result = run(name, "--help")
    assert result.exit_code == 0
    assert "Example:" in result.output
    assert f"leadline {name} " in result.output


@pytest.mark.parametrize("name", COMMANDS)
def test_lines_of_the_list_agree_with_the_commands(name):
    command = cli.get_command(None, name)
    assert command.name == name
    assert command.get_short_help_str(100) == COMMANDS[name][2]


def test_help_imports_nothing_heavy():
    code = (
        "import sys\n"
        "from transit.cli.main import cli\n"
        "cli(['--help'], standalone_mode=False)\n"
        "heavy = {'numpy', 'scipy', 'astropy', 'matplotlib', 'pandas', 'emcee', 'transit.cli.check'}\n"
        "sys.exit(str(heavy & set(sys.modules)) if heavy & set(sys.modules) else 0)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_linear_algebra_gets_one_thread_unless_told_otherwise():
    names = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
    code = f"import os, transit.cli.main; print(*[os.environ[name] for name in {names}])"
    environment = {name: value for name, value in os.environ.items() if name not in names}
    for given, expected in (({}, "1 1 1"), ({"OMP_NUM_THREADS": "3"}, "3 1 1")):
        done = subprocess.run(
            [sys.executable, "-c", code], env=environment | given, capture_output=True, text=True, check=True
        )
        assert done.stdout.split() == expected.split()


def test_module_runs_as_the_program():
    done = subprocess.run(
        [sys.executable, "-m", "transit", "--version"], capture_output=True, text=True, check=True
    )
    assert done.stdout == f"leadline {transit.__version__}\n"


@pytest.mark.parametrize(
    "arguments",
    [
        ("chek",),
        ("--nonsense",),
        ("check",),
        ("check", "table.csv"),
        (*ARGUMENTS, "--workers", "0"),
        (*ARGUMENTS, "--seed", "-1"),
        (*ARGUMENTS, "--depth-unit", "furlong"),
        (*ARGUMENTS, "--species", "H2O,,CO2"),
        (*ARGUMENTS, "--force"),
        (*ARGUMENTS, "--nuisance", "offset"),
        (*ARGUMENTS, "--nuisance", "steps"),
        (*ARGUMENTS, "--step", "1.3,here"),
        (*ARGUMENTS, "--covariance-unit", "furlong"),
        (*ARGUMENTS, "--sensitivity-only", "--out", "out"),
    ],
)
def test_usage_errors_exit_2(run, stages, arguments):
    result = run(*arguments)
    assert result.exit_code == 2
    assert not stages.calls


# --- check


def test_check_prints_the_summary(run, stages):
    result = run(*ARGUMENTS)
    assert result.exit_code == 0
    assert result.stdout == summary(stages.result) + "\n"
    assert result.stderr == ""
    assert stages.calls["check_spectrum"] == (
        (stages.result.spectrum, stages.result.system),
        {
            "species": None,
            "nuisances": Nuisances(),
            "star_spectra": None,
            "seed": 1,
            "workers": 2,
            "quick": False,
            "progress": None,
        },
    )


def test_check_passes_its_options_on(run, stages):
    options = ["--species", "H2O, CO2,H2O", "--seed", "7", "--workers", "1", "--quick"]
    options += ["--wavelength-unit", "nm", "--depth-unit", "radius-ratio", "--width-kind", "full"]
    options += ["--planet", "P b", "--reference", "Someone 2020", "--wavelength-column", "w"]
    options += ["--width-column", "dw", "--depth-column", "d", "--error-column", "e"]
    options += ["--covariance", "cov.npy", "--covariance-unit", "ppm"]
    options += ["--nuisance", "ar1, slope", "--step", "1.5,1.3", "--patchy"]
    assert run(*ARGUMENTS, *options).exit_code == 0
    settings = stages.calls["check_spectrum"][1]
    assert settings["species"] == ("H2O", "CO2")
    assert (settings["seed"], settings["workers"], settings["quick"]) == (7, 1, True)
    assert settings["nuisances"] == Nuisances(
        offsets=False, ar1=True, slope=True, patchy=True, step_um=(1.3, 1.5)
    )
    (path,), keywords = stages.calls["read_depth_table"]
    assert str(path) == "table.csv"
    assert keywords["system"] is stages.result.system
    assert keywords["options"] == {
        "wavelength_unit": "nm",
        "depth_unit": "radius-ratio",
        "width_kind": "full",
        "planet": "P b",
        "reference": "Someone 2020",
        "wavelength_column": "w",
        "width_column": "dw",
        "depth_column": "d",
        "error_column": "e",
        "covariance": Path("cov.npy"),
        "covariance_unit": "ppm",
    }


@pytest.mark.parametrize("stage", ["read_system", "read_depth_table", "check_spectrum"])
def test_faults_of_the_user_are_one_line(run, stages, stage):
    stages.acts[stage] = raising(InputFileError("depth is -2,\nexpected more.", "table.csv", 14))
    result = run(*ARGUMENTS, "--out", "out")
    assert result.exit_code == 1
    assert result.stderr == "leadline: table.csv, line 14: depth is -2, expected more.\n"
    assert result.stdout == ""
    assert os.listdir() == []


def test_bugs_keep_their_traceback(run, stages):
    stages.acts["check_spectrum"] = raising(ZeroDivisionError("ours"))
    assert isinstance(run(*ARGUMENTS).exception, ZeroDivisionError)


def test_interruption_exits_130_and_leaves_nothing(run, stages):
    stages.acts["check_spectrum"] = raising(KeyboardInterrupt())
    result = run(*ARGUMENTS, "--out", "out")
    assert result.exit_code == 130
    assert result.stderr == "leadline: interrupted.\n"
    assert os.listdir() == []


@pytest.mark.parametrize("ln_b", [9.0, 3.0, -0.4])
def test_exit_status_does_not_depend_on_the_verdict(run, stages, ln_b):
    stages.acts["check_spectrum"] = lambda *_, **__: check_result(ln_evidences={"H2O": ln_b})
    assert run(*ARGUMENTS).exit_code == 0


def test_writes_where_asked(run, stages, tmp_path):
    assert run(*ARGUMENTS, "--out", "out").exit_code == 0
    assert sorted(os.listdir("out")) == sorted(FILE_NAMES)
    with open("out/result.json", encoding="utf-8") as stream:
        assert json.load(stream)["format"] == "leadline-check-2"


def test_earlier_result_is_refused_before_the_work(run, stages):
    run(*ARGUMENTS, "--out", "out")
    stages.calls.clear()
    result = run(*ARGUMENTS, "--out", "out")
    assert result.exit_code == 1
    assert "--force" in result.stderr
    assert result.stderr.count("\n") == 1
    assert not stages.calls
    with open("out/mine.txt", "w", encoding="utf-8") as stream:
        stream.write("mine")
    assert run(*ARGUMENTS, "--out", "out", "--force").exit_code == 0
    assert sorted(os.listdir("out")) == sorted([*FILE_NAMES, "mine.txt"])


def test_fault_while_writing_still_shows_the_verdict(run, stages, monkeypatch):
    def full(*_arguments):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("transit.writers._write_files", full)
    result = run(*ARGUMENTS, "--out", "out")
    assert result.exit_code == 1
    assert "No space left on device" in result.stderr
    assert stages.result.verdict.sentence[:40] in result.stdout
    assert os.listdir() == []


def test_letters_the_terminal_lacks_do_not_stop_the_report(stages, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    stages.acts["check_spectrum"] = lambda *_, **__: check_result(planet_name="ζ b")
    result = CliRunner(charset="ascii").invoke(cli, ARGUMENTS)
    assert result.exit_code == 0
    assert "? b: T_eq" in result.stdout


# --- progress


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_progress_is_one_line_that_is_wiped(monkeypatch):
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    with ProgressLine() as progress:
        progress(1, 3, "flat")
        progress(2, 3, "H2O with a long label " * 20)
        progress(3, 3, "all")
    written = terminal.getvalue()
    assert "\n" not in written
    assert "\r1/3  0:00  flat" in written
    last = written.split("\r")[-2]
    assert last.strip() == ""
    assert max(map(len, written.split("\r"))) < 250


def test_progress_is_given_only_to_a_terminal(run, stages, monkeypatch):
    monkeypatch.setattr("transit.cli.check.ProgressLine", lambda: shown)
    shown = ProgressLine()
    shown.visible = True
    shown._stream = Terminal()
    run(*ARGUMENTS)
    assert stages.calls["check_spectrum"][1]["progress"] is shown


def test_progress_from_many_threads_keeps_its_lines_whole(monkeypatch):
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    with ProgressLine() as progress:
        threads = [threading.Thread(target=progress, args=(i, 20, "fit")) for i in range(20)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    lines = [line.strip() for line in terminal.getvalue().split("\r") if line.strip()]
    assert len(lines) == 20
    assert all(line.endswith("fit") for line in lines)


# --- the package


def test_public_names_are_found_on_first_use():
    code = (
        "import sys, transit\n"
        "assert 'numpy' not in sys.modules\n"
        "assert transit.CheckResult.__module__ == 'transit.records'\n"
        "assert transit.summary.__module__ == 'transit.report'\n"
        "assert {'summary', 'write_result', '__version__'} <= set(dir(transit))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_unknown_name_of_the_package():
    with pytest.raises(AttributeError, match="no_such_name"):
        _ = transit.no_such_name


def test_version_without_an_installation(monkeypatch):
    from importlib import metadata

    def missing(name):
        raise metadata.PackageNotFoundError(name)

    monkeypatch.setattr(metadata, "version", missing)
    assert transit._version() == "0+unknown"


def test_setting_errors_are_faults_of_the_user(run, stages):
    stages.acts["check_spectrum"] = raising(SettingError("Species 'XX' is not known. Known are H2O, CO2."))
    result = run(*ARGUMENTS, "--species", "XX")
    assert (result.exit_code, result.stderr) == (
        1,
        "leadline: Species 'XX' is not known. Known are H2O, CO2.\n",
    )


# --- new-system


def test_new_system_writes_a_file_that_can_be_read(run, tmp_path):
    result = run("new-system", "star.toml")
    assert result.exit_code == 0
    assert "star.toml" in result.stdout
    assert transit.read_system(tmp_path / "star.toml").star_radius_rsun > 0


def test_new_system_refuses_and_is_forced(run, tmp_path):
    (tmp_path / "star.toml").write_text("mine", encoding="utf-8")
    result = run("new-system", "star.toml")
    assert result.exit_code == 1
    assert result.stderr.startswith("leadline: ")
    assert result.stderr.count("\n") == 1
    assert (tmp_path / "star.toml").read_text(encoding="utf-8") == "mine"
    assert run("new-system", "star.toml", "--force").exit_code == 0
    assert "[star]" in (tmp_path / "star.toml").read_text(encoding="utf-8")


# --- what the options of a check may hold


def test_step_outside_the_spectrum_is_refused(run, stages):
    """One sentence that names the range, before anything is fitted."""
    result = run(*ARGUMENTS, "--step", "9.5")
    assert result.exit_code == 1
    assert "--step 9.5" in result.stderr
    assert f"{stages.result.spectrum.wavelength_um[0]:.4g}" in result.stderr
    assert "check_spectrum" not in stages.calls


def test_missing_star_spectra_are_one_line(run):
    demo = Path(__file__).parents[2] / "demo"
    result = run(
        "check",
        str(demo / "with_band.csv"),
        "--system",
        str(demo / "system.toml"),
        "--star-spectra",
        "none.csv",
    )
    assert result.exit_code == 1
    assert "none.csv" in result.stderr
    assert result.stderr.count("\n") == 1


def test_sensitivity_only_prints_a_table_and_stops(run, tmp_path):
    """From bins, errors and priors: nothing is fitted and nothing is written."""
    demo = Path(__file__).parents[2] / "demo"
    result = run(
        "check", str(demo / "with_band.csv"), "--system", str(demo / "system.toml"), "--species", "H2O,CH4,Na",
        "--sensitivity-only",
    )  # fmt: skip
    assert result.exit_code == 0, result.output
    assert "nothing was fitted" in result.stdout
    assert [line for line in result.stdout.splitlines() if line.startswith("H2O ")]
    assert max(map(len, result.stdout.splitlines())) <= 80
    assert not list(tmp_path.iterdir())
