"""What the report of a pose says of its figures and pictures: how to read each, what is good, what is bad."""

from __future__ import annotations

HEADLINES = {
    "good": "Yes, this pose may be used.",
    "doubtful": "With care: this pose works, but something speaks against trusting it yet.",
    "not usable": "No, do not use this pose.",
}

NO_SCALE_HEADLINE = "Not for metres: how long the baseline is, is not known."

NO_SCALE = (
    "No metres come of this pose: distances are counted in baselines, and nothing that needs a length may use it. "
    "Give one length to make it metric: the measured baseline, the baseline of the rig before, or a length "
    "between two picked points."
)

SCALE = (
    "Every depth is as true as the lengths below: had they been measured 1 % too large, every depth would be 1 % "
    "too large, and no other figure on this page would show it."
)

NO_LENGTHS = "No length was given, so the scale is that of the rig before, unchecked."

NOT_FOR = (
    "distances where no point lay, which were not looked at; not after a camera, a lens, its focus or the mount "
    "was touched: check or solve again first. Never as a protective device for people."
)

NOTHING_TO_DO = (
    "Nothing needs doing. Keep this page beside the rig, and check the rig after every knock and every change of "
    "the mount or the temperature."
)

SHARPEN = (
    "Take more pairs, with texture near and far all over both pictures; where that does not help, put the cameras "
    "further apart."
)

DEPTH = (
    "What the uncertainty of the pose alone does to depth, one standard deviation: two of three poses solved so "
    "are nearer than this. It is the same in every frame and does not average away; more pairs and points nearer "
    "to the picture's edges, near and far, make it smaller. An error of the lenses, which are taken as given, "
    "comes on top, and so does the noise of each match (dotted, new in every frame)."
)

STAGES = (
    "Each step starts from the one above and says how far it moved the pose. Good: the steps get smaller, and so "
    "does the noise. Bad: a late step that moves the pose by a degree or more: the matches before it were poor."
)

RELATED = (
    "Errors of points near one another go together, as if there were fewer: the variances were raised "
    "{relatedness:.1f} times for it."
)

EPIPOLAR = (
    "Rings: matched points, with their numbers. Each line (its number on a white disc) is where the partner's ray "
    "runs, by this pose, through this camera's lens: it must pass through the middle of the ring of its number. "
    "It ends within the picture where the point would be infinitely far, or at the other camera. Good: all do, "
    "all over the picture. Bad: lines beside their rings, all to one side or worse in one part: the lens is not "
    "as the given rig says, or the pictures are not of one instant."
)

NO_EPIPOLAR = "No match agrees with the pose, so there is none to draw."

ARROWS = (
    "What is left when each point has its best place; along the line the two cameras cannot disagree. Good: short "
    "arrows of both kinds, mixed everywhere. Bad: one kind in one part of the picture: the lens model does not "
    "fit there, or something moved between the two pictures. Of very many points only some are drawn."
)

HISTOGRAM = (
    "Good: the outline follows its dotted normal curve. Bad: a peak beside zero, or tails that hold much of it: "
    "wrong matches, or things that moved. Points beyond 4.7 times the noise have no say."
)

COVERAGE = (
    "Each dot is a point that counts (of very many only some are drawn). In the hatched parts nothing holds the "
    "pose: put texture there, at several distances, where both cameras see it."
)

DISTANCES = (
    "Good: points at near and far distances. Bad: all at one distance, as on one wall: a turn of a camera then "
    "hides behind a shift of it, and depth elsewhere is worse than it looks."
)
