"""Does the gel that was typed in explain the beads? Evidence, cost of a wrong entry, slips of the pen."""

from tfm.gelcheck.check import FreePoisson, GelEvidence, check_gel, free_poisson, pool_gel, strain_peak
from tfm.gelcheck.evidence import GelEstimate, Interval
from tfm.gelcheck.plausibility import Outlier, Slip, plausibility, plausible_gel
from tfm.gelcheck.sensitivity import GelChange, Sensitivity

__all__ = [
    "FreePoisson",
    "GelChange",
    "GelEstimate",
    "GelEvidence",
    "Interval",
    "Outlier",
    "Sensitivity",
    "Slip",
    "check_gel",
    "free_poisson",
    "plausibility",
    "plausible_gel",
    "pool_gel",
    "strain_peak",
]
