"""From displacement or bead images to traction with its posterior."""

from tfm.traction.bounded import infer_bounded
from tfm.traction.fourier import infer_fourier
from tfm.traction.gaussian import LinearData, Solution
from tfm.traction.model import Posterior, TractionField
from tfm.traction.pixels import infer_image
from tfm.traction.sensitivity import mean_with_gel, solution_with_gel

__all__ = [
    "LinearData",
    "Posterior",
    "Solution",
    "TractionField",
    "infer_bounded",
    "infer_fourier",
    "infer_image",
    "mean_with_gel",
    "solution_with_gel",
]
