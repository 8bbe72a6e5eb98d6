"""``fields/<field>.nc``: the arrays of a field, written frame by frame so that a long series needs no more memory.

Dimensions and variables (SI units, image frame: x to the right, y down, origin at the centre of pixel (0, 0)):

=========================  ====================================  ====  =======================================
``displacement``           frame, component, y, x                m     position under load minus relaxed
``displacement_precision`` frame, tensor, y, x                   m-2   inverse covariance: xx, xy, yy
``traction``               frame, component, lattice_y, _x       Pa    force per area of the cell on the gel
``traction_displacement``  frame, component, lattice_y, _x       m     displacement that this traction causes
``labels``                 frame, lattice_y, _x                  1     cell of every lattice point, 0 = none
``relaxed_image``          image_y, image_x                      1     bead image, grey levels 0 to 255
``stressed_image``         frame, image_y, image_x               1     bead image, grey levels 0 to 255
``residual_image``         frame, image_y, image_x               1     stressed image moved back minus relaxed
=========================  ====================================  ====  =======================================

A vector that was not measured is NaN; a frame that failed is NaN throughout.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from types import TracebackType
from typing import Any

import h5netcdf
import h5py
import numpy as np
from numpy.typing import NDArray

from tfm.batch.atomic import storage_guard
from tfm.batch.sink import PatientFile
from tfm.errors import MeasurementError

__all__ = ["FieldWriter", "verify_netcdf"]

_LABELLED: dict[str, tuple[tuple[str, ...], str, str, str]] = {
    "displacement": (("frame", "component", "y", "x"), "f4", "m", "position under load minus relaxed position"),
    "displacement_precision": (("frame", "tensor", "y", "x"), "f4", "m-2", "inverse covariance of the displacement"),
    "traction": (
        ("frame", "component", "lattice_y", "lattice_x"),
        "f4",
        "Pa",
        "force per area that the cells apply to the gel",
    ),
    "traction_displacement": (
        ("frame", "component", "lattice_y", "lattice_x"),
        "f4",
        "m",
        "displacement that the traction causes",
    ),
    "labels": (("frame", "lattice_y", "lattice_x"), "i4", "1", "cell of every lattice point, 0 = none"),
    "relaxed_image": (("image_y", "image_x"), "u1", "1", "relaxed bead image, grey levels stretched to 0..255"),
    "stressed_image": (("frame", "image_y", "image_x"), "u1", "1", "stressed bead image, the same grey levels"),
    "residual_image": (
        ("frame", "image_y", "image_x"),
        "i1",
        "1",
        "stressed image moved back by the displacement minus relaxed image, in standard deviations of the latter",
    ),
}
#: Grey levels of the residual per stored unit.
RESIDUAL_STEP = 0.05


class FieldWriter:
    """Writes one field's arrays; a context manager around the temporary file that :func:`atomic_file` renames.

    Parameters
    ----------
    path
        File to create.
    attributes
        Global attributes: text and numbers.
    """

    def __init__(self, path: Path, attributes: Mapping[str, str | float | int]) -> None:
        self._path = path
        self._frames = 0
        with storage_guard(path):
            self._disk = PatientFile(path)
            self._file = h5netcdf.File(self._disk, "w")
            self._file.attrs["Conventions"] = "CF-1.11"
            for name, value in attributes.items():
                self._file.attrs[name] = value
            self._file.dimensions["frame"] = None
            self._axis_text("component", ["x", "y"])
            self._axis_text("tensor", ["xx", "xy", "yy"])

    def __enter__(self) -> FieldWriter:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._file.close()
        self._disk.close()
        if kind is None:
            with storage_guard(self._path):
                self._disk.check()

    def _axis_text(self, name: str, words: list[str]) -> None:
        self._file.dimensions[name] = len(words)
        variable = self._file.create_variable(name, (name,), dtype=h5py.string_dtype())
        variable[...] = np.array(words, dtype=object)

    def axis(self, name: str, values: NDArray[Any], *, direction: str) -> None:
        """Positions along a dimension, in m; a second call must bring the same grid."""
        if name in self._file.dimensions:
            known = np.asarray(self._file.variables[name][...])
            if known.shape != values.shape or not np.allclose(known, values, rtol=1e-9, atol=1e-12):
                raise MeasurementError(
                    f"the grid along {name} changed within the series",
                    code="grid-changed",
                    remedy="give outlines and images of one shape for the whole series",
                )
            return
        self._file.dimensions[name] = len(values)
        variable = self._file.create_variable(name, (name,), dtype="f8")
        variable[...] = values
        variable.attrs["units"] = "m"
        variable.attrs["long_name"] = f"position {direction} from the centre of pixel (0, 0)"

    def put(self, frame: int, arrays: Mapping[str, NDArray[Any]]) -> None:
        """Write arrays of one frame; the axes have to be there already."""
        with storage_guard(self._path):
            self._grow(frame)
            for name, values in arrays.items():
                self._put(name, frame, values)
            self._file.flush()
            self._disk.check()

    def _put(self, name: str, frame: int, values: NDArray[Any]) -> None:
        dims, dtype, unit, meaning = _LABELLED[name]
        if name not in self._file.variables:
            options: dict[str, Any] = {"compression": "gzip", "compression_opts": 4, "shuffle": True}
            sizes = tuple(1 if d == "frame" else self._file.dimensions[d].size for d in dims)
            variable = self._file.create_variable(
                name, dims, dtype=dtype, chunks=sizes, fillvalue=np.nan if dtype == "f4" else None, **options
            )
            variable.attrs["units"] = unit
            variable.attrs["long_name"] = meaning
            if name == "residual_image":
                variable.attrs["scale_factor"] = RESIDUAL_STEP
        variable = self._file.variables[name]
        if dims[0] == "frame":
            variable[frame] = values
        else:
            variable[...] = values

    def times(self, values: NDArray[Any]) -> None:
        """Seconds since the first frame, one per frame written."""
        with storage_guard(self._path):
            variable = self._file.create_variable("time", ("frame",), dtype="f8")
            self._grow(len(values) - 1)
            variable[...] = values
            variable.attrs["units"] = "s"
            variable.attrs["long_name"] = "time since the first frame"

    def _grow(self, frame: int) -> None:
        if frame >= self._frames:
            self._frames = frame + 1
            self._file.resize_dimension("frame", self._frames)


def verify_netcdf(path: Path) -> None:
    """Read the file's structure back.

    Raises
    ------
    OSError
        When it cannot be opened, or a variable cannot be read.
    """
    with h5netcdf.File(path, "r") as file:
        for variable in file.variables.values():
            if variable.ndim and all(variable.shape):
                variable[tuple(0 for _ in range(variable.ndim))]
