"""Room ``displacement``: two bead images in, displacement with the precision of every vector out."""

from tfm.displacement.drift import RigidMotion, estimate_drift, fit_rigid_motion
from tfm.displacement.measure import measure_displacement, quiet_nodes
from tfm.displacement.model import DisplacementField
from tfm.displacement.noise import camera_noise, vector_noise
from tfm.displacement.piv import PivField, piv_start
from tfm.displacement.prepare import PreparedFrame, bead_width, brightness_ratio, prepare_frame, sharpest_plane
from tfm.displacement.quality import QUALITY_LIMITS, FieldQuality, judge_quality
from tfm.displacement.refine import RefinedField, refine_displacement

__all__ = [
    "QUALITY_LIMITS",
    "DisplacementField",
    "FieldQuality",
    "PivField",
    "PreparedFrame",
    "RefinedField",
    "RigidMotion",
    "bead_width",
    "brightness_ratio",
    "camera_noise",
    "estimate_drift",
    "fit_rigid_motion",
    "judge_quality",
    "measure_displacement",
    "piv_start",
    "prepare_frame",
    "quiet_nodes",
    "refine_displacement",
    "sharpest_plane",
    "vector_noise",
]
