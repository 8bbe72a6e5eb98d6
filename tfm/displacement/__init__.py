"""Room ``displacement``: two bead images in, displacement with the precision of every vector out."""

from tfm.displacement.drift import RigidMotion, estimate_drift, fit_rigid_motion
from tfm.displacement.measure import measure_displacement
from tfm.displacement.model import DisplacementField
from tfm.displacement.piv import PivField, piv_start

__all__ = [
    "DisplacementField",
    "PivField",
    "RigidMotion",
    "estimate_drift",
    "fit_rigid_motion",
    "measure_displacement",
    "piv_start",
]
