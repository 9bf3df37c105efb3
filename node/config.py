"""The node's configuration: a TOML file, checked into frozen values before anything starts.

Every refusal names the key's path, the value given and what is allowed.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, TypeVar

from msgspec import Meta, Struct

from ..calib.tables import checked_table, read_toml
from .errors import ConfigError, NodeError
from .match import MatcherName, MatchSettings
from .sources import SourceKind
from .wire import Packing, PixelFormat

_MATCH = MatchSettings()

Address = Annotated[
    str, Meta(pattern=r"^tcp://[^\s/]+:([0-9]{1,5}|\*)$", description='an address such as "tcp://127.0.0.1:7601"')
]


class VolumeConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[volume]``: where depth is wanted, along the rectified view's optical axis."""

    near_m: Annotated[float, Meta(gt=0, le=1000)]
    far_m: Annotated[float, Meta(gt=0, le=1000)]


class MatchConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[match]``: how correspondences are found.

    ``resolution`` scales the rectified views: 1 keeps the finer camera's pixels per radian, 0.5 makes a depth map of
    half the width and height. The other keys are those of :class:`MatchSettings`.
    """

    matcher: MatcherName = _MATCH.matcher
    resolution: Annotated[float, Meta(gt=0, le=1)] = 1.0
    block_px: Annotated[int, Meta(ge=1, le=31)] | None = _MATCH.block_px
    uniqueness_percent: Annotated[int, Meta(ge=0, le=100)] = _MATCH.uniqueness_percent
    left_right_px: Annotated[int, Meta(ge=-1, le=64)] = _MATCH.left_right_px
    speckle_px: Annotated[int, Meta(ge=0, le=100_000)] = _MATCH.speckle_px
    speckle_step_px: Annotated[int, Meta(ge=0, le=64)] = _MATCH.speckle_step_px
    refine_px: Annotated[int, Meta(ge=5, le=31)] = _MATCH.refine_px

    @property
    def settings(self) -> MatchSettings:
        """The matcher's settings, which check what bounds of one key cannot say."""
        values = {name: getattr(self, name) for name in self.__struct_fields__ if name != "resolution"}
        return MatchSettings(**values)


class PublishConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[publish]``: where and how frames go out."""

    depth: Address = "tcp://127.0.0.1:7601"
    status: Address = "tcp://127.0.0.1:7602"
    pixels: PixelFormat = "uint16"
    depth_unit_m: Annotated[float, Meta(ge=1e-6, le=0.1)] = 1e-4
    picture: bool = False
    wait_for_subscriber_s: Annotated[float, Meta(ge=0, le=3600)] = 0.0

    @property
    def packing(self) -> Packing:
        """How pixels are packed on the wire."""
        return Packing(pixels=self.pixels, depth_unit_m=self.depth_unit_m)


class _Tables(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """The file's top level."""

    rig: Annotated[str, Meta(min_length=1, description="the path of a rig file")]
    volume: dict[str, Any]
    source: dict[str, Any]
    match: dict[str, Any] = {}
    publish: dict[str, Any] = {}


@dataclass(frozen=True, kw_only=True)
class NodeConfig:
    """A checked configuration.

    Attributes
    ----------
    base : Path
        Folder of the configuration file: relative paths in it start there.
    rig : Path
        The rig file.
    volume, match, publish
        Their tables.
    source_kind : str
        Name of the source in the table of sources.
    source : msgspec.Struct
        The source's own settings.
    """

    base: Path
    rig: Path
    volume: VolumeConfig
    source_kind: str
    source: Struct
    match: MatchConfig
    publish: PublishConfig


def load_config(path: str | Path, kinds: Mapping[str, SourceKind]) -> NodeConfig:
    """Read and check a configuration file.

    Parameters
    ----------
    path : path
        A TOML file.
    kinds : mapping of str to SourceKind
        The sources that ``[source] kind`` may name.

    Raises
    ------
    ConfigError
        Where the file is missing or is no TOML, or a key is missing, unknown or out of range.
    """
    path = Path(path)
    content = read_toml(path, "the node's configuration", ConfigError)
    try:
        return parse_config(content, kinds, path.parent)
    except ConfigError as exc:
        raise ConfigError(f"{path}: {exc}") from exc


def load_source(path: str | Path, kinds: Mapping[str, SourceKind]) -> tuple[SourceKind, Struct, Path]:
    """Read the ``[source]`` table alone, for those who need images before there is a rig.

    Parameters
    ----------
    path : path
        A TOML file; its other tables are not looked at.
    kinds : mapping of str to SourceKind
        The sources that ``[source] kind`` may name.

    Returns
    -------
    kind, settings, base
        What opens the source, with which settings, and the folder that relative paths start from.

    Raises
    ------
    ConfigError
        Where the file is missing or is no TOML, or a key of the table is missing, unknown or out of range.
    """
    path = Path(path)
    content = read_toml(path, "the node's configuration", ConfigError)
    table = content.get("source")
    try:
        name, settings = _source(table if isinstance(table, dict) else {}, kinds)
    except ConfigError as exc:
        raise ConfigError(f"{path}: {exc}") from exc
    return kinds[name], settings, path.parent


def parse_config(content: Mapping[str, Any], kinds: Mapping[str, SourceKind], base: Path) -> NodeConfig:
    """Check what a TOML file held; ``base`` is the folder that relative paths start from.

    Raises
    ------
    ConfigError
        Where a key is missing, unknown or out of range.
    """
    top = _checked(content, _Tables, "")
    volume = _checked(top.volume, VolumeConfig, "volume")
    if not volume.near_m < volume.far_m:
        raise ConfigError(
            f"volume.near_m is {volume.near_m:g} and volume.far_m is {volume.far_m:g}; expected near_m < far_m"
        )
    kind, settings = _source(top.source, kinds)
    config = NodeConfig(
        base=base,
        rig=base / top.rig,
        volume=volume,
        source_kind=kind,
        source=settings,
        match=_match(top.match),
        publish=_checked(top.publish, PublishConfig, "publish"),
    )
    _check_publish(config.publish, volume)
    return config


def _source(table: Mapping[str, Any], kinds: Mapping[str, SourceKind]) -> tuple[str, Struct]:
    names = ", ".join(f'"{name}"' for name in sorted(kinds))
    if "kind" not in table:
        raise ConfigError(f"source.kind is missing; expected one of {names}")
    kind = table["kind"]
    if not isinstance(kind, str) or kind not in kinds:
        raise ConfigError(f"source.kind is {kind!r}; expected one of {names}")
    settings = {key: value for key, value in table.items() if key != "kind"}
    return kind, _checked(settings, kinds[kind].settings, "source", also=("kind",))


def _match(table: Mapping[str, Any]) -> MatchConfig:
    match = _checked(table, MatchConfig, "match")
    try:
        _ = match.settings
    except NodeError as exc:
        raise ConfigError(f"match.{exc}") from exc
    return match


def _check_publish(publish: PublishConfig, volume: VolumeConfig) -> None:
    if publish.depth == publish.status and not publish.depth.endswith((":0", ":*")):
        raise ConfigError(f"publish.depth and publish.status are both {publish.depth}; expected two addresses")
    if volume.far_m > publish.packing.range_m:
        raise ConfigError(
            f"volume.far_m is {volume.far_m:g}, beyond the {publish.packing.range_m:g} m that uint16 counts of "
            f"publish.depth_unit_m = {publish.depth_unit_m:g} carry; expected a nearer far_m, "
            f'a depth_unit_m of {math.ceil(volume.far_m / 65535 * 1e6) / 1e6:g} or more, or pixels = "float32"'
        )


_Table = TypeVar("_Table", bound=Struct)


def _checked(table: Mapping[str, Any], kind: type[_Table], name: str, *, also: tuple[str, ...] = ()) -> _Table:
    """Turn one flat table into its value class."""
    return checked_table(table, kind, name, ConfigError, also=also)
