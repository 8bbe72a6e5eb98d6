"""Force-dipole tensors of cells, with error bars, from bead images of soft gels.

``import tfm`` is light: the rooms (:mod:`tfm.gel`, :mod:`tfm.images`, ...) are imported on first use.
Frame, signs and units are those of ``docs/conventions.md`` everywhere.
"""

__all__ = ["__version__"]

__version__ = "0.1.0"
