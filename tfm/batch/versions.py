"""Versions of what computed a result, for its record and for run.json."""

from __future__ import annotations

import platform
from functools import cache
from importlib.metadata import PackageNotFoundError, version

from tfm import __version__
from tfm.batch.key import ALGORITHM_VERSION

__all__ = ["versions"]

_LIBRARIES = ("numpy", "scipy", "scikit-image", "openpiv", "tifffile", "roifile", "xarray", "h5netcdf", "h5py", "pint")


@cache
def versions() -> dict[str, str]:
    """Package, algorithm, Python and libraries.

    Examples
    --------
    >>> sorted(versions())[:2]
    ['algorithm', 'h5netcdf']
    """
    found = {"tfm": __version__, "algorithm": ALGORITHM_VERSION, "python": platform.python_version()}
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:  # installed by other means than a package index
            found[name] = "unknown"
    return found
