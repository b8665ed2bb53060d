"""References: the desired motion as compiled functions of time, one kind per file.

Every reference is an approach move from the measured pose to the body's first pose, then the body, then rest at the last pose.
Position, velocity and acceleration are continuous throughout. A kind is a file with `KIND`, `prepare` (cold) and the compiled
`begin` and `sample`; `hold` shows the least of it. Start reading in `minimum_jerk`.
"""

from rtctl.references.motion import begin_motion, sample_motion
from rtctl.references.motion_check import check_reference
from rtctl.references.reference import KINDS, Reference, ReferenceSettings, prepare_reference

__all__ = [
    "KINDS",
    "Reference",
    "ReferenceSettings",
    "begin_motion",
    "check_reference",
    "prepare_reference",
    "sample_motion",
]
