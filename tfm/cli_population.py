"""Commands that start from tables: conditions, stiffness, export, map, beats, plan."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from tfm.cli_options import Debug, one_thread_each, option_quantity, say
from tfm.errors import InputError

if TYPE_CHECKING:
    from tfm.gel import Gel

__all__ = ["register"]

Folders = Annotated[list[Path], typer.Argument(help="Results folders of runs.")]
OutputFolder = Annotated[Path, typer.Option("--output", "-o", help="Folder for tables and figures.")]
YoungsModulus = Annotated[str, typer.Option(help="Young's modulus with its unit, for instance '5 kPa'.")]
Poisson = Annotated[str, typer.Option(help="Poisson ratio, 0 to 0.5.")]
Thickness = Annotated[str | None, typer.Option(help="Thickness of the gel, for instance '30 um'. Default: infinite.")]


def _gel(youngs_modulus: str, poisson: str, thickness: str | None) -> Gel:
    from tfm.gel import Gel

    return Gel(
        option_quantity(youngs_modulus, "stress", "--youngs-modulus"),
        option_quantity(poisson, "dimensionless", "--poisson"),
        None if thickness is None else option_quantity(thickness, "length", "--thickness"),
    )


def _tell(sentences: list[str]) -> int:
    for sentence in sentences:
        say(sentence)
    return 0


def conditions(folders: Folders, output: OutputFolder, debug: Debug = False) -> int:
    """Mean and spread between cells of every condition, measurement error removed, and their differences."""
    from tfm.population.commands import write_conditions

    return _tell(write_conditions(folders, output))


def stiffness(folders: Folders, output: OutputFolder, debug: Debug = False) -> int:
    """Dipole against stiffness across conditions: fitted response, optimum, intervals."""
    from tfm.population.commands import write_stiffness

    return _tell(write_stiffness(folders, output))


def export(
    folder: Annotated[Path, typer.Argument(help="Results folder of a run.")],
    output: Annotated[Path, typer.Option("--output", "-o", help="File for the JSON document.")],
    frame: Annotated[str, typer.Option(help="y-down (the image's) or y-up (mirrored).")] = "y-down",
    draws: Annotated[int, typer.Option(min=0, help="Dipoles to draw from every condition's population.")] = 0,
    seed: Annotated[int, typer.Option(min=0, help="Seed of the draws.")] = 0,
    debug: Debug = False,
) -> int:
    """Dipoles for a mechanical model: one JSON document with a published schema."""
    from tfm.population.commands import write_export

    return _tell(write_export(folder, output, frame=frame, draws=draws, seed=seed))


def energy_map(
    cells: Annotated[Path, typer.Argument(help="Table of cells; cells.csv will do.")],
    field: Annotated[str, typer.Option(help="Field of the cell in the middle.")],
    cell: Annotated[str, typer.Option(help="Its number.")],
    youngs_modulus: YoungsModulus,
    poisson: Poisson,
    output: OutputFolder,
    thickness: Thickness = None,
    frame: Annotated[str, typer.Option(help="Frame of the series.")] = "0",
    reach: Annotated[str, typer.Option(help="Half width of the map.")] = "100 um",
    nearest: Annotated[str | None, typer.Option(help="Distance below which the map stays empty.")] = None,
    debug: Debug = False,
) -> int:
    """Interaction energy of a second cell at every place around a measured one."""
    from tfm.population.commands import write_map

    near = None if nearest is None else option_quantity(nearest, "length", "--nearest")
    far = option_quantity(reach, "length", "--reach")
    gel = _gel(youngs_modulus, poisson, thickness)
    return _tell(write_map(cells, field, cell, gel, output, frame=frame, reach=far, nearest=near))


def beats(
    folder: Annotated[Path, typer.Argument(help="Results folder with time series.")],
    output: Annotated[
        Path | None, typer.Option("--output", "-o", help="File for the table. Default: beats.csv in the folder.")
    ] = None,
    debug: Debug = False,
) -> int:
    """Period, amplitude and rates of beating cells, lag and coherence of neighbours."""
    from tfm.population.beat_table import write_beats

    return _tell(write_beats(folder, output or folder / "beats.csv"))


def plan(
    youngs_modulus: YoungsModulus,
    poisson: Poisson,
    pixel: Annotated[str, typer.Option(help="Size of a pixel on the gel, for instance '0.2 um'.")],
    moment: Annotated[str, typer.Option(help="Contractile moment to expect, for instance '0.5 pN m'.")],
    output: OutputFolder,
    thickness: Thickness = None,
    distance: Annotated[str | None, typer.Option(help="Distance of two cells, for the pair energy.")] = None,
    field_px: Annotated[int, typer.Option(min=64, help="Edge of the square image in pixels.")] = 640,
    bead_density: Annotated[float, typer.Option(min=0.0, help="Beads per square pixel.")] = 0.02,
    photons: Annotated[float, typer.Option(min=1.0, help="Detected photons per bead and frame.")] = 500.0,
    bead_sigma: Annotated[str, typer.Option(help="Standard deviation of a bead's image.")] = "0.25 um",
    background: Annotated[float, typer.Option(min=0.0, help="Photons per pixel that come from no bead.")] = 10.0,
    read_noise: Annotated[float, typer.Option(min=0.0, help="Read noise, photons per pixel.")] = 1.5,
    cell_length: Annotated[str, typer.Option(help="Length of a cell.")] = "40 um",
    cell_width: Annotated[str, typer.Option(help="Width of a cell.")] = "16 um",
    cells: Annotated[int, typer.Option(min=1, help="Invented cells to average over.")] = 2,
    seed: Annotated[int, typer.Option(min=0, help="Seed of the invented cells.")] = 1,
    debug: Debug = False,
) -> int:
    """Before the experiment: the error bar to expect, and what would improve it most."""
    one_thread_each()
    from tfm.population.commands import write_plan
    from tfm.population.plan import Setup

    size = option_quantity(pixel, "length", "--pixel")
    if not size > 0:
        raise InputError(f"--pixel '{pixel}' is not above 0", code="bad-option", remedy="write for instance '0.2 um'")
    say("inventing cells of that size and measuring them; this takes about a minute")
    setup = Setup(
        gel=_gel(youngs_modulus, poisson, thickness),
        pixel_size=size,
        field_px=field_px,
        beads_per_area=bead_density / size**2,
        photons=photons,
        bead_sigma=option_quantity(bead_sigma, "length", "--bead-sigma"),
        background=background,
        read_noise=read_noise,
        cell_length=option_quantity(cell_length, "length", "--cell-length"),
        cell_width=option_quantity(cell_width, "length", "--cell-width"),
        contractile_moment=option_quantity(moment, "energy", "--moment"),
        distance=None if distance is None else option_quantity(distance, "length", "--distance"),
    )
    return _tell(write_plan(setup, output, cells=cells, seed=seed))


def register(app: typer.Typer) -> None:
    """Add the commands of this module to the application."""
    for function, name in (
        (conditions, "conditions"),
        (stiffness, "stiffness"),
        (export, "export"),
        (energy_map, "map"),
        (beats, "beats"),
        (plan, "plan"),
    ):
        app.command(name=name)(function)
