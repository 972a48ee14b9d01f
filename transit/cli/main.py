"""The `leadline` command: lists its commands without importing them, and turns faults into one line each."""

from __future__ import annotations

import os
from importlib import import_module

import click

from transit.errors import TransitError

# One linear-algebra thread per process: the fits run in processes of their own, and threads would fight them.
# It has to be set before numpy is imported anywhere; whoever has set it already knows better.
for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")

# name -> module, attribute, line shown by `leadline --help`
COMMANDS = {
    "check": ("transit.cli.check", "check", "Tell whether a spectrum holds a feature, and whose."),
    "new-system": ("transit.cli.new_system", "new_system", "Write a system file to fill in."),
}
INTERRUPTED = 130  # 128 + SIGINT, as shells count


class _Refusal(click.ClickException):
    """A fault of the user's files or settings, as one line on stderr."""

    exit_code = 1

    def show(self, file=None) -> None:
        click.echo("leadline: " + " ".join(self.format_message().splitlines()), file=file, err=file is None)


class LazyGroup(click.Group):
    """A group whose commands are imported when they are called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module, attribute, _ = COMMANDS[cmd_name]
        return getattr(import_module(module), attribute)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, line) for name, (_, _, line) in COMMANDS.items()])

    def invoke(self, ctx: click.Context):
        try:
            return super().invoke(ctx)
        except TransitError as error:
            raise _Refusal(str(error)) from error
        except KeyboardInterrupt:
            click.echo("leadline: interrupted.", err=True)
            ctx.exit(INTERRUPTED)


def _print_version(ctx: click.Context, _param: click.Parameter, wanted: bool) -> None:
    if wanted and not ctx.resilient_parsing:
        from transit import __version__

        click.echo(f"leadline {__version__}")
        ctx.exit()


@click.group(cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.option(
    "--version",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_print_version,
    help="Print the version and exit.",
)
def cli() -> None:
    """Is there a feature in this transmission spectrum, whose is it, and how sure is that?

    \b
    Example:
      leadline new-system wasp-96.toml
      leadline check wasp-96b.csv --system wasp-96.toml --out wasp-96b

    `leadline COMMAND --help` tells more about a command. The exit status is 0 whatever the verdict, 1 when a
    file or a setting cannot be used, 2 when the command line is not understood.
    """


def main() -> None:
    """Entry point of the installed program."""
    try:
        cli(prog_name="leadline")
    except KeyboardInterrupt:
        # Before or after the group runs, that is while importing or leaving.
        raise SystemExit(INTERRUPTED) from None
