"""How each camera and the pairing stand: the part of the node's status that the feed gives."""

from __future__ import annotations

from typing import Annotated, Literal

from msgspec import Meta, Struct

CameraState = Literal["opening", "delivering", "stalled", "frozen", "wrong size", "same picture", "absent", "ended"]
"""``same picture``: the other camera gives the very same images, so that both are one camera."""

_Count = Annotated[int, Meta(ge=0, le=2**63 - 1)]
_Text = Annotated[str, Meta(max_length=1000)]


class CameraReport(Struct, frozen=True, kw_only=True):
    """A camera's part of the node's status.

    Attributes
    ----------
    state : str
        One of ``CameraState``.
    state_s : float
        Seconds since it is so.
    detail : str
        What is wrong and what to do, for a person; what the camera did not take of its settings, where all is well.
    images : int
        Images that came, since the node began.
    rate_hz : float
        Images that came a second, since the last status.
    lost : mapping of str to int
        Images that came to nothing, by reason, since the node began.
    """

    state: CameraState
    state_s: Annotated[float, Meta(ge=0, le=1e15)]
    detail: _Text
    images: _Count
    rate_hz: Annotated[float, Meta(ge=0, le=1e15)]
    lost: Annotated[dict[_Text, _Count], Meta(max_length=256)]


class FeedView(Struct, frozen=True, kw_only=True):
    """How a feed of pairs stands.

    Attributes
    ----------
    cameras : mapping of str to CameraReport
        Of ``a`` and ``b``.
    clock_offset_ms, clock_offset_sigma_ms : float or None
        B's clock minus A's, as given or estimated, and the estimate's standard deviation; None where not known.
    """

    cameras: dict[str, CameraReport] = {}
    clock_offset_ms: float | None = None
    clock_offset_sigma_ms: float | None = None
