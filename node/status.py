"""What a node says of itself once a second, and the tally that it is made from."""

from __future__ import annotations

import sys
import threading
import time
from collections import Counter, deque
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import Annotated

import numpy as np
from msgspec import Meta, Struct

from .camera_report import CameraReport, FeedView

Count = Annotated[int, Meta(ge=0, le=2**63 - 1)]
Amount = Annotated[float, Meta(ge=0, le=1e15)]
Text = Annotated[str, Meta(max_length=256)]

_REMEMBERED = 10_000
"""Frames that the figures of a whole run look back on: enough for a p99, and bounded for a run of months."""


class RecorderReport(Struct, frozen=True, kw_only=True):
    """How a recording stands.

    Attributes
    ----------
    on : bool
        Whether what comes is still kept.
    file : str
        The segment that is or was written last.
    messages, bytes : int
        Written so far, in all segments.
    dropped : int
        Images and depth frames that were to be kept and were not.
    reason : str
        Why it stopped; empty while it is on.
    """

    on: bool
    file: Annotated[str, Meta(max_length=4096)]
    messages: Count
    bytes: Count
    dropped: Count
    reason: Annotated[str, Meta(max_length=1000)]


class NodeStatus(Struct, frozen=True, kw_only=True):
    """Figures of a node: counts since its start, rates and times over the last second or so (or over the whole run).

    Attributes
    ----------
    session, rig : str
        Name of the node's run, and fingerprint of the rig.
    stamp_ns : int
        When this was written, nanoseconds since the Unix epoch.
    uptime_s : float
        Seconds since the node started.
    rate_in_hz, rate_out_hz : float
        Pairs that came from the source, and frames published, a second.
    paired, published : int
        Pairs that came from the source, and frames published.
    dropped_busy : int
        Good pairs dropped because the node was busy with an older one, or paused, and the source does not wait.
    lost : mapping of str to int
        Images that came to nothing, by reason: those that a source could not give, and those without a partner.
    bad_pairs : int
        Pairs that the engine refused (another size than the rig's, for one).
    latency_p50_ms, latency_p90_ms, latency_p99_ms : float or None
        Percentiles of the time from a pair's stamp to its frame's publication; None where no stamped
        frame was published.
    stages_ms : mapping of str to float
        Median time of each stage of the work.
    peak_memory_mb : float or None
        Largest resident memory of the process so far, in units of 10^6 bytes; None where the host does not tell.
    cameras : mapping of str to CameraReport
        How cameras ``a`` and ``b`` stand.
    clock_offset_ms, clock_offset_sigma_ms : float or None
        B's clock minus A's, as given or estimated, and the estimate's standard deviation; None where not known.
    paused : bool
        Whether the node was told to publish nothing until it is told to go on.
    recording : RecorderReport or None
        How the recorder stands; None where the node was told to record nothing since it began.
    access : str
        Who may connect, in words.
    requests_refused : int
        Requests that were malformed, too many, unknown or not done, since the node began.
    """

    session: Text
    rig: Text
    stamp_ns: Count
    uptime_s: Amount
    rate_in_hz: Amount
    rate_out_hz: Amount
    paired: Count
    published: Count
    dropped_busy: Count
    lost: Annotated[dict[Text, Count], Meta(max_length=256)]
    bad_pairs: Count
    latency_p50_ms: Amount | None = None
    latency_p90_ms: Amount | None = None
    latency_p99_ms: Amount | None = None
    stages_ms: Annotated[dict[Text, Amount], Meta(max_length=256)] = {}
    peak_memory_mb: Amount | None = None
    cameras: Annotated[dict[Text, CameraReport], Meta(max_length=16)] = {}
    clock_offset_ms: float | None = None
    clock_offset_sigma_ms: Amount | None = None
    paused: bool = False
    recording: RecorderReport | None = None
    access: Text = ""
    requests_refused: Count = 0


class _Span:
    """What happened since a moment."""

    def __init__(self, now_s: float) -> None:
        self.since_s = now_s
        self.paired = 0
        self.published = 0
        self.latencies_ms: deque[float] = deque(maxlen=_REMEMBERED)
        self.stages_ms: dict[str, deque[float]] = {}

    def add_published(self, latency_ms: float | None, stages_ms: Mapping[str, float]) -> None:
        self.published += 1
        if latency_ms is not None:
            self.latencies_ms.append(latency_ms)
        for name, spent_ms in stages_ms.items():
            self.stages_ms.setdefault(name, deque(maxlen=_REMEMBERED)).append(spent_ms)

    def percentiles_ms(self) -> tuple[float | None, float | None, float | None]:
        if not self.latencies_ms:
            return None, None, None
        p50, p90, p99 = np.percentile(self.latencies_ms, (50, 90, 99))
        # A stamp from a clock that runs ahead of this host's makes a latency below zero, which is none.
        return max(0.0, float(p50)), max(0.0, float(p90)), max(0.0, float(p99))


class Tally:
    """Counts of one run, kept by the node's threads; every method may be called from any of them."""

    def __init__(self, session: str, rig: str, *, clock: Callable[[], float] = time.monotonic) -> None:
        self._session = session
        self.rig = rig
        self._clock = clock
        self._lock = threading.Lock()
        self._run = _Span(clock())
        self._window = _Span(clock())
        self._lost: Counter[str] = Counter()
        self._dropped_busy = 0
        self._bad_pairs = 0

    def add_pair(self) -> None:
        """Count a pair that came from the source."""
        with self._lock:
            for span in self._spans():
                span.paired += 1

    def add_lost(self, reason: str) -> None:
        """Count an image that came to nothing."""
        with self._lock:
            self._lost[reason] += 1

    def add_dropped(self) -> None:
        """Count a good pair that a newer one pushed out."""
        with self._lock:
            self._dropped_busy += 1

    def add_bad(self) -> None:
        """Count a pair that the engine refused."""
        with self._lock:
            self._bad_pairs += 1

    def add_published(self, latency_ms: float | None, stages_ms: Mapping[str, float]) -> None:
        """Count a frame that went out, with its latency where its stamp is known, and the time of each stage."""
        with self._lock:
            for span in self._spans():
                span.add_published(latency_ms, stages_ms)

    def status(self, feed: FeedView | None = None) -> NodeStatus:
        """Sum up what happened since the last call, and begin anew; ``feed`` is how the cameras stand."""
        with self._lock:
            now_s = self._clock()
            window, self._window = self._window, _Span(now_s)
            return self._sum_up(window, now_s, feed or FeedView())

    def peek(self, feed: FeedView | None = None) -> NodeStatus:
        """Give what :meth:`status` would give, and let it go on."""
        with self._lock:
            return self._sum_up(self._window, self._clock(), feed or FeedView())

    def summary(self, feed: FeedView | None = None) -> NodeStatus:
        """Sum up the whole run; times look back on the last 10 000 frames at most."""
        with self._lock:
            return self._sum_up(self._run, self._clock(), feed or FeedView())

    def _spans(self) -> Iterable[_Span]:
        return self._run, self._window

    def _sum_up(self, span: _Span, now_s: float, feed: FeedView) -> NodeStatus:
        length_s = max(now_s - span.since_s, 1e-9)
        p50, p90, p99 = span.percentiles_ms()
        return NodeStatus(
            session=self._session,
            rig=self.rig,
            stamp_ns=time.time_ns(),
            uptime_s=now_s - self._run.since_s,
            rate_in_hz=span.paired / length_s,
            rate_out_hz=span.published / length_s,
            paired=self._run.paired,
            published=self._run.published,
            dropped_busy=self._dropped_busy,
            lost=dict(self._lost),
            bad_pairs=self._bad_pairs,
            latency_p50_ms=p50,
            latency_p90_ms=p90,
            latency_p99_ms=p99,
            stages_ms={name: float(np.median(times)) for name, times in span.stages_ms.items()},
            peak_memory_mb=peak_memory_mb(),
            cameras=feed.cameras,
            clock_offset_ms=feed.clock_offset_ms,
            clock_offset_sigma_ms=feed.clock_offset_sigma_ms,
        )


def peak_memory_mb() -> float | None:
    """Largest resident memory of this process so far, in units of 10^6 bytes; None where the host does not tell.

    Linux is asked through ``/proc``: ``getrusage`` there counts what the parent process held before the program began.
    """
    try:
        lines = Path("/proc/self/status").read_text(encoding="ascii").splitlines()
    except OSError:
        return _peak_memory_by_rusage_mb()
    sizes = [int(line.split()[1]) for line in lines if line.startswith("VmHWM:")]
    return sizes[0] * 1024 / 1e6 if sizes else None


def _peak_memory_by_rusage_mb() -> float | None:
    try:
        import resource
    except ImportError:  # Windows has no such module
        return None
    unit = 1 if sys.platform == "darwin" else 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit / 1e6
