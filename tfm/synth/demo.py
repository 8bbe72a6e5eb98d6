"""The invented study that ``tfm demo`` writes: bead images, outlines, a sheet, and the forces that were put in."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tfm.gel import Gel
from tfm.synth.beads import Camera, make_beads
from tfm.synth.cells import SyntheticCell, make_cell_traction
from tfm.synth.demo_files import PIXEL, README, write_outline, write_planes, write_table, write_tiff
from tfm.synth.fields import SyntheticField, cell_displacements, make_bead_images, make_field
from tfm.synth.forward import displacement_at
from tfm.units import from_si

__all__ = ["DEMO_SEED", "write_demo"]

#: The seed from which every number of the demo follows.
DEMO_SEED = 20_461

_DENSITY, _PHOTONS = 0.025, 600.0  # beads per pixel, photons per bead and frame
_SHEET = (
    "field", "condition", "stressed", "relaxed", "outline", "pixel", "youngs_modulus", "youngs_modulus_sd", "poisson",
    "poisson_sd", "thickness", "noise_energy",
)  # fmt: skip
_TRUTH = (
    "field", "cell", "frame", "planted_problem", "x_um", "y_um", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm",
    "contractile_moment_pNm", "axis_deg", "strain_energy_fJ", "youngs_modulus_Pa", "poisson", "thickness_um",
)  # fmt: skip
_PAIRS = ("field", "frame", "cell_a", "cell_b", "energy_fJ")


@dataclass
class _Study:
    """Rows gathered while the fields are written."""

    root: Path
    sheet: list[dict[str, str]] = field(default_factory=list)
    truth: list[dict[str, str]] = field(default_factory=list)
    pairs: list[dict[str, str]] = field(default_factory=list)


def write_demo(directory: str | Path) -> Path:
    """Write the demo study into ``directory`` and return the path of its sheet.

    Invented tendon fibroblasts on gels of 2, 6 and 18 kPa (four fields each, moments drawn around
    1.6 pN m E / (E + 10 kPa)), two neighbours on a 15 um thin gel, a short time series, and two fields with a planted
    problem. Everything follows from :data:`DEMO_SEED`: written again, the files are the same bytes.
    """
    root = Path(directory)
    (root / "images").mkdir(parents=True, exist_ok=True)
    (root / "outlines").mkdir(exist_ok=True)
    study = _Study(root)
    _stiffness_series(study)
    _neighbours(study)
    _time_series(study)
    _wrong_poisson(study)
    _stranger(study)
    sheet = root / "sheet.csv"
    write_table(sheet, _SHEET, study.sheet)
    write_table(root / "truth.csv", _TRUTH, study.truth)
    write_table(root / "truth_pairs.csv", _PAIRS, study.pairs)
    (root / "README.txt").write_text(README, encoding="utf-8")
    return sheet


def _stiffness_series(study: _Study) -> None:
    for index, stiffness in enumerate((2e3, 6e3, 18e3)):
        for repeat in range(4):
            rng = np.random.default_rng((DEMO_SEED, index, repeat))
            moment = 1.6e-12 * stiffness / (stiffness + 10e3) * float(rng.lognormal(0, 0.15))
            cell = _cell(rng, (512, 512), (51e-6 + rng.uniform(-8e-6, 8e-6), 51e-6 + rng.uniform(-8e-6, 8e-6)), moment)
            gel = Gel(youngs_modulus=stiffness, poisson=0.48, thickness=60e-6)
            made = _images(rng, [cell], gel)
            name = f"tendon_{stiffness / 1e3:.0f}kPa_{'abcd'[repeat]}"
            suffix = ("label", "geojson", "roi", "label")[repeat]
            _store(
                study,
                name,
                made,
                outline=suffix,
                ome=repeat == 3,
                thickness="60 um",
                modulus_sd=f"{stiffness * 0.05:.0f} Pa",
                condition=f"{stiffness / 1e3:.0f} kPa",
            )


def _neighbours(study: _Study) -> None:
    rng = np.random.default_rng((DEMO_SEED, 10))
    first = _cell(rng, (512, 512), (31e-6, 47e-6), 0.50e-12, length=36e-6, angle=0.15)
    second = _cell(rng, (512, 512), (71e-6, 56e-6), 0.42e-12, length=36e-6, angle=0.35)
    made = _images(rng, [first, second], Gel(youngs_modulus=6e3, poisson=0.48, thickness=15e-6))
    _store(
        study,
        "neighbours_thin_gel",
        made,
        outline="label",
        ome=False,
        thickness="15 um",
        modulus_sd="300 Pa",
        condition="pair, 6 kPa",
        noise="0.02 fJ",
    )


def _time_series(study: _Study) -> None:
    """One cell that first pulls harder and then relaxes, six frames two minutes apart, one relaxed frame."""
    rng = np.random.default_rng((DEMO_SEED, 20))
    shape = (384, 384)
    gel = Gel(youngs_modulus=6e3, poisson=0.48, thickness=60e-6)
    cell = _cell(rng, shape, (38.4e-6, 38.4e-6), 0.45e-12, length=32e-6)
    alone = cell_displacements([cell], gel)[0]
    beads = make_beads(shape, _DENSITY, rng, margin=12, photons=_PHOTONS)
    shifts = displacement_at(alone / PIXEL, -16.0, 1.0, beads.positions)
    levels = (0.55, 0.72, 0.90, 1.0, 0.93, 0.78)
    base = make_field([cell], gel, rng, fields=[alone])
    frames: list[NDArray[np.uint16]] = []
    relaxed = base.relaxed
    for number, level in enumerate(levels):
        drift = (0.3 * number, -0.2 * number)
        first, stressed, _, _ = make_bead_images(
            shape, beads, level * shifts, rng, sigma=1.25, camera=Camera(), drift=drift
        )
        relaxed = first if number == 0 else relaxed
        frames.append(stressed)
        _truth_rows(study, "time_series", _scaled(base, level), frame=number)
    write_tiff(study.root / "images/time_series_relaxed.tif", relaxed)
    write_planes(
        study.root / "images/time_series_stressed.tif",
        np.stack(frames),
        imagej=True,
        resolution=(1e-6 / PIXEL, 1e-6 / PIXEL),
        metadata={"axes": "TYX", "unit": "um", "finterval": 120.0, "tunit": "s"},
    )
    write_planes(study.root / "outlines/time_series.tif", base.labels.astype(np.uint8))
    study.sheet.append(
        _sheet_row(
            "time_series", "time_series", "outlines/time_series.tif", "6 kPa", "300 Pa", "60 um", "series, 6 kPa"
        )
    )


def _wrong_poisson(study: _Study) -> None:
    """The sheet says nu = 0.30; the beads moved as on a gel of 0.49."""
    rng = np.random.default_rng((DEMO_SEED, 30))
    cell = _cell(rng, (512, 512), (50e-6, 52e-6), 0.60e-12)
    made = _images(rng, [cell], Gel(youngs_modulus=6e3, poisson=0.49, thickness=60e-6))
    _store(
        study,
        "wrong_poisson",
        made,
        outline="label",
        ome=False,
        thickness="60 um",
        modulus_sd="300 Pa",
        condition="planted problem",
        poisson="0.30",
        problem="sheet says poisson 0.30, beads moved on 0.49",
    )


def _stranger(study: _Study) -> None:
    """Two cells pull, one of them has no outline."""
    rng = np.random.default_rng((DEMO_SEED, 40))
    first = _cell(rng, (512, 512), (36e-6, 40e-6), 0.55e-12, length=36e-6)
    second = _cell(rng, (512, 512), (74e-6, 74e-6), 0.70e-12, length=34e-6)
    made = _images(rng, [first, second], Gel(youngs_modulus=6e3, poisson=0.48, thickness=60e-6))
    hidden = replace(made, labels=np.where(made.labels == 1, 1, 0).astype(np.int32))
    _store(
        study,
        "missing_outline",
        hidden,
        outline="label",
        ome=False,
        thickness="60 um",
        modulus_sd="300 Pa",
        condition="planted problem",
        problem="a second cell pulls and has no outline",
    )


def _cell(
    rng: np.random.Generator,
    shape: tuple[int, int],
    centre: tuple[float, float],
    moment: float,
    *,
    length: float = 42e-6,
    angle: float | None = None,
) -> SyntheticCell:
    return make_cell_traction(
        shape,
        PIXEL,
        centre=(float(centre[0]), float(centre[1])),
        length=length * float(rng.uniform(0.92, 1.08)),
        width=length * float(rng.uniform(0.38, 0.48)),
        angle=float(rng.uniform(-1.5, 1.5)) if angle is None else angle,
        contractile_moment=moment,
        rng=rng,
        anisotropy=float(rng.uniform(0.2, 0.7)),
        kind=str(rng.choice(["elongated", "elongated", "spiky"])),
    )


def _images(rng: np.random.Generator, cells: list[SyntheticCell], gel: Gel) -> SyntheticField:
    drift = tuple(float(v) for v in rng.uniform(-2.5, 2.5, 2))
    return make_field(
        cells,
        gel,
        rng,
        density_per_px2=_DENSITY,
        photons=_PHOTONS,
        sigma=1.25,
        camera=Camera(),
        drift=(drift[0], drift[1]),
    )


def _scaled(made: SyntheticField, level: float) -> SyntheticField:
    return replace(made, dipoles=made.dipoles * level, strain_energies=made.strain_energies * level**2)


def _store(
    study: _Study,
    name: str,
    made: SyntheticField,
    *,
    outline: str,
    ome: bool,
    thickness: str,
    modulus_sd: str,
    condition: str,
    poisson: str = "0.48",
    noise: str = "",
    problem: str = "",
) -> None:
    """Images, outline, sheet row and truth rows of one field."""
    ending = ".ome.tif" if ome else ".tif"
    write_tiff(study.root / f"images/{name}_relaxed{ending}", made.relaxed, ome=ome)
    write_tiff(study.root / f"images/{name}_stressed{ending}", made.stressed, ome=ome)
    path = write_outline(study.root, name, made, outline)
    modulus = f"{made.gel.youngs_modulus / 1e3:g} kPa"
    row = _sheet_row(name, name, path, modulus, modulus_sd, thickness, condition, ending=ending)
    row.update({"poisson": poisson, "noise_energy": noise})
    study.sheet.append(row)
    _truth_rows(study, name, made, frame=0, problem=problem)


def _sheet_row(
    name: str,
    stem: str,
    outline: str,
    modulus: str,
    modulus_sd: str,
    thickness: str,
    condition: str,
    *,
    ending: str = ".tif",
) -> dict[str, str]:
    return {
        "field": name,
        "condition": condition,
        "stressed": f"images/{stem}_stressed{ending}",
        "relaxed": f"images/{stem}_relaxed{ending}",
        "outline": outline,
        "pixel": "0.2 um",
        "youngs_modulus": modulus,
        "youngs_modulus_sd": modulus_sd,
        "poisson": "0.48",
        "poisson_sd": "0.02",
        "thickness": thickness,
        "noise_energy": "",
    }


def _truth_rows(study: _Study, name: str, made: SyntheticField, *, frame: int, problem: str = "") -> None:
    for number, (cell, dipole, energy) in enumerate(
        zip(made.cells, made.dipoles, made.strain_energies, strict=True), start=1
    ):
        values, vectors = np.linalg.eigh(np.array([[dipole[0], dipole[1]], [dipole[1], dipole[2]]]))
        axis = vectors[:, int(np.argmax(np.abs(values)))]
        study.truth.append(
            {
                "field": name,
                "cell": str(number),
                "frame": str(frame),
                "planted_problem": problem,
                "x_um": f"{from_si(cell.centroid[0], 'um'):.4f}",
                "y_um": f"{from_si(cell.centroid[1], 'um'):.4f}",
                "dipole_xx_pNm": f"{from_si(dipole[0], 'pNm'):.6f}",
                "dipole_xy_pNm": f"{from_si(dipole[1], 'pNm'):.6f}",
                "dipole_yy_pNm": f"{from_si(dipole[2], 'pNm'):.6f}",
                "contractile_moment_pNm": f"{from_si(-(dipole[0] + dipole[2]), 'pNm'):.6f}",
                "axis_deg": f"{np.degrees(np.arctan(axis[1] / axis[0])):.3f}",
                "strain_energy_fJ": f"{from_si(energy, 'fJ'):.6f}",
                "youngs_modulus_Pa": f"{made.gel.youngs_modulus:g}",
                "poisson": f"{made.gel.poisson:g}",
                "thickness_um": "" if made.gel.thickness is None else f"{from_si(made.gel.thickness, 'um'):g}",
            }
        )
    for (a, b), energy in made.pair_energies.items():
        study.pairs.append(
            {
                "field": name,
                "frame": str(frame),
                "cell_a": str(a),
                "cell_b": str(b),
                "energy_fJ": f"{from_si(energy, 'fJ'):.6f}",
            }
        )
