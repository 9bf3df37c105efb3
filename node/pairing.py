"""Two streams of stamped images become pairs; every image ends in a pair or in a count of why it did not.

A pure value machine: no threads, no clocks of its own. Arrival times come in with the images. Who belongs to whom is
defined in :mod:`.nearest`; here it is found while images come, and decided as soon as later ones cannot change it. Stamps
of one camera are taken to rise: an image that comes out of order is sorted into place if nothing newer of its camera was
decided, and is late otherwise.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import Annotated, Literal

from msgspec import Meta, Struct

from .clock_offset import ClockOffset, OffsetEstimator
from .errors import ConfigError
from .nearest import mutually_nearest, pair_all, starts_with_a
from .shot import BOTH, CameraName, LostShot, Pair, Shot
from .stamp_stream import STEP_NS, StampStream

NO_PARTNER = "no partner"
LATE = "late"
CLOCK_JUMP = "clock jump"
NO_OFFSET = "no offset yet"
NO_STAMP = "no stamp"

MOST_WAITING = 32
"""Images of one camera; with more, what concerns the oldest is decided by what is there."""
_PATIENCE_INTERVALS = 3
_LEAST_PATIENCE_NS = 200_000_000
_MOST_PATIENCE_NS = 2_000_000_000

Decision = Pair | LostShot


class PairingSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[pairing]``.

    Attributes
    ----------
    tolerance_ms : float
        Largest skew of a pair.
    offset_ms : float or "estimate"
        B's clock minus A's; or have it estimated from when the images arrive.
    stamps : {"source", "arrival"}
        Which time counts: the stamp that the source gives, or the arrival in this process.
    """

    tolerance_ms: Annotated[float, Meta(ge=0, le=10_000)] = 15.0
    offset_ms: Annotated[float, Meta(ge=-1e9, le=1e9)] | Literal["estimate"] = 0.0
    stamps: Literal["source", "arrival"] = "source"

    def __post_init__(self) -> None:
        """Refuse what makes no sense together; a ValueError, for msgspec to name the table."""
        if not math.isfinite(self.tolerance_ms):
            raise ValueError(f"`tolerance_ms` is {self.tolerance_ms}; expected 0 to 10000")
        if self.offset_ms != "estimate" and not math.isfinite(self.offset_ms):
            raise ValueError(f'`offset_ms` is {self.offset_ms}; expected milliseconds or "estimate"')
        if self.stamps == "arrival" and self.offset_ms != 0:
            raise ValueError(
                f'`offset_ms` is {self.offset_ms!r} with `stamps` = "arrival"; expected 0, since all arrivals are by one '
                'clock: leave `offset_ms` out, or take `stamps` = "source"'
            )


class Pairer:
    """Finds each image's partner.

    Parameters
    ----------
    settings : PairingSettings
        Tolerance, clock offset.
    live : bool
        True: images come at their own pace, and a pair should leave as soon as its images are known to belong
        together, for which recent spacings of the stamps count as well. False: everything will come, each partner is
        chosen with all that could be closer in hand, and arrival times are not looked at.

    Notes
    -----
    A camera whose clock is set starts anew: what waits of it is counted as :data:`CLOCK_JUMP`, and its later images may
    be older than those already paired. Live, that is seen in how stamps and arrivals go together; without live images
    only where stamps fall back by more than a second.

    Raises
    ------
    ConfigError
        If arrival times would be needed where they mean nothing.
    """

    def __init__(self, settings: PairingSettings, *, live: bool) -> None:
        if not live and (settings.offset_ms == "estimate" or settings.stamps == "arrival"):
            key = 'offset_ms = "estimate"' if settings.offset_ms == "estimate" else 'stamps = "arrival"'
            raise ConfigError(
                f"[pairing] has {key} with a source that is not live; expected a clock offset in milliseconds and the "
                'source\'s stamps, since arrival tells nothing there: give offset_ms as a number, and stamps = "source"'
            )
        self._live = live
        self._by_arrival = settings.stamps == "arrival"
        self._tolerance_ns = round(settings.tolerance_ms * 1e6)
        self._given_ns = None if settings.offset_ms == "estimate" else round(settings.offset_ms * 1e6)
        self._streams: dict[CameraName, StampStream] = {camera: StampStream(camera) for camera in BOTH}
        self._a, self._b = self._streams["a"], self._streams["b"]
        self._clocks = OffsetEstimator()
        self._now_ns = 0
        self._paired_ns: int | None = None

    @property
    def waiting(self) -> dict[CameraName, int]:
        """How many images of each camera wait for a partner."""
        return {camera: len(stream.shots) for camera, stream in self._streams.items()}

    @property
    def offset(self) -> ClockOffset | None:
        """B's clock minus A's as it is used now; None while it is not yet estimated."""
        return self._clocks.estimate() if self._given_ns is None else ClockOffset(self._given_ns, None)

    @property
    def _offset_ns(self) -> int | None:
        return self._clocks.offset_ns if self._given_ns is None else self._given_ns

    def add(self, shot: Shot) -> list[Decision]:
        """Take one image; give what is decided by it, in order."""
        stream = self._streams[shot.camera]
        out: list[Decision] = []
        if self._live:
            if self._by_arrival:
                shot = replace(shot, image=replace(shot.image, stamp_ns=shot.arrived_ns))
            if not shot.stamp_ns:
                return [LostShot(shot.camera, NO_STAMP, 'a live image without a stamp; take stamps = "arrival"')]
            self._tell_time(shot.arrived_ns)
        # Images that nobody stamped are of one time, and pair in the order in which they come.
        stamp_ns = shot.stamp_ns or (self._given_ns or 0) * (shot.camera == "b")
        jump_ns = self._jump_ns(stream, stamp_ns, shot.arrived_ns)
        if jump_ns:
            out += self._restart(stream, jump_ns)
        untold = bool(jump_ns) and not any(isinstance(item, LostShot) and item.reason == CLOCK_JUMP for item in out)
        if self._live:
            self._clocks.add(shot.camera, stamp_ns, shot.arrived_ns)
        offset_ns = self._offset_ns
        stream.see(stamp_ns, shot.arrived_ns)
        if untold and self._live:  # nothing of this camera waited: its first image by the new clock has to tell
            return [*out, LostShot(shot.camera, CLOCK_JUMP, _jumped(stream, jump_ns))]
        if offset_ns is None:
            return [*out, LostShot(shot.camera, NO_OFFSET)]
        behind_ns = stream.insert(shot, stamp_ns)
        if behind_ns:
            return [*out, LostShot(shot.camera, LATE, f"{behind_ns / 1e6:.1f} ms older than an image already decided")]
        out += self._decide(offset_ns, lambda _: len(stream.shots) > MOST_WAITING)
        return out

    def expire(self, now_ns: int) -> list[Decision]:
        """Decide what has waited too long, by this host's clock; called a few times a second where images are live.

        Patience is twice the tolerance, and three intervals of the slower camera plus the difference of the cameras'
        shortest delays, the latter within 0.2 and 2 s. Two that are each other's nearest then are a pair, although a
        closer one may come; an image that has nobody is lost. Without live images, nothing is ever waited too long for.
        """
        offset_ns = self._offset_ns
        if not self._live or offset_ns is None:
            return []
        self._tell_time(now_ns)
        patience_ns = self._patience_ns(offset_ns)
        # An image from the future is by a clock that was set back since.
        return self._decide(offset_ns, lambda shot: not -STEP_NS <= now_ns - shot.arrived_ns <= patience_ns)

    def forget(self) -> list[LostShot]:
        """Give up all that waits, as when a camera went away: nothing old may be paired with what comes later.

        What was learned of stamps and clocks is forgotten too: the camera may come back with another clock.
        """
        lost: list[LostShot] = []
        for stream in self._streams.values():
            lost += [LostShot(stream.camera, NO_PARTNER) for _ in stream.take(len(stream.shots))]
            stream.begin()
            self._clocks.forget(stream.camera)
        self._paired_ns = None
        return lost

    def flush(self) -> list[Decision]:
        """Decide everything that still waits: nothing more will come."""
        offset_ns = self._offset_ns
        return [] if offset_ns is None else self._decide(offset_ns, lambda _: True)

    def _decide(self, offset_ns: int, give_up: Callable[[Shot], bool]) -> list[Decision]:
        """Decide, from the oldest image on, what is certain or shall not wait any longer."""
        out: list[Decision] = []
        a, b = self._a, self._b
        while a.stamps or b.stamps:
            found = mutually_nearest(a.stamps, b.stamps, offset_ns, self._tolerance_ns)
            if found:
                i, j = found
                if not (self._certain(i, j, offset_ns) or give_up(a.shots[i]) or give_up(b.shots[j])):
                    break
                out += self._settle(i, j, offset_ns)
            else:
                oldest = a if starts_with_a(a.stamps, b.stamps, offset_ns) else b
                if not (self._past_hope(oldest, offset_ns) or give_up(oldest.shots[0])):
                    break
                out += self._lose(oldest.take(1))
        return out

    def _certain(self, i: int, j: int, offset_ns: int) -> bool:
        """Say whether nothing closer can come to two that are each other's nearest among those that wait.

        Only the older one's camera can give it, between the newer one and as far again: later images of the other camera
        are all newer than the newer one.
        """
        skew_ns = self._b.stamps[j] - offset_ns - self._a.stamps[i]
        older, newer_ns = (
            (self._a, self._b.stamps[j] - offset_ns) if skew_ns > 0 else (self._b, self._a.stamps[i] + offset_ns)
        )
        assert older.newest_ns is not None  # noqa: S101  (one of its images waits)
        next_ns = older.newest_ns + (older.least_spacing_ns() if self._live else 0)
        return next_ns - newer_ns >= abs(skew_ns)

    def _past_hope(self, stream: StampStream, offset_ns: int) -> bool:
        """Say whether all images to come from the other camera are beyond reach of a stream's oldest."""
        other, shift_ns = (self._b, offset_ns) if stream is self._a else (self._a, -offset_ns)
        return other.newest_ns is not None and other.newest_ns - shift_ns - stream.stamps[0] > self._tolerance_ns

    def _settle(self, i: int, j: int, offset_ns: int) -> list[Decision]:
        """Give a pair, and before it what is older: that is among itself, since order is kept."""
        stamps_a, stamps_b = self._a.stamps[:i], self._b.stamps[:j]
        shots_a, shots_b = self._a.take(i + 1), self._b.take(j + 1)
        older = pair_all(stamps_a, stamps_b, offset_ns, self._tolerance_ns) if i and j else []
        out: list[Decision] = []
        first_a = first_b = 0
        for left, right in [*older, (i, j)]:
            out += self._lose([*shots_a[first_a:left], *shots_b[first_b:right]])
            unknown = not (shots_a[left].stamp_ns and shots_b[right].stamp_ns)
            out.append(Pair(shots_a[left].image, shots_b[right].image, 0 if unknown else offset_ns))
            first_a, first_b = left + 1, right + 1
        self._paired_ns = self._now_ns
        return out

    def _lose(self, shots: Iterable[Shot]) -> list[LostShot]:
        return [LostShot(shot.camera, NO_PARTNER, self._apart()) for shot in shots]

    def _tell_time(self, now_ns: int) -> None:
        self._now_ns = now_ns
        if self._paired_ns is None or self._paired_ns > now_ns:
            self._paired_ns = now_ns

    def _jump_ns(self, stream: StampStream, stamp_ns: int, arrived_ns: int) -> int:
        """By how much the camera's clock was set before this image; 0 where it was not."""
        floor_ns = self._clocks.floor_ns(stream.camera)
        ahead_ns = 0 if floor_ns is None else floor_ns - (arrived_ns - stamp_ns)
        if floor_ns is not None and stream.has_departed(ahead_ns, arrived_ns):
            return ahead_ns
        # Stamps that fall without departing from arrival: this host's own clock was set.
        fallen_ns = stream.fallen_back_ns(stamp_ns)
        return ahead_ns if fallen_ns and ahead_ns < -STEP_NS else -fallen_ns

    def _restart(self, stream: StampStream, jump_ns: int) -> list[Decision]:
        detail = _jumped(stream, jump_ns)
        out: list[Decision] = [LostShot(stream.camera, CLOCK_JUMP, detail) for _ in stream.take(len(stream.shots))]
        stream.begin()
        self._clocks.forget(stream.camera)
        if self._given_ns is None:
            for other in self._streams.values():
                out += [LostShot(other.camera, NO_OFFSET, detail) for _ in other.take(len(other.shots))]
        return out

    def _patience_ns(self, offset_ns: int) -> int:
        floor_a, floor_b = (self._clocks.floor_ns(camera) for camera in BOTH)
        lag_ns = 0 if floor_a is None or floor_b is None else abs(floor_b - floor_a + offset_ns)
        wanted_ns = _PATIENCE_INTERVALS * max(self._a.interval_ns(), self._b.interval_ns()) + lag_ns
        return 2 * self._tolerance_ns + min(max(wanted_ns, _LEAST_PATIENCE_NS), _MOST_PATIENCE_NS)

    def _apart(self) -> str:
        """Put in words that images of both cameras arrive and find no partners since their clocks differ; else empty."""
        if self._paired_ns is None or self._now_ns - self._paired_ns <= STEP_NS or self._given_ns is None:
            return ""
        long_ns = max(STEP_NS, _PATIENCE_INTERVALS * max(self._a.interval_ns(), self._b.interval_ns()))
        seen = [stream.arrived_ns for stream in self._streams.values()]
        offset_ns = self._clocks.offset_ns
        if offset_ns is None or any(at is None or self._now_ns - at > long_ns for at in seen):
            return ""
        if self._now_ns - self._paired_ns <= long_ns:
            return ""
        if abs(offset_ns - self._given_ns) <= self._tolerance_ns:
            return ""
        return (
            f"no pair for {(self._now_ns - self._paired_ns) / 1e9:.1f} s although images of both cameras arrive: B's stamps "
            f"minus A's, as they arrive, are {offset_ns / 1e9:+.3f} s; expected {self._given_ns / 1e9:+.3f} s, to "
            f'{self._tolerance_ns / 1e6:g} ms: give offset_ms = {offset_ns / 1e6:.0f}, offset_ms = "estimate", '
            'or stamps = "arrival"'
        )


def _jumped(stream: StampStream, jump_ns: int) -> str:
    return f"camera {stream.camera.upper()}'s stamps jumped by {jump_ns / 1e9:+.3f} s"
