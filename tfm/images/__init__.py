"""Files with beads and outlines: what an image says about itself, one frame at a time, and which pixel is which cell.

``open_frames`` reads the header and checks what it claims; ``BeadStack.frame`` reads one plane. ``read_outlines`` and
``read_outline_stack`` turn drawings, regions and label images into ``Outlines``; ``propose_outline`` makes a guess from
the measured displacement, marked as such.
"""

from tfm.images.faults import ImageFault, image_faults
from tfm.images.follow import LabelFollower, cells_cut_by_edge, follow_labels, touching_groups
from tfm.images.frames import BeadStack, focus_measure, matching_shape, open_frames, resolve_pixel_size
from tfm.images.model import Outlines
from tfm.images.outlines import OutlineStack, read_outline_stack, read_outlines
from tfm.images.proposal import propose_outline

__all__ = [
    "BeadStack",
    "ImageFault",
    "LabelFollower",
    "OutlineStack",
    "Outlines",
    "cells_cut_by_edge",
    "focus_measure",
    "follow_labels",
    "image_faults",
    "matching_shape",
    "open_frames",
    "propose_outline",
    "read_outline_stack",
    "read_outlines",
    "resolve_pixel_size",
    "touching_groups",
]
