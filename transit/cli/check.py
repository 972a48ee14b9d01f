"""`leadline check`: read, check, print, and write where asked."""

from __future__ import annotations

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
    "--out",
    "out_dir",
    metavar="DIR",
    type=click.Path(path_type=Path),
    help="Directory for result.json, the summary, the figure and the posterior draws.",
)
@click.option("--force", is_flag=True, help="Replace an earlier result in DIR.")
@reading_options
def check(
    spectrum_file: Path,
    system_file: Path,
    species: tuple[str, ...] | None,
    seed: int,
    workers: int,
    quick: bool,
    out_dir: Path | None,
    force: bool,
    **reading: str | None,
) -> None:
    """Tell whether a transmission spectrum holds a feature, which absorber explains it, and how surely.

    SPECTRUM is a table of transit depths (CSV, text, ECSV, FITS and others) with wavelengths, depths and
    their errors. The verdict goes to the terminal, everything behind it to DIR.

    \b
    Example:
      leadline check wasp-96b.csv --system wasp-96.toml --species H2O,CO2 --out wasp-96b
    """
    if force and out_dir is None:
        raise click.UsageError("--force replaces files in the directory of --out, but there is no --out.")
    from transit.check import check_spectrum
    from transit.readers import ReadOptions, read_depth_table
    from transit.report import summary
    from transit.system import read_system
    from transit.writers import check_output_dir, write_result

    if out_dir is not None:
        check_output_dir(out_dir, force)
    system = read_system(system_file)
    spectrum = read_depth_table(spectrum_file, system=system, options=ReadOptions(**reading))
    with ProgressLine() as progress:
        result = check_spectrum(
            spectrum,
            system,
            species=species,
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
