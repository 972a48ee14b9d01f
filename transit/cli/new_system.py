"""`leadline new-system`: a system file to fill in."""

from __future__ import annotations

from pathlib import Path

import click


@click.command(name="new-system", short_help="Write a system file to fill in.")
@click.argument("path", metavar="FILE", type=click.Path(path_type=Path))
@click.option("--force", is_flag=True, help="Replace FILE if it exists.")
def new_system(path: Path, force: bool) -> None:
    """Write a system file to fill in: star, planet, and every prior with its default.

    \b
    Example:
      leadline new-system wasp-96.toml
    """
    from transit.system import write_new_system

    write_new_system(path, force=force)
    click.echo(f"Wrote {path}: replace its values by those of your star and planet.")
