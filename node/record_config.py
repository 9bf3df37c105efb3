"""The table ``[record]`` of the node's configuration."""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Annotated, Any

from msgspec import Meta, Struct

from ..calib.tables import checked_table
from .disk_room import WhenFull
from .errors import ConfigError
from .image_message import Encoding

_NAME = r"[A-Za-z0-9_][A-Za-z0-9_.+-]*"


class RecordConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[record]``: where and how recordings are kept.

    Attributes
    ----------
    folder : str
        Made where it is missing; relative to the configuration's folder.
    name : str
        The recording's name, in which strftime's codes stand for the time at which it begins, in UTC.
    images : {"raw", "png", "jpeg"}
        How images are stored. Raw and PNG give the same depth again bit for bit; JPEG, for 8-bit images, does not.
        PNG halves the bytes and takes some 25 ms of a core for an image of 1280 x 720: it is for slow cameras.
    jpeg_quality : int
        1 to 100.
    depth : bool
        Whether published depth frames are kept too.
    segment_mb : float
        Size at which a file is closed and the next is begun, in units of 10^6 bytes.
    limit_gb : float, optional
        The most that one recording may take, in units of 10^9 bytes.
    when_full : {"stop", "ring"}
        At a limit: stop, or delete the oldest segments of this very recording.
    keep_free_gb : float
        What stays free on the disk.
    """

    folder: Annotated[str, Meta(min_length=1)] = "recordings"
    name: Annotated[str, Meta(min_length=1, max_length=100)] = "%Y%m%dT%H%M%SZ"
    images: Encoding = "raw"
    jpeg_quality: Annotated[int, Meta(ge=1, le=100)] = 95
    depth: bool = False
    segment_mb: Annotated[float, Meta(ge=0.01, le=100_000)] = 256.0
    limit_gb: Annotated[float, Meta(gt=0, le=1_000_000)] | None = None
    when_full: WhenFull = "stop"
    keep_free_gb: Annotated[float, Meta(ge=0, le=1_000_000)] = 1.0

    def name_at(self, moment: datetime) -> str:
        """Name a recording that begins at a moment."""
        return moment.astimezone(UTC).strftime(self.name)

    @property
    def limit_bytes(self) -> int | None:
        """``limit_gb`` in bytes."""
        return None if self.limit_gb is None else round(self.limit_gb * 1e9)


def record_settings(content: Mapping[str, Any]) -> RecordConfig:
    """Read what a configuration says of recording; the defaults where it says nothing.

    Parameters
    ----------
    content : mapping
        What the whole TOML file held.

    Raises
    ------
    ConfigError
        Where a key of ``[record]`` is unknown or out of range, or its keys contradict one another.
    """
    table = content.get("record", {})
    if not isinstance(table, Mapping):
        raise ConfigError(f"record is {table!r}; expected a table [record]")
    config = checked_table(table, RecordConfig, "record", ConfigError)
    check_record(config)
    return config


def check_record(config: RecordConfig) -> None:
    """Check what bounds of one key cannot say.

    Raises
    ------
    ConfigError
        Where the name would be no file name, or a ring has no room for the segment that is written and one that gives way.
    """
    name = config.name_at(datetime.now(UTC))
    if not re.fullmatch(_NAME, name):
        raise ConfigError(
            f'record.name is "{config.name}", which makes "{name}"; expected letters, digits, "_", "-", "+" and ".", '
            'and codes that make such, as "%Y%m%dT%H%M%SZ" does'
        )
    if config.when_full == "ring" and config.limit_gb is not None and config.limit_gb * 1e3 < 2 * config.segment_mb:
        raise ConfigError(
            f"record.limit_gb is {config.limit_gb:g} and record.segment_mb {config.segment_mb:g}; expected room for two "
            f"segments in a ring: a limit_gb of {2 * config.segment_mb / 1e3:g} or more, or smaller segments"
        )
