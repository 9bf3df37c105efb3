"""The node's configuration: a TOML file, checked into frozen values before anything starts.

Every refusal names the key's path, the value given and what is allowed.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Annotated, Any, TypeVar

from msgspec import Meta, Struct

from ..calib.tables import checked_table, read_toml
from .access import AccessConfig
from .errors import ConfigError, NodeError
from .match import MatcherName, MatchSettings
from .pairing import PairingSettings
from .record_config import RecordConfig, check_record
from .shot import BOTH, CameraName
from .sources import Source, SourceKind
from .stream import WatchConfig
from .trust import TrustConfig
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


class ControlConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[control]``: where requests come in, and whether any do."""

    on: bool = True
    address: Address = "tcp://127.0.0.1:7603"


class _Tables(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """The file's top level."""

    rig: Annotated[str, Meta(min_length=1, description="the path of a rig file")]
    volume: dict[str, Any]
    source: dict[str, Any]
    match: dict[str, Any] = {}
    publish: dict[str, Any] = {}
    pairing: dict[str, Any] = {}
    watch: dict[str, Any] = {}
    trust: dict[str, Any] = {}
    access: dict[str, Any] = {}
    control: dict[str, Any] = {}
    record: dict[str, Any] | None = None


class _SourceTables(Struct, frozen=True, kw_only=True):
    """What of the top level says where images come from."""

    source: dict[str, Any] = {}
    pairing: dict[str, Any] = {}
    watch: dict[str, Any] = {}


@dataclass(frozen=True, kw_only=True)
class SourceChoice:
    """One source, as a configuration names it.

    Attributes
    ----------
    cameras : tuple of {"a", "b"}
        Whose images it gives.
    kind : str
        Its name in the table of sources.
    settings : msgspec.Struct
        Its own settings.
    """

    cameras: tuple[CameraName, ...]
    kind: str
    settings: Struct


@dataclass(frozen=True, kw_only=True)
class SourcesConfig:
    """Where pairs come from.

    Attributes
    ----------
    base : Path
        Folder of the configuration file: relative paths in it start there.
    choices : tuple of SourceChoice
        One source of both cameras, or one for each.
    pairing : PairingSettings
        How partners are found.
    watch : WatchConfig
        When a live camera counts as gone.
    """

    base: Path
    choices: tuple[SourceChoice, ...]
    pairing: PairingSettings
    watch: WatchConfig

    def make(self, kinds: Mapping[str, SourceKind]) -> list[Source]:
        """Make the sources, without opening them.

        Raises
        ------
        ConfigError
            As the sources say.
        """
        return [kinds[choice.kind].open(choice.settings, self.base, choice.cameras) for choice in self.choices]


@dataclass(frozen=True, kw_only=True)
class NodeConfig:
    """A checked configuration.

    Attributes
    ----------
    rig : Path
        The rig file.
    sources : SourcesConfig
        Where pairs come from.
    text : str
        What the file held; empty where it was no file.
    volume, match, publish, trust, access, control
        Their tables.
    record : RecordConfig or None
        Its table; None where there is none, and so no place to record to.
    """

    rig: Path
    sources: SourcesConfig
    volume: VolumeConfig
    match: MatchConfig
    publish: PublishConfig
    trust: TrustConfig
    access: AccessConfig
    control: ControlConfig
    record: RecordConfig | None = None
    text: str = ""

    @property
    def base(self) -> Path:
        """Folder of the configuration file."""
        return self.sources.base


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
        return replace(parse_config(content, kinds, path.parent), text=path.read_text(encoding="utf-8"))
    except ConfigError as exc:
        raise ConfigError(f"{path}: {exc}") from exc


def load_sources(path: str | Path, kinds: Mapping[str, SourceKind]) -> SourcesConfig:
    """Read what a configuration says of sources alone, for those who need images before there is a rig.

    Parameters
    ----------
    path : path
        A TOML file; tables other than ``[source]``, ``[pairing]`` and ``[watch]`` are not looked at.
    kinds : mapping of str to SourceKind
        The sources that ``[source] kind`` may name.

    Raises
    ------
    ConfigError
        Where the file is missing or is no TOML, or a key of these tables is missing, unknown or out of range.
    """
    path = Path(path)
    content = read_toml(path, "the node's configuration", ConfigError)
    wanted = {name: content[name] for name in _SourceTables.__struct_fields__ if name in content}
    try:
        tables = _checked(wanted, _SourceTables, "")
        return _sources(tables.source, tables.pairing, tables.watch, kinds, path.parent)
    except ConfigError as exc:
        raise ConfigError(f"{path}: {exc}") from exc


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
    config = NodeConfig(
        rig=base / top.rig,
        sources=_sources(top.source, top.pairing, top.watch, kinds, base),
        volume=volume,
        match=_match(top.match),
        publish=_checked(top.publish, PublishConfig, "publish"),
        trust=_trust(top.trust),
        access=_checked(top.access, AccessConfig, "access"),
        control=_checked(top.control, ControlConfig, "control"),
        record=None if top.record is None else _record(top.record),
    )
    _check_publish(config.publish, config.control, volume)
    return config


def _sources(
    source: Mapping[str, Any],
    pairing: Mapping[str, Any],
    watch: Mapping[str, Any],
    kinds: Mapping[str, SourceKind],
    base: Path,
) -> SourcesConfig:
    """Check ``[source]``, or ``[source.a]`` and ``[source.b]``, and what belongs to them."""
    if "kind" not in source and any(isinstance(source.get(name), dict) for name in BOTH):
        choices = _one_for_each(source, kinds)
    else:
        choices = (_choice(source, "source", BOTH, kinds),)
    return SourcesConfig(
        base=base,
        choices=choices,
        pairing=_checked(pairing, PairingSettings, "pairing"),
        watch=_watch(watch),
    )


def _one_for_each(source: Mapping[str, Any], kinds: Mapping[str, SourceKind]) -> tuple[SourceChoice, ...]:
    for key in source:
        if key not in BOTH:
            raise ConfigError(f"source.{key} stands beside source.a and source.b; expected it inside one of them")
    tables = {name: source.get(name) for name in BOTH}
    for name, table in tables.items():
        if not isinstance(table, dict):
            raise ConfigError(f"source.{name} is {table!r}; expected a table [source.{name}] as for the other camera")
    return tuple(_choice(table or {}, f"source.{name}", (name,), kinds) for name, table in tables.items())


def _choice(
    table: Mapping[str, Any], path: str, cameras: tuple[CameraName, ...], kinds: Mapping[str, SourceKind]
) -> SourceChoice:
    fitting = {name: kind for name, kind in kinds.items() if kind.both == (len(cameras) == len(BOTH))}
    names = ", ".join(f'"{name}"' for name in sorted(fitting))
    if "kind" not in table:
        raise ConfigError(f"{path}.kind is missing; expected one of {names}{_each_hint(cameras, kinds)}")
    kind = table["kind"]
    if not isinstance(kind, str) or kind not in kinds:
        raise ConfigError(f"{path}.kind is {kind!r}; expected one of {names}{_each_hint(cameras, kinds)}")
    if kind not in fitting:
        given, wanted = (
            ("both cameras", "[source]") if kinds[kind].both else ("one camera", "[source.a] and [source.b]")
        )
        raise ConfigError(f"{path}.kind is {kind!r}, which gives the images of {given}; expected it in {wanted}")
    settings = {key: value for key, value in table.items() if key != "kind"}
    return SourceChoice(
        cameras=cameras, kind=kind, settings=_checked(settings, kinds[kind].settings, path, also=("kind",))
    )


def _each_hint(cameras: tuple[CameraName, ...], kinds: Mapping[str, SourceKind]) -> str:
    """Say, where a source of both cameras is sought, what each camera could have of its own."""
    singles = sorted(name for name, kind in kinds.items() if not kind.both)
    if len(cameras) < len(BOTH) or not singles:
        return ""
    return ", or tables [source.a] and [source.b], each with one of " + ", ".join(f'"{name}"' for name in singles)


def _record(table: Mapping[str, Any]) -> RecordConfig:
    record = _checked(table, RecordConfig, "record")
    check_record(record)
    return record


def _watch(table: Mapping[str, Any]) -> WatchConfig:
    watch = _checked(table, WatchConfig, "watch")
    if watch.retry_s > watch.retry_most_s:
        raise ConfigError(
            f"watch.retry_s is {watch.retry_s:g} and watch.retry_most_s {watch.retry_most_s:g}; "
            "expected retry_s to be the smaller"
        )
    return watch


def _trust(table: Mapping[str, Any]) -> TrustConfig:
    trust = _checked(table, TrustConfig, "trust")
    if trust.skew_doubtful_m > trust.skew_bad_m:
        raise ConfigError(
            f"trust.skew_doubtful_m is {trust.skew_doubtful_m:g} and trust.skew_bad_m {trust.skew_bad_m:g}; "
            "expected skew_doubtful_m to be the smaller"
        )
    return trust


def _match(table: Mapping[str, Any]) -> MatchConfig:
    match = _checked(table, MatchConfig, "match")
    try:
        _ = match.settings
    except NodeError as exc:
        raise ConfigError(f"match.{exc}") from exc
    return match


def _check_publish(publish: PublishConfig, control: ControlConfig, volume: VolumeConfig) -> None:
    addresses = {"publish.depth": publish.depth, "publish.status": publish.status}
    if control.on:
        addresses["control.address"] = control.address
    for (first, one), (second, other) in itertools.combinations(addresses.items(), 2):
        if one == other and not one.endswith((":0", ":*")):
            raise ConfigError(f"{first} and {second} are both {one}; expected two addresses")
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
