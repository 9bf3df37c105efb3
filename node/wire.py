"""Depth frames and status to and from the bytes that travel; ``WIRE.md`` beside this file specifies every key.

Pure functions. All that can be wrong with bytes from outside ends in :class:`WireError`, at one boundary.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Any, Literal, TypeVar

import msgspec
import numpy as np
from msgspec import Meta, Struct
from numpy.typing import NDArray

from .errors import UNKNOWN_SCALE, WireError
from .frame import DepthFrame
from .status import NodeStatus
from .trust import Reason, Trust, Verdict

DEPTH_FORMAT = "skewline depth"
STATUS_FORMAT = "skewline status"
VERSION = 1

PixelFormat = Literal["uint16", "float32"]

LARGEST_COUNT = 65535
MAX_SIDE_PX = 16384
"""Longest side of a depth map; no view is as large, and a product of two such sides cannot overflow."""

Natural = Annotated[int, Meta(ge=0, le=2**63 - 1)]
Side = Annotated[int, Meta(ge=1, le=MAX_SIDE_PX)]
Name = Annotated[str, Meta(max_length=256)]
Distance = Annotated[float, Meta(gt=0, le=1e9)]
Matrix3 = Annotated[list[float], Meta(min_length=9, max_length=9)]
Matrix4 = Annotated[list[float], Meta(min_length=16, max_length=16)]


@dataclass(frozen=True, kw_only=True)
class Packing:
    """How depth and sigma are put into pixels.

    Attributes
    ----------
    pixels : {"uint16", "float32"}
        Counts of a unit, or metres as they are.
    depth_unit_m, sigma_unit_m : float
        Metres in one count. The defaults carry 6.5 m in steps of 0.1 mm, and 0.65 m of sigma in steps of 0.01 mm.
    """

    pixels: PixelFormat = "uint16"
    depth_unit_m: float = 1e-4
    sigma_unit_m: float = 1e-5

    @property
    def range_m(self) -> float:
        """The largest depth that fits, in metres."""
        return float("inf") if self.pixels == "float32" else LARGEST_COUNT * self.depth_unit_m


class _Envelope(Struct, frozen=True, kw_only=True):
    """What every message begins with."""

    format: str
    version: int


class _ReasonMap(Struct, frozen=True, kw_only=True):
    """One of the reasons of ``trust``."""

    name: Name
    verdict: Verdict
    figure: float
    limit: float
    unit: Name


class _TrustMap(Struct, frozen=True, kw_only=True):
    """The map ``trust``."""

    verdict: Verdict
    reasons: Annotated[list[_ReasonMap], Meta(max_length=64)]


class _DepthMessage(Struct, frozen=True, kw_only=True):
    """The keys of a depth message, in the order in which we write them."""

    format: str
    version: int
    session: Name
    sequence: Natural
    stamp_ns: Natural
    skew_ns: Annotated[int, Meta(ge=-(2**63), le=2**63 - 1)]
    published_ns: Natural
    rig: Name
    width: Side
    height: Side
    K: Matrix3
    T_a_view: Matrix4
    T_base_a: Matrix4 | None = None
    near: Distance
    far: Distance
    pixels: PixelFormat
    depth_unit: Annotated[float, Meta(gt=0, le=1)]
    sigma_unit: Annotated[float, Meta(gt=0, le=1)]
    out_of_range: Natural
    depth: memoryview
    sigma: memoryview
    picture: memoryview | None = None
    trust: _TrustMap | None = None
    skew_depth_error: Annotated[float, Meta(ge=0, le=1e9)] = 0.0
    scene_speed: Annotated[float, Meta(ge=0, le=1e9)] = 0.0


def to_counts(metres: NDArray[np.float32], unit_m: float) -> NDArray[np.uint16]:
    """Round metres to whole counts of ``unit_m``; 0 where there is no number, or one that 1 to 65535 cannot say.

    Parameters
    ----------
    metres : ndarray of float32
        Depth; NaN where there is none.
    unit_m : float
        Metres in one count.

    Returns
    -------
    ndarray of uint16, of the same shape
    """
    counts = np.rint(metres / np.float32(unit_m))
    fits = (counts >= 1) & (counts <= LARGEST_COUNT)  # NaN fits nowhere
    return np.where(fits, counts, np.float32(0)).astype("<u2")


def encode_depth(frame: DepthFrame, packing: Packing | None = None) -> bytes:
    """Write one depth message.

    Parameters
    ----------
    frame : DepthFrame
        Depth and sigma in metres, NaN where there is none.
    packing : Packing, optional
        How pixels are packed; by default uint16 counts of 0.1 mm, and of 0.01 mm for sigma.

    Returns
    -------
    bytes
        One msgpack map, as ``WIRE.md`` specifies it.

    Raises
    ------
    WireError
        Where the frame's arrays do not fit one another, or its lengths are not metres.
    """
    packing = packing or Packing()
    _check_metric(frame)
    _check_shapes(frame)
    depth, sigma = (_pack_counts if packing.pixels == "uint16" else _pack_floats)(frame, packing)
    height, width = frame.depth.shape
    message = _DepthMessage(
        format=DEPTH_FORMAT,
        version=VERSION,
        session=frame.session,
        sequence=int(frame.sequence),
        stamp_ns=int(frame.stamp_ns),
        skew_ns=int(frame.skew_ns),
        published_ns=int(frame.published_ns),
        rig=frame.fingerprint,
        width=width,
        height=height,
        K=np.ravel(frame.K).tolist(),
        T_a_view=np.ravel(frame.T_a_view).tolist(),
        T_base_a=None if frame.T_base_a is None else np.ravel(frame.T_base_a).tolist(),
        near=float(frame.near_m),
        far=float(frame.far_m),
        pixels=packing.pixels,
        depth_unit=float(packing.depth_unit_m),
        sigma_unit=float(packing.sigma_unit_m),
        out_of_range=int(np.count_nonzero(frame.depth > 0) - np.count_nonzero(depth)),
        depth=_bytes_of(depth),
        sigma=_bytes_of(sigma),
        picture=None if frame.picture is None else _bytes_of(frame.picture),
        trust=_trust_map(frame.trust),
        skew_depth_error=float(frame.skew_depth_error_m),
        scene_speed=float(frame.scene_speed_m_s),
    )
    return msgspec.msgpack.encode(message)


def decode_depth(data: bytes) -> DepthFrame:
    """Read one depth message.

    Raises
    ------
    WireError
        For bytes that are no whole depth message of this version, or whose parts contradict one another.
    """
    message = _decode(data, DEPTH_FORMAT, _DepthMessage)
    _check_geometry(message)
    depth, sigma = _unpack_counts(message) if message.pixels == "uint16" else _unpack_floats(message)
    return DepthFrame(
        depth=depth,
        sigma=sigma,
        K=np.reshape(message.K, (3, 3)),
        T_a_view=np.reshape(message.T_a_view, (4, 4)),
        T_base_a=None if message.T_base_a is None else np.reshape(message.T_base_a, (4, 4)),
        near_m=message.near,
        far_m=message.far,
        stamp_ns=message.stamp_ns,
        skew_ns=message.skew_ns,
        fingerprint=message.rig,
        sequence=message.sequence,
        session=message.session,
        published_ns=message.published_ns,
        picture=None if message.picture is None else _pixels(message, "picture", np.dtype(np.uint8)).copy(),
        trust=_trust(message.trust),
        skew_depth_error_m=message.skew_depth_error,
        scene_speed_m_s=message.scene_speed,
    )


def packing_of(data: bytes) -> Packing:
    """Say how a depth message's pixels are packed.

    Raises
    ------
    WireError
        For bytes that are no whole depth message of this version.
    """
    message = _decode(data, DEPTH_FORMAT, _DepthMessage)
    return Packing(pixels=message.pixels, depth_unit_m=message.depth_unit, sigma_unit_m=message.sigma_unit)


def _trust_map(trust: Trust) -> _TrustMap:
    reasons = [
        _ReasonMap(
            name=reason.name,
            verdict=reason.verdict,
            figure=float(reason.figure),
            limit=float(reason.limit),
            unit=reason.unit,
        )
        for reason in trust.reasons
    ]
    return _TrustMap(verdict=trust.verdict, reasons=reasons)


def _trust(message: _TrustMap | None) -> Trust:
    """Read what the node says of the frame; a node that says nothing does not vouch for it."""
    if message is None:
        return Trust("doubtful")
    reasons = (
        Reason(name=reason.name, verdict=reason.verdict, figure=reason.figure, limit=reason.limit, unit=reason.unit)
        for reason in message.reasons
    )
    return Trust(message.verdict, tuple(reasons))


def encode_status(status: NodeStatus) -> bytes:
    """Write one status message."""
    fields = msgspec.to_builtins(status)
    return msgspec.msgpack.encode({"format": STATUS_FORMAT, "version": VERSION, **fields})


def decode_status(data: bytes) -> NodeStatus:
    """Read one status message.

    Raises
    ------
    WireError
        For bytes that are no whole status message of this version.
    """
    return _decode(data, STATUS_FORMAT, NodeStatus)


_Message = TypeVar("_Message", bound=Struct)


def _decode(data: bytes, kind: str, keys: type[_Message]) -> _Message:
    """Check format and version first, then everything else: the one place where msgpack's errors become ours."""
    try:
        envelope = msgspec.msgpack.decode(data, type=_Envelope)
        if envelope.format == kind and envelope.version == VERSION:
            return msgspec.msgpack.decode(data, type=keys)
    except (msgspec.DecodeError, RecursionError) as exc:
        raise WireError(
            f"{len(data)} bytes are no {kind} message ({exc}); expected one msgpack map as WIRE.md specifies: "
            "check that the address is a node's, and that both ends are of this program"
        ) from exc
    if envelope.format != kind:
        raise WireError(
            f"message has format {envelope.format[:64]!r}; expected {kind!r}: depth and status have ports of their own"
        )
    raise WireError(
        f"message has version {envelope.version}; this program reads version {VERSION}: update the older of the two ends"
    )


def _check_metric(frame: DepthFrame) -> None:
    if not frame.metric:
        raise WireError(f"this frame's depth is in baselines, not metres, since {UNKNOWN_SCALE}")


def _check_shapes(frame: DepthFrame) -> None:
    for name in ("depth", "sigma", "picture"):
        array: NDArray[Any] | None = getattr(frame, name)
        if array is not None and (array.ndim != 2 or array.shape != frame.depth.shape):
            raise WireError(f"{name} has shape {array.shape}; expected 2-D like the depth, {frame.depth.shape}")
    if frame.picture is not None and frame.picture.dtype != np.uint8:
        raise WireError(f"picture has dtype {frame.picture.dtype}; expected uint8")


def _pack_counts(frame: DepthFrame, packing: Packing) -> tuple[NDArray[np.uint16], NDArray[np.uint16]]:
    """Turn metres into counts; where there is a depth, sigma is rounded into 1 to 65535 and never lost."""
    depth = to_counts(frame.depth, packing.depth_unit_m)
    counts = np.clip(np.rint(frame.sigma / np.float32(packing.sigma_unit_m)), 1, LARGEST_COUNT)
    # A sigma that is no number says nothing good about its depth, so it counts as the largest.
    counts = np.where(np.isnan(counts), np.float32(LARGEST_COUNT), counts)
    return depth, np.where(depth > 0, counts, np.float32(0)).astype("<u2")


def _pack_floats(frame: DepthFrame, _packing: Packing) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    there = (frame.depth > 0) & np.isfinite(frame.depth)
    sigma = np.where(np.isnan(frame.sigma), np.float32(np.inf), np.maximum(frame.sigma, np.finfo(np.float32).tiny))
    none = np.float32(0)
    return np.where(there, frame.depth, none).astype("<f4"), np.where(there, sigma, none).astype("<f4")


def _bytes_of(array: NDArray[Any]) -> memoryview:
    return np.ascontiguousarray(array).data.cast("B")


def _pixels(message: _DepthMessage, name: str, dtype: np.dtype[Any]) -> NDArray[Any]:
    """View one of the message's ``bin`` values as an image."""
    data: memoryview = getattr(message, name)
    expected = message.width * message.height * dtype.itemsize
    if data.nbytes != expected:
        raise WireError(
            f"{name} holds {data.nbytes} bytes; expected {expected} for {message.width} x {message.height} pixels "
            f"of {dtype.name}: the message is damaged, or its writer departs from WIRE.md"
        )
    return np.frombuffer(data, dtype).reshape(message.height, message.width)


def _unpack_counts(message: _DepthMessage) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    depth, sigma = (_pixels(message, name, np.dtype("<u2")) for name in ("depth", "sigma"))
    _check_agreement(depth > 0, sigma > 0)
    nothing = depth == 0
    metres = depth * np.float32(message.depth_unit), sigma * np.float32(message.sigma_unit)
    for image in metres:
        image[nothing] = np.nan
    return metres


def _unpack_floats(message: _DepthMessage) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    depth, sigma = (_pixels(message, name, np.dtype("<f4")) for name in ("depth", "sigma"))
    if not (np.isfinite(depth).all() and (depth >= 0).all() and (sigma >= 0).all()):
        raise WireError("float32 pixels hold a negative or non-finite value; expected metres, and 0 for no depth")
    _check_agreement(depth > 0, sigma > 0)
    there = depth > 0
    none = np.float32(np.nan)
    return np.where(there, depth, none).astype(np.float32), np.where(there, sigma, none).astype(np.float32)


def _check_agreement(has_depth: NDArray[np.bool_], has_sigma: NDArray[np.bool_]) -> None:
    if not np.array_equal(has_depth, has_sigma):
        differ = int(np.count_nonzero(has_depth != has_sigma))
        raise WireError(f"{differ} pixels hold a depth without a sigma or the reverse; expected both or neither")


def _check_geometry(message: _DepthMessage) -> None:
    if not message.near < message.far:
        raise WireError(f"near is {message.near} and far is {message.far}; expected near < far")
    for name in ("K", "T_a_view", "T_base_a"):
        values: list[float] | None = getattr(message, name)
        if values is not None and not np.isfinite(values).all():
            raise WireError(f"{name} is {values}; expected finite numbers")
    if message.K[0] <= 0 or message.K[4] <= 0 or message.K[6:] != [0, 0, 1]:
        raise WireError(f"K is {message.K}; expected positive focal lengths and a last row of 0 0 1")
    for name in ("T_a_view", "T_base_a"):
        values = getattr(message, name)
        if values is not None and values[12:] != [0, 0, 0, 1]:
            raise WireError(f"{name} ends in {values[12:]}; expected a last row of 0 0 0 1")
