"""What both cameras saw of a board in one pair, and why an image or a pair takes no part, in words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from .exchanged import Exchanged
from .result import SetAside
from .robust_solve import Misfit
from .targets import Sighting


@dataclass(frozen=True, eq=False, kw_only=True)
class View:
    """What both cameras saw of one board in one pair.

    Attributes
    ----------
    name_a, name_b : str
        File names, for messages.
    seen_a, seen_b : Sighting or None
        None where the board was not found.
    board : int
        Which of the target's boards.
    remarks_a, remarks_b : tuple of str
        What a person can see that is wrong with the image, or why the board was not found in it.
    """

    name_a: str
    name_b: str
    seen_a: Sighting | None
    seen_b: Sighting | None
    board: int = 0
    remarks_a: tuple[str, ...] = ()
    remarks_b: tuple[str, ...] = ()

    @property
    def pair_name(self) -> str:
        """Both file names."""
        return f"{self.name_a} with {self.name_b}"

    def remarks(self, camera: int) -> tuple[str, ...]:
        """Remarks on the image of one camera: 0 for A, 1 for B."""
        return (self.remarks_a, self.remarks_b)[camera]

    @property
    def all_remarks(self) -> tuple[str, ...]:
        """Remarks on both images, each with its file's name."""
        named = ((self.name_a, self.remarks_a), (self.name_b, self.remarks_b))
        return tuple(f"{name} {remark}" for name, remarks in named for remark in remarks)

    def missed_remarks(self, camera: int) -> tuple[str, ...]:
        """Remarks on the image of one camera in which the board was not found; none where it was."""
        return self.remarks(camera) if (self.seen_a, self.seen_b)[camera] is None else ()

    def missed(self) -> list[SetAside]:
        """Say of which image it is known why the board was not found in it."""
        sides = ((self.name_a, self.seen_a, self.remarks_a), (self.name_b, self.seen_b, self.remarks_b))
        return [
            SetAside(name=name, reason=joined("board not found", remarks))
            for name, seen, remarks in sides
            if seen is None and remarks
        ]


def joined(reason: str, remarks: Sequence[str], otherwise: str = "") -> str:
    """Follow a reason with the remarks, or with what else to look for where there are none."""
    more = "; ".join(remarks) or otherwise
    return f"{reason}: {more}" if more else reason


def misfit_reason(misfit: Misfit, remarks: Sequence[str], other_px: float | None, other: str) -> str:
    """Say why an image does not fit its camera.

    Parameters
    ----------
    misfit : Misfit
    remarks : sequence of str
    other_px : float or None
        Its RMS before the other camera, where it fits that.
    other : str
        The other camera's letter.
    """
    reason = f"RMS {misfit.rms_px:.2f} px against {misfit.typical_px:.2f} px elsewhere, limit {misfit.limit_px:.2f} px"
    if other_px is not None:
        return f"{reason}: it fits camera {other} (RMS {other_px:.2f} px) and looks like a picture of that camera"
    return joined(reason, remarks, "look for blur, glare, a bent or moving target, wrong corners")


def unlike_reason(misfit: Misfit, remarks: Sequence[str]) -> str:
    """Say why a pair does not fit the rig though each of its images fits its camera."""
    reason = (
        f"each image fits its own camera, both together do not (RMS {misfit.rms_px:.2f} px against "
        f"{misfit.typical_px:.2f} px elsewhere)"
    )
    return joined(reason, remarks, "did the target or a camera move between the two exposures?")


def exchanged_reason(pair: Exchanged) -> str:
    """Say that a pair's two images change places."""
    return (
        f"the two images look exchanged between the cameras: the other way round they fit with RMS {pair.exchanged_px:.2f} px, "
        f"as listed with {pair.listed_px:.2f} px: move each to its own camera's images"
    )
