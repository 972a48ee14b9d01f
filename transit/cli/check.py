"""`leadline check`: read, check, print, and write where asked."""

from __future__ import annotations

import math
import shutil
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path

import click


def reading_options(command: Callable) -> Callable:
    """Add the options that settle what a depth table leaves open."""
    column = {"metavar": "NAME"}
    options = [
        click.option(
            "--wavelength-unit", metavar="UNIT", help="Unit of the wavelengths: um, nm, angstrom, m or cm-1."
        ),
        click.option(
            "--depth-unit",
            type=click.Choice(["fraction", "percent", "ppm", "radius-ratio"]),
            help="Unit of the depths; radius-ratio for Rp/Rs.",
        ),
        click.option(
            "--width-kind", type=click.Choice(["half", "full"]), help="Whether bin widths are half or full."
        ),
        click.option("--planet", **column, help="Planet whose rows are wanted, in a table of several."),
        click.option("--reference", **column, help="Paper whose rows are wanted, in a table of several."),
        click.option("--wavelength-column", **column, help="Column to read wavelengths from."),
        click.option("--width-column", **column, help="Column to read bin widths from."),
        click.option("--depth-column", **column, help="Column to read depths from."),
        click.option("--error-column", **column, help="Column to read depth errors from."),
        click.option(
            "--covariance",
            metavar="FILE",
            type=click.Path(path_type=Path),
            help="Covariance of the depths, N x N in the order of the table's rows: CSV, FITS or .npy.",
        ),
        click.option(
            "--covariance-unit",
            type=click.Choice(["fraction", "percent", "ppm"]),
            help="Unit whose square the covariance is in; left out: that of the depth column.",
        ),
    ]
    for option in reversed(options):
        command = option(command)
    return command


def _split_species(_ctx: click.Context, _param: click.Parameter, text: str | None) -> tuple[str, ...] | None:
    if text is None:
        return None
    names = [name.strip() for name in text.split(",")]
    if not all(names):
        raise click.BadParameter(f"{text!r} holds an empty name, expected names parted by commas: H2O,CO2.")
    return tuple(dict.fromkeys(names))


def _split_steps(_ctx: click.Context, _param: click.Parameter, text: str | None) -> tuple[float, ...]:
    if text is None:
        return ()
    try:
        steps = tuple(float(part) for part in text.split(","))
    except ValueError:
        steps = (math.nan,)
    if not all(math.isfinite(um) and um > 0 for um in steps):
        raise click.BadParameter(f"{text!r}, expected wavelengths in micrometre parted by commas: 1.2,2.5.")
    return tuple(sorted(set(steps)))


NUISANCES = ("offsets", "steps", "slope", "inflation", "ar1")


def _split_nuisances(_ctx: click.Context, _param: click.Parameter, text: str) -> tuple[str, ...]:
    names = [name.strip() for name in text.split(",")]
    if names == ["none"]:
        return ()
    for name in names:
        if name not in NUISANCES:
            raise click.BadParameter(
                f"{name!r} is unknown, expected some of {', '.join(NUISANCES)} parted by commas, or none."
            )
    return tuple(dict.fromkeys(names))


def hypothesis_options(command: Callable) -> Callable:
    """Add the options that say what the hypotheses and their rivals may contain."""
    options = [
        click.option(
            "--step",
            "step_um",
            metavar="UM,...",
            callback=_split_steps,
            help="Wavelengths (um) where a detector or order may step: tested as a rival explanation.",
        ),
        click.option(
            "--nuisance",
            "nuisances",
            metavar="NAME,...",
            default="offsets",
            show_default=True,
            callback=_split_nuisances,
            help="What every hypothesis alike may vary: offsets of segments, steps at --step, a slope, inflation "
            "of the errors, ar1 noise along wavelength; or none.",
        ),
        click.option("--patchy", is_flag=True, help="Let the cloud deck cover a part of the limb only."),
        click.option(
            "--star-spectra",
            metavar="FILE",
            type=click.Path(path_type=Path),
            help="Your own spectra of the star by temperature, in place of the shipped ones.",
        ),
    ]
    for option in reversed(options):
        command = option(command)
    return command


@click.command(short_help="Tell whether a spectrum holds a feature, and whose.")
@click.argument("spectrum_file", metavar="SPECTRUM", type=click.Path(path_type=Path))
@click.option(
    "--system",
    "system_file",
    metavar="FILE",
    type=click.Path(path_type=Path),
    required=True,
    help="System file with star and planet; `leadline new-system` writes one to fill in.",
)
@click.option(
    "--species",
    metavar="A,B,...",
    callback=_split_species,
    help="Species to test. Left out: those whose bands the spectrum covers.",
)
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Seed of all draws.")
@click.option("--workers", type=click.IntRange(min=1), default=2, show_default=True, help="Processes to use.")
@click.option("--quick", is_flag=True, help="Fewer draws: rougher, for a first look only.")
@click.option(
    "--sensitivity-only",
    is_flag=True,
    help="Tell what the spectrum could show, from its bins, errors and priors, and stop.",
)
@click.option(
    "--out",
    "out_dir",
    metavar="DIR",
    type=click.Path(path_type=Path),
    help="Directory for result.json, the summary, the figure and the posterior draws.",
)
@click.option("--force", is_flag=True, help="Replace an earlier result in DIR.")
@hypothesis_options
@reading_options
def check(
    spectrum_file: Path,
    system_file: Path,
    species: tuple[str, ...] | None,
    seed: int,
    workers: int,
    quick: bool,
    sensitivity_only: bool,
    out_dir: Path | None,
    force: bool,
    step_um: tuple[float, ...],
    nuisances: tuple[str, ...],
    patchy: bool,
    star_spectra: Path | None,
    **reading: str | None,
) -> None:
    """Tell whether a transmission spectrum holds a feature, which absorber explains it, and how surely.

    SPECTRUM is a table of transit depths (CSV, text, ECSV, FITS and others) with wavelengths, depths and
    their errors. The verdict goes to the terminal, everything behind it to DIR.

    \b
    Example:
      leadline check spectrum.csv --system system.toml --species H2O,CO2 --out result
    """
    if force and out_dir is None:
        raise click.UsageError("--force replaces files in the directory of --out, but there is no --out.")
    if sensitivity_only and out_dir is not None:
        raise click.UsageError("--sensitivity-only prints a table and writes nothing: leave out --out.")
    if "steps" in nuisances and not step_um:
        raise click.UsageError("--nuisance steps needs the wavelengths of the steps: add --step.")
    from transit.check import check_spectrum
    from transit.readers import ReadOptions, read_depth_table
    from transit.records import Nuisances
    from transit.report import summary
    from transit.rivals import check_steps
    from transit.star import read_star_spectra
    from transit.system import read_system
    from transit.writers import check_output_dir, write_result

    if out_dir is not None:
        check_output_dir(out_dir, force)
    system = read_system(system_file)
    spectrum = read_depth_table(spectrum_file, system=system, options=ReadOptions(**reading))
    check_steps(spectrum, step_um)
    chosen = {name: name in nuisances for name in NUISANCES} | {"patchy": patchy, "step_um": step_um}
    hypotheses = {
        "species": species,
        "nuisances": Nuisances(**chosen),
        "star_spectra": None if star_spectra is None else read_star_spectra(star_spectra),
    }
    if sensitivity_only:
        from transit.check import prepare, sensitivity_of
        from transit.report_chances import sensitivity_table

        prepared = prepare(spectrum, system, **hypotheses)
        _print_text(sensitivity_table(sensitivity_of(prepared, seed), prepared.selection.untested))
        return
    with ProgressLine() as progress:
        result = check_spectrum(
            spectrum,
            system,
            **hypotheses,
            seed=seed,
            workers=workers,
            quick=quick,
            progress=progress if progress.visible else None,
        )
    _print_text(summary(result))
    if out_dir is not None:
        write_result(result, out_dir, force)


def _print_text(text: str) -> None:
    """Print what may hold letters of the user's that the terminal's encoding lacks."""
    encoding = getattr(sys.stdout, "encoding", None) or "utf-8"
    click.echo(text.encode(encoding, "replace").decode(encoding))


class ProgressLine:
    """One line on stderr that is written over as the work proceeds; wiped at the end.

    Calls may come from several threads. Nothing is shown when stderr is not a terminal.
    """

    def __init__(self):
        self._stream = sys.stderr
        self._lock = threading.Lock()
        self._start = time.monotonic()
        self._shown = 0
        self.visible = bool(self._stream is not None and self._stream.isatty())

    def __enter__(self) -> ProgressLine:
        return self

    def __exit__(self, *_exception) -> None:
        if self.visible and self._shown:
            self._write("")
            self._stream.write("\r")
            self._stream.flush()

    def __call__(self, done: int, total: int, label: str) -> None:
        """Show that `done` of `total` steps are finished, `label` naming the latest."""
        if self.visible:
            minutes, seconds = divmod(int(time.monotonic() - self._start), 60)
            self._write(f"{done}/{total}  {minutes}:{seconds:02d}  {label}")

    def _write(self, text: str) -> None:
        with self._lock:
            # A line as wide as the terminal would wrap and could no longer be written over.
            text = text[: max(shutil.get_terminal_size().columns - 1, 1)]
            self._stream.write("\r" + text.ljust(self._shown))
            self._stream.flush()
            self._shown = len(text)
