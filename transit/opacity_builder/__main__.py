"""`python -m transit.opacity_builder --source DIR [--out DIR] [--species NAME,...]` computes the tables."""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import click

from transit.opacity import SUFFIX, write_registry, write_table
from transit.opacity_builder.recipes import RECIPES, assemble


def _one(name: str, source: Path, temperature_k: float):
    return RECIPES[name][0](source, temperature_k)


@click.command()
@click.option(
    "--source",
    type=click.Path(path_type=Path, exists=True, file_okay=False),
    required=True,
    help="Folder with hitran/, hot_linelists/, snb_band_model/, partition_functions/, cia/, ch4_nir/.",
)
@click.option("--out", type=click.Path(path_type=Path), default=Path("opacity_tables"), show_default=True)
@click.option("--species", "names", default=",".join(RECIPES), show_default=True)
@click.option("--workers", default=2, show_default=True)
def main(source: Path, out: Path, names: str, workers: int) -> None:
    """Compute opacity tables from line lists, band means and collision data."""
    out.mkdir(parents=True, exist_ok=True)
    with ProcessPoolExecutor(workers) as pool:
        for name in names.split(","):
            if name not in RECIPES:
                raise click.UsageError(f"No recipe for {name}; there are {', '.join(RECIPES)}.")
            futures = [pool.submit(_one, name, source, float(t)) for t in RECIPES[name][2]]
            table = assemble(name, [future.result() for future in futures])
            path = out / f"{name}{SUFFIX}"
            write_table(path, table)
            click.echo(
                f"{path}: {table.ln_cross_section.shape}, {path.stat().st_size / 1e6:.2f} MB", err=True
            )
    write_registry(out)


if __name__ == "__main__":
    main()
