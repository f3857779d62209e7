"""Setting up: describe, demo."""

from __future__ import annotations

from pathlib import Path

import click

from firnlight.cli.group import (
    commands,
    quiet_option,
    say_next,
)
from firnlight.core.errors import SettingsProblem


@commands.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--sensor", required=True, help="One of the sensors of `firnlight methods`.")
@click.option("--pattern", required=True, help='File names, such as "{tile}_{date}_{band}.tif".')
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder for the items; default beside the rasters.",
)
@click.option("--reflectance", type=click.Choice(["surface", "top of atmosphere"]), default="surface", show_default=True,
              help="What the numbers are; Level-1 files hold top-of-atmosphere reflectance.")  # fmt: skip
@click.option("--scale", type=float, help="Reflectance per stored number, where no metadata tells it.")
@click.option("--offset", type=float, help="Reflectance of stored number 0, where no metadata tells it.")
@click.option("--nodata", type=float, help="Stored number of an empty cell, where no metadata tells it.")
@click.option(
    "--time",
    "time_utc",
    help="Time of day of the acquisitions, UTC, as HH:MM:SS, where no metadata tells it.",
)
@quiet_option
def describe(
    folder: Path, sensor: str, pattern: str, out: Path | None, reflectance: str, scale: float | None, offset: float | None,
    nodata: float | None, time_utc: str | None, quiet: bool,
) -> int:  # fmt: skip
    """\b
    Examples:
      firnlight describe scenes --sensor oli --pattern "{tile}_{date}_{band}.tif"
      firnlight describe scenes --sensor msi --pattern "{tile}_{date}_{band}.jp2" --out items

    Write STAC items for plain folders of band rasters, so that `firnlight night` can read them.

    Writes one .json per scene. Never touches the rasters. Next: firnlight check WORKFLOW
    """
    from firnlight.io.describe import describe as write_items

    written = write_items(
        folder,
        sensor,
        pattern,
        out=out,
        reflectance=reflectance,
        scale=scale,
        offset=offset,
        nodata=nodata,
        time=time_utc,
    )
    for path in written:
        click.echo(str(path))
    if not quiet:
        click.echo(f"{len(written)} items written.", err=True)
        say_next("firnlight check WORKFLOW", quiet)
    return 0


@commands.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--tiles", type=click.IntRange(1, 400), default=2, show_default=True, help="Number of tiles.")
@click.option(
    "--size",
    type=click.IntRange(16, 21960),
    default=256,
    show_default=True,
    help="Rows and columns of a tile, 30 m cells.",
)
@click.option("--scenes", type=click.IntRange(1, 400), default=3, show_default=True, help="Acquisition dates per year.")
@click.option("--years", type=click.IntRange(1, 50), default=1, show_default=True, help="Hydrological years.")
@click.option("--seed", type=int, default=7, show_default=True, help="Seed of all that is random.")
@quiet_option
def demo(folder: Path, tiles: int, size: int, scenes: int, years: int, seed: int, quiet: bool) -> int:
    """\b
    Examples:
      firnlight demo morrowfell
      firnlight demo morrowfell --tiles 4 --size 1024 --scenes 12

    Write the invented Morrowfell area at any size, with its truth and a ready workflow. Tiles above 512
    cells a side have the truth of albedo and cloud, not that of fluxes.

    Writes into FOLDER, which must be new or empty. Next: firnlight night FOLDER/workflow.toml
    """
    from firnlight.demo.area import write_demo

    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise SettingsProblem(str(folder), "folder", "not empty", "a new or empty folder", "name another folder")
    written = write_demo(folder, tiles=tiles, size=size, scenes=scenes, years=years, seed=seed)
    click.echo(f"{len(written)} files written to {folder}.")
    say_next(f"firnlight night {folder / 'workflow.toml'}", quiet)
    return 0
