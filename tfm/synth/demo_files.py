"""How the demo's images, outlines and tables are written: readable without extras, the same bytes every time."""

from __future__ import annotations

import csv
import io
import json
import zipfile
import zlib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import roifile
import tifffile
from numpy.typing import NDArray

from tfm.synth.fields import SyntheticField

__all__ = ["PIXEL", "README", "write_outline", "write_planes", "write_table", "write_tiff"]

#: m, pixel size of the demo.
PIXEL = 0.2e-6


def write_planes(path: Path, planes: NDArray[Any], **options: Any) -> None:
    """A deflate-compressed TIFF, one strip a plane.

    Compressed here and not by the library, which uses whatever codec is installed: the demo is to be the same bytes
    everywhere, and readable without any extra codec.
    """
    ordered = np.ascontiguousarray(planes, dtype=planes.dtype.newbyteorder("<"))
    stack = ordered.reshape(-1, *ordered.shape[-2:])
    strips = iter([zlib.compress(plane.tobytes(), 9) for plane in stack])
    tifffile.imwrite(
        path,
        strips,
        shape=ordered.shape,
        dtype=ordered.dtype,
        compression="zlib",
        rowsperstrip=stack.shape[1],
        **options,
    )


def write_tiff(path: Path, image: NDArray[np.uint16], *, ome: bool = False) -> None:
    """A bead image with its pixel size, as OME-TIFF or ImageJ-TIFF."""
    options: dict[str, Any] = {"resolution": (1e-6 / PIXEL, 1e-6 / PIXEL)}
    if ome:
        size = {
            "PhysicalSizeX": PIXEL * 1e6,
            "PhysicalSizeXUnit": "um",
            "PhysicalSizeY": PIXEL * 1e6,
            "PhysicalSizeYUnit": "um",
        }
        # A fixed identifier: the library would draw a new one each time.
        identifier = f"00000000-0000-4000-8000-{sum(path.name.encode()):012d}"
        write_planes(path, image, ome=True, metadata={"axes": "YX", "UUID": identifier, **size}, **options)
    else:
        write_planes(path, image, imagej=True, metadata={"unit": "um"}, **options)


def write_outline(root: Path, name: str, made: SyntheticField, kind: str) -> str:
    """The outline in one of three formats; returns its path relative to the sheet."""
    shown = [c for n, c in enumerate(made.cells, start=1) if (made.labels == n).any()]
    if kind == "label":
        path = f"outlines/{name}.tif"
        write_planes(root / path, made.labels.astype(np.uint8))
    elif kind == "geojson":
        path = f"outlines/{name}.geojson"
        features = [
            {
                "type": "Feature",
                "properties": {"name": f"cell {number}"},
                "geometry": {"type": "Polygon", "coordinates": [_ring(cell.polygon)]},
            }
            for number, cell in enumerate(shown, start=1)
        ]
        text = json.dumps({"type": "FeatureCollection", "features": features}, separators=(",", ":"))
        (root / path).write_text(text + "\n", encoding="utf-8")
    else:
        path = f"outlines/{name}.zip"
        buffer = io.BytesIO()
        with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
            for number, cell in enumerate(shown, start=1):
                # ImageJ counts from a pixel's corner, we from its centre.
                roi = roifile.ImagejRoi.frompoints((cell.polygon[::3] + 0.5).astype(np.float32))
                roi.roitype, roi.name = roifile.ROI_TYPE.POLYGON, f"cell {number}"
                archive.writestr(zipfile.ZipInfo(f"cell-{number}.roi", (1980, 1, 1, 0, 0, 0)), roi.tobytes())
        (root / path).write_bytes(buffer.getvalue())
    return path


def _ring(polygon: NDArray[np.float64]) -> list[list[float]]:
    points = [[round(float(x), 2), round(float(y), 2)] for x, y in polygon[::3]]
    return [*points, points[0]]


def write_table(path: Path, columns: Iterable[str], rows: Iterable[Mapping[str, str]]) -> None:
    with path.open("w", newline="", encoding="utf-8") as handle:
        writer = csv.DictWriter(handle, fieldnames=list(columns), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


README = """\
INVENTED DATA

Nothing here was measured. Cells, gels, beads and images were made by a computer program from one fixed seed, to show
what a study looks like and to let you compare what comes out with the forces that were put in.

The made-up study: tendon fibroblasts on soft gels.
  tendon_2kPa_a..d, tendon_6kPa_a..d, tendon_18kPa_a..d   one cell each, gel 60 um thick
  neighbours_thin_gel     two cells side by side on a gel only 15 um thick
  time_series             one cell, six frames two minutes apart, one relaxed frame
  wrong_poisson           planted problem: the sheet says Poisson ratio 0.30, the beads moved as on 0.49
  missing_outline         planted problem: a second cell pulls and nobody outlined it

Files
  sheet.csv         the cell sheet to run:  tfm run sheet.csv -o results
  images/           16-bit TIFF, 0.2 um pixels; ImageJ and OME flavour
  outlines/         label TIFF, GeoJSON (pixel coordinates), ImageJ ROI zip
  truth.csv         dipole (sum of position times force), moment, strain energy of every cell, as put in
  truth_pairs.csv   interaction energies, as put in

Moments of the single cells were drawn around 1.6 pN m E / (E + 10 kPa), E the gel's Young's modulus, with a spread
of 15 %.

How the images were made: about 0.025 beads per pixel at random positions, 600 photons each on average, a Gaussian image
of 1.25 px, 10 background photons per pixel, Poisson noise, read noise of 1.5 photons; new noise in every frame; the
whole stressed frame has drifted by up to 2.5 pixels.
"""
