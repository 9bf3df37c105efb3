"""What the report says about its figures and pictures: how to read each, what is good, what is bad."""

from __future__ import annotations

SCALE = (
    "Every length is as true as the target: had its squares been measured 1 % too large, every depth would be 1 % too "
    "large, and no figure on this page would show it. Measure across many squares with a calliper or a steel rule."
)

NOT_FOR = (
    "other distances, which were not looked at; not for surfaces without texture; not after a camera, a lens, its focus or "
    "the mount was touched: check or calibrate again first. Never as a protective device for people."
)

NOTHING_TO_DO = (
    "Nothing needs doing. Save the rig, keep this page beside it, and check the rig after every knock and every change of "
    "the mount or the temperature."
)

DEPTH = (
    "One standard deviation: two of three measurements are nearer than this, nineteen of twenty nearer than twice this. "
    "The part of the calibration (dashed) is the same in every frame and does not average away; more and better views make "
    "it smaller. The part of the matching (dotted) is new in every frame and is Z²/(f·B) times the sigma of a match. An "
    "error in the target's own size comes on top. A step in the line of the worst place: from there on both cameras see a "
    "corner of the picture where the lens is less well known."
)

ARROWS = (
    "Good: short arrows that point every way. Bad: arrows that all point outward, inward or round in one part of the "
    "picture: the lens model does not fit there, or the target is bent."
)

HISTOGRAM = (
    "Good: both outlines follow the dotted normal curve. Bad: long tails (blurred or wrong views), or a peak that is not "
    "at zero."
)

COVERAGE = (
    "Each dot is a corner. The lens is known where dots are; in the hatched parts it is guessed: hold the target there."
)

POSES = (
    "Filled: boards used. Dashed outline: held out. Square A and triangle B: the cameras and how wide they see. Dotted "
    "lines: the view they share at the near and the far distance. Good: boards at all distances between the dotted lines, "
    "turned every way. Where the cameras do not stand as they do on the bench, the pairs were mixed up."
)

CORRELATIONS = (
    "The views tell only the sum or the difference of these well, not each by itself (1 or -1: not at all). That is usual "
    "between one lens coefficient and the next, and between a principal point and a turn. Between focal length and "
    "translation it says that the boards were too much alike: tilt them more, at more distances. The depth errors above "
    "count this."
)

NO_CORRELATIONS = "No two parameters depend on each other by more than 0.9: each is settled by itself."

WORST_VIEW = "Where one picture is far worse than the rest, look whether it is blurred or has glare, and leave it out."

EPIPOLAR = (
    "Rings: points that both cameras saw, with their numbers. Each line (its number on a white disc) is where the "
    "partner's ray runs, by the calibration, through this camera's lens: it must pass through the middle of the "
    "ring of its number. It ends within the picture where the point would be infinitely far, or at the other "
    "camera. Good: all do, all over the picture. Bad: lines beside their rings, all to one side or worse in one "
    "part: a camera or a lens moved, or pictures of two instants were taken for a pair."
)

NO_PAIRS = "No view of both cameras was used, so there are no partners to draw."
