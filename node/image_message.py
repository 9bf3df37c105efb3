"""Camera images to and from the bytes that travel; the section *Image message* of ``WIRE.md`` specifies every key.

Pure functions. All that can be wrong with bytes from outside ends in :class:`ImageMessageError`, at one boundary, and
before memory is taken for what the bytes claim.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import cv2
import msgspec
import numpy as np
from msgspec import Struct
from numpy.typing import NDArray

from .errors import WireError
from .image_header import read_jpeg_header, read_png_header
from .shot import CameraName, StampedImage
from .wire import MAX_SIDE_PX, Natural, Side

IMAGE_FORMAT = "skewline image"
IMAGE_VERSION = 1

PixelKind = Literal["grey8", "grey16", "bgr8"]
Encoding = Literal["raw", "png", "jpeg"]

MALFORMED = "malformed image"
"""The message is none, or its parts contradict one another."""
DAMAGED = "damaged image"
"""The message is whole, but the PNG or JPEG in it is not."""
TOO_LARGE = "image too large"
"""The image has more pixels than the reader allows."""

LARGEST_PX = 50_000_000
"""Pixels that a reader takes by default."""
MOST_BYTES_A_PIXEL = 3

_OVERHEAD_BYTES = 65_536
"""Room for the keys of a message, those of later versions too."""

_PIXELS: dict[str, tuple[np.dtype[Any], int]] = {
    "grey8": (np.dtype("u1"), 1),
    "grey16": (np.dtype("<u2"), 1),
    "bgr8": (np.dtype("u1"), 3),
}
"""Type of the samples, and how many a pixel has."""

_PNG_OPTIONS = [cv2.IMWRITE_PNG_COMPRESSION, 1, cv2.IMWRITE_PNG_STRATEGY, cv2.IMWRITE_PNG_STRATEGY_HUFFMAN_ONLY]
"""A live camera waits for nobody. A camera's noise repeats nothing, so that looking for repetitions only costs: 26 ms and
0.48 MB for a grey image of 1280 x 720, where level 1 alone takes 34 ms and 0.55 MB."""

_HEADERS = {"png": read_png_header, "jpeg": read_jpeg_header}

# Told outright, so that a transparency chunk or a note of how the camera was held changes nothing.
_FLAGS = {
    "grey8": cv2.IMREAD_GRAYSCALE,
    "grey16": cv2.IMREAD_GRAYSCALE | cv2.IMREAD_ANYDEPTH,
    "bgr8": cv2.IMREAD_COLOR,
}


class ImageMessageError(WireError):
    """Bytes that are no image message; ``reason`` says in two words what kind of wrong, for counting."""

    def __init__(self, reason: str, message: str) -> None:
        super().__init__(message)
        self.reason = reason


@dataclass(frozen=True, eq=False)
class ImageMessage:
    """One image as it travelled.

    Attributes
    ----------
    image : StampedImage
        Pixels and stamp; the stamp is 0 where the sender does not know it.
    camera : {"a", "b"} or None
        Which of the rig's cameras the sender takes itself for, where it says so.
    sequence : int or None
        The sender's count of the images it took, where it counts.
    """

    image: StampedImage
    camera: CameraName | None = None
    sequence: int | None = None


class _Message(Struct, frozen=True, kw_only=True):
    """The keys of an image message, in the order in which we write them.

    Words are checked by hand: msgspec would repeat a wrong one in its error, however long and whatever is in it.
    """

    format: str
    version: int
    camera: str | None = None
    stamp_ns: Natural
    sequence: Natural | None = None
    width: Side
    height: Side
    pixels: str
    encoding: str
    image: memoryview


def largest_message_bytes(largest_px: int) -> int:
    """Say how many bytes a message may have whose image has up to ``largest_px`` pixels, however it is encoded.

    PNG of noise is larger than its pixels, by less than a hundredth.
    """
    raw = largest_px * MOST_BYTES_A_PIXEL
    return raw + raw // 64 + _OVERHEAD_BYTES


def encode_image(
    image: StampedImage,
    *,
    camera: CameraName | None = None,
    sequence: int | None = None,
    encoding: Encoding = "raw",
    jpeg_quality: int = 90,
) -> bytes:
    """Write one image message.

    Parameters
    ----------
    image : StampedImage
        Grey uint8 or uint16 of shape (H, W), or uint8 of shape (H, W, 3) in the order blue, green, red; and the middle
        of its exposure in nanoseconds since the Unix epoch, 0 where that is not known.
    camera : {"a", "b"}, optional
        Which of the rig's cameras took it: a node that expects the other one then refuses it.
    sequence : int, optional
        Number of the image, one more with each that the camera took, sent or not.
    encoding : {"raw", "png", "jpeg"}
        Raw costs the least time, PNG and JPEG the fewer bytes. JPEG holds 8 bits.
    jpeg_quality : int
        1 to 100.

    Returns
    -------
    bytes
        One msgpack map, as ``WIRE.md`` specifies it.

    Raises
    ------
    WireError
        Where the image is of another type or shape, has an impossible stamp, or does not fit the encoding.
    """
    pixels = _kind_of(image.pixels, encoding)
    for name, number in (("stamp_ns", image.stamp_ns), ("sequence", sequence)):
        if number is not None and not 0 <= number < 2**63:
            raise WireError(f"{name} is {number}; expected a whole number from 0 that fits 63 bits")
    height, width = image.pixels.shape[:2]
    message = _Message(
        format=IMAGE_FORMAT,
        version=IMAGE_VERSION,
        camera=camera,
        stamp_ns=int(image.stamp_ns),
        sequence=None if sequence is None else int(sequence),
        width=width,
        height=height,
        pixels=pixels,
        encoding=encoding,
        image=_encoded(image.pixels, pixels, encoding, jpeg_quality),
    )
    return msgspec.msgpack.encode(message)


def decode_image(data: bytes, largest_px: int = LARGEST_PX) -> ImageMessage:
    """Read one image message.

    Parameters
    ----------
    data : bytes
        The message.
    largest_px : int
        Most pixels that the image may have.

    Returns
    -------
    ImageMessage
        Raw pixels are a read-only view of ``data``; others have memory of their own.

    Raises
    ------
    ImageMessageError
        For bytes that are no whole image message of this version, or whose parts contradict one another.
    """
    message = _parse(data)
    camera = None if message.camera is None else _word("camera", message.camera, ("a", "b"))
    pixels = _word("pixels", message.pixels, tuple(_PIXELS))
    encoding = _word("encoding", message.encoding, ("raw", *_HEADERS))
    if message.width * message.height > largest_px:
        raise ImageMessageError(
            TOO_LARGE,
            f"image has {message.width} x {message.height} pixels; expected at most {largest_px / 1e6:g} megapixels: "
            "raise max_megapixels if the camera is as large",
        )
    array = _raw(message, pixels) if encoding == "raw" else _decompressed(message, pixels, encoding)
    return ImageMessage(StampedImage(array, message.stamp_ns), camera, message.sequence)  # type: ignore[arg-type]


def _parse(data: bytes) -> _Message:
    """Turn bytes into keys of the right types: the one place where msgpack's errors become ours."""
    try:
        envelope = msgspec.msgpack.decode(data, type=_Envelope)
        if envelope.format == IMAGE_FORMAT and envelope.version == IMAGE_VERSION:
            return msgspec.msgpack.decode(data, type=_Message)
    except (msgspec.DecodeError, RecursionError) as exc:
        raise ImageMessageError(
            MALFORMED,
            f"{len(data)} bytes are no {IMAGE_FORMAT} message ({exc}); expected one msgpack map as WIRE.md specifies: "
            "mend the sender",
        ) from exc
    if envelope.format != IMAGE_FORMAT:
        given = f"message has format {envelope.format[:32]!r}; expected {IMAGE_FORMAT!r}: send images to this address"
        raise ImageMessageError(MALFORMED, given)
    raise ImageMessageError(
        MALFORMED,
        f"message has version {envelope.version}; this program reads version {IMAGE_VERSION}: "
        "update the older of the two ends",
    )


class _Envelope(Struct, frozen=True, kw_only=True):
    """What every message begins with."""

    format: str
    version: int


def _word(key: str, given: str, known: tuple[str, ...]) -> str:
    if given not in known:
        raise ImageMessageError(MALFORMED, f"{key} is {given[:32]!r}; expected {' or '.join(known)}: mend the sender")
    return given


def _raw(message: _Message, pixels: str) -> NDArray[Any]:
    """View the message's bytes as an image; native and aligned, as the rest of the node expects it."""
    dtype, samples = _PIXELS[pixels]
    expected = message.width * message.height * samples * dtype.itemsize
    if message.image.nbytes != expected:
        raise ImageMessageError(
            MALFORMED,
            f"image holds {message.image.nbytes} bytes; expected {expected} for {message.width} x {message.height} "
            f"pixels of {pixels}, raw: send rows without padding",
        )
    array = np.frombuffer(message.image, dtype).reshape(_shape(message, pixels))
    return np.require(array, dtype.newbyteorder("="), "A")


def _decompressed(message: _Message, pixels: str, encoding: str) -> NDArray[Any]:
    """Decode PNG or JPEG whose own header says what the message says."""
    try:
        header = _HEADERS[encoding](message.image)
    except WireError as exc:
        raise ImageMessageError(DAMAGED, f"{exc}; expected a whole {encoding.upper()} image: mend the sender") from exc
    claimed = (message.width, message.height, pixels)
    if (header.width, header.height, header.pixels) != claimed:
        raise ImageMessageError(
            MALFORMED,
            f"the {encoding.upper()} data hold {header.width} x {header.height} pixels of {header.pixels}; "
            f"expected {message.width} x {message.height} of {pixels}, as the message says: mend the sender",
        )
    try:
        array = cv2.imdecode(np.frombuffer(message.image, np.uint8), _FLAGS[pixels] | cv2.IMREAD_IGNORE_ORIENTATION)
    except cv2.error as exc:
        raise ImageMessageError(DAMAGED, f"the {encoding.upper()} data cannot be decoded: {exc.err}") from exc
    # OpenCV gives None for what it cannot decode, which its stubs do not say.
    if array is None or array.shape != _shape(message, pixels) or array.dtype.itemsize != _PIXELS[pixels][0].itemsize:
        raise ImageMessageError(
            DAMAGED, f"the {message.image.nbytes} bytes of {encoding.upper()} data are damaged; expected a whole image"
        )
    return array


def _shape(message: _Message, pixels: str) -> tuple[int, ...]:
    samples = _PIXELS[pixels][1]
    return (message.height, message.width) if samples == 1 else (message.height, message.width, samples)


def _kind_of(array: NDArray[Any], encoding: Encoding) -> PixelKind:
    kinds: dict[tuple[int, str], PixelKind] = {(2, "uint8"): "grey8", (2, "uint16"): "grey16", (3, "uint8"): "bgr8"}
    kind = kinds.get((array.ndim, array.dtype.name))
    sides_fit = all(1 <= side <= MAX_SIDE_PX for side in array.shape[:2])
    if kind is None or not sides_fit or (kind == "bgr8" and array.shape[2] != 3):
        raise WireError(
            f"image has shape {array.shape} and dtype {array.dtype.name}; expected (H, W) of uint8 or uint16, or "
            f"(H, W, 3) of uint8, with sides of 1 to {MAX_SIDE_PX}: convert it"
        )
    if kind == "grey16" and encoding == "jpeg":
        raise WireError("image has 16 bits and encoding is 'jpeg'; expected 8 bits for JPEG: send PNG or raw")
    return kind


def _encoded(array: NDArray[Any], pixels: PixelKind, encoding: Encoding, jpeg_quality: int) -> memoryview:
    if encoding == "raw":
        return np.ascontiguousarray(array, _PIXELS[pixels][0]).data.cast("B")
    options = _PNG_OPTIONS if encoding == "png" else [cv2.IMWRITE_JPEG_QUALITY, jpeg_quality]
    done, data = cv2.imencode(f".{encoding}", np.ascontiguousarray(array, array.dtype.newbyteorder("=")), options)
    if not done:
        raise WireError(f"image of shape {array.shape} cannot be written as {encoding}; expected raw, png or jpeg")
    return data.data.cast("B")
