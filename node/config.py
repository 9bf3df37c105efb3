"""The node's configuration: a TOML file, checked into frozen values before anything starts.

All that is wrong with a file is found at once; every refusal names the key's path, the value given and what is allowed.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Annotated, Any

from msgspec import Meta, Struct

from ..calib.tables import read_table, read_toml
from .access import AccessConfig
from .config_faults import contradictions
from .errors import ConfigError
from .match import MatcherName, MatchSettings
from .pairing import PairingSettings
from .record_config import RecordConfig
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


_VALUES: Mapping[str, type[Struct]] = {
    "volume": VolumeConfig,
    "match": MatchConfig,
    "publish": PublishConfig,
    "pairing": PairingSettings,
    "watch": WatchConfig,
    "trust": TrustConfig,
    "access": AccessConfig,
    "control": ControlConfig,
    "record": RecordConfig,
}
"""What each table becomes; ``[source]`` depends on its kind. A new one stands here, above and in :class:`NodeConfig`."""


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
    volume, match, publish, trust, access, control
        Their tables.
    record : RecordConfig or None
        Its table; None where there is none, and so no place to record to.
    text : str
        What the file held; empty where it was no file.
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


@dataclass(frozen=True, kw_only=True)
class ConfigReading:
    """What a configuration came to, as far as it is sound.

    Attributes
    ----------
    faults : tuple of str
        All that is wrong with its keys; each names the key's path, the value and what is allowed.
    base : Path
        Folder of the configuration file.
    rig : Path or None
        The rig file; None where the key has a fault.
    choices : tuple of SourceChoice
        The sources whose tables are sound.
    tables : mapping of str to Any
        Every other table's values by its name; None where one of its keys is missing or bad.
    sound : mapping of str to Any
        The good values by their keys' paths, defaults among them.
    """

    faults: tuple[str, ...]
    base: Path
    rig: Path | None
    choices: tuple[SourceChoice, ...]
    tables: Mapping[str, Any]
    sound: Mapping[str, Any]

    def sources(self) -> SourcesConfig:
        """Give what it says of sources.

        Raises
        ------
        ConfigError
            Where there is any fault; it holds them all.
        """
        if self.faults:
            raise ConfigError(*self.faults)
        return SourcesConfig(
            base=self.base, choices=self.choices, pairing=self.tables["pairing"], watch=self.tables["watch"]
        )

    def config(self) -> NodeConfig:
        """Give the whole configuration.

        Raises
        ------
        ConfigError
            Where there is any fault; it holds them all.
        """
        sources = self.sources()
        assert self.rig is not None  # noqa: S101 - for the type checker: without a rig there is a fault
        rest = {name: value for name, value in self.tables.items() if name not in _SourceTables.__struct_fields__}
        return NodeConfig(rig=self.rig, sources=sources, **rest)


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
        Where the file is missing or is no TOML, or a key is missing, unknown or out of range; it holds all faults.
    """
    path = Path(path)
    content = read_toml(path, "the node's configuration", ConfigError)
    try:
        return replace(parse_config(content, kinds, path.parent), text=path.read_text(encoding="utf-8"))
    except ConfigError as exc:
        raise ConfigError(*(f"{path}: {fault}" for fault in exc.faults)) from exc


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
        return _read(wanted, _SourceTables, kinds, path.parent).sources()
    except ConfigError as exc:
        raise ConfigError(*(f"{path}: {fault}" for fault in exc.faults)) from exc


def parse_config(content: Mapping[str, Any], kinds: Mapping[str, SourceKind], base: Path) -> NodeConfig:
    """Check what a TOML file held; ``base`` is the folder that relative paths start from.

    Raises
    ------
    ConfigError
        Where a key is missing, unknown or out of range; it holds all faults.
    """
    return read_config(content, kinds, base).config()


def read_config(content: Mapping[str, Any], kinds: Mapping[str, SourceKind], base: Path) -> ConfigReading:
    """Find all that is wrong with what a TOML file held, and what of it is sound nevertheless; refuses nothing."""
    return _read(content, _Tables, kinds, base)


def _read(content: Mapping[str, Any], top: type[Struct], kinds: Mapping[str, SourceKind], base: Path) -> ConfigReading:
    reader = _Reader(content, top, kinds)
    choices = tuple(reader.choices())
    tables = {name: reader.table(name, kind) for name, kind in _VALUES.items() if name in top.__struct_fields__}
    rig = reader.sound.get("rig")
    return ConfigReading(
        faults=(*reader.faults, *contradictions(reader.sound)),
        base=base,
        rig=None if rig is None else base / rig,
        choices=choices,
        tables=tables,
        sound=reader.sound,
    )


class _Reader:
    """Reads one table after the other, and keeps what is wrong with them and what is sound."""

    def __init__(self, content: Mapping[str, Any], top: type[Struct], kinds: Mapping[str, SourceKind]) -> None:
        self.faults: list[str] = []
        self.sound: dict[str, Any] = {}
        self._kinds = kinds
        self._checked(content, top, "")
        self._tables = {name: table for name, table in self.sound.items() if isinstance(table, dict)}

    def table(self, name: str, kind: type[Struct]) -> Struct | None:
        """Check a table of the top level; None where it, or a key of it, is missing or bad."""
        return self._checked(self._tables[name], kind, name) if name in self._tables else None

    def choices(self) -> Iterator[SourceChoice]:
        """Check ``[source]``, or ``[source.a]`` and ``[source.b]``; give those that are sound."""
        source = self._tables.get("source")
        if source is None:
            return
        if "kind" in source or not any(isinstance(source.get(name), dict) for name in BOTH):
            yield from self._choice(source, "source", BOTH)
            return
        self.faults += [
            f"source.{key} stands beside source.a and source.b; expected it inside one of them"
            for key in source
            if key not in BOTH
        ]
        for name in BOTH:
            table = source.get(name)
            if isinstance(table, dict):
                yield from self._choice(table, f"source.{name}", (name,))
            else:
                self.faults.append(
                    f"source.{name} is {table!r}; expected a table [source.{name}] as for the other camera"
                )

    def _choice(self, table: Mapping[str, Any], path: str, cameras: tuple[CameraName, ...]) -> Iterator[SourceChoice]:
        kind = table.get("kind")
        fault = _fault_of_kind(table, path, cameras, self._kinds)
        if fault is not None:
            self.faults.append(fault)
            return
        assert isinstance(kind, str)  # noqa: S101 - for the type checker: it names a source
        own = {key: value for key, value in table.items() if key != "kind"}
        settings = self._checked(own, self._kinds[kind].settings, path, also=("kind",))
        if settings is not None:
            yield SourceChoice(cameras=cameras, kind=kind, settings=settings)

    def _checked(
        self, table: Mapping[str, Any], kind: type[Struct], name: str, *, also: tuple[str, ...] = ()
    ) -> Struct | None:
        reading = read_table(table, kind, name, also=also)
        self.faults += reading.faults
        self.sound |= {f"{name}.{key}" if name else key: value for key, value in reading.sound.items()}
        return reading.value


def _fault_of_kind(
    table: Mapping[str, Any], path: str, cameras: tuple[CameraName, ...], kinds: Mapping[str, SourceKind]
) -> str | None:
    """Say what is wrong with a source's kind; None where nothing is."""
    fitting = sorted(name for name, kind in kinds.items() if kind.both == (len(cameras) == len(BOTH)))
    names = ", ".join(f'"{name}"' for name in fitting)
    if "kind" not in table:
        return f"{path}.kind is missing; expected one of {names}{_each_hint(cameras, kinds)}"
    kind = table["kind"]
    if not isinstance(kind, str) or kind not in kinds:
        return f"{path}.kind is {kind!r}; expected one of {names}{_each_hint(cameras, kinds)}"
    if kind not in fitting:
        given, wanted = (
            ("both cameras", "[source]") if kinds[kind].both else ("one camera", "[source.a] and [source.b]")
        )
        return f"{path}.kind is {kind!r}, which gives the images of {given}; expected it in {wanted}"
    return None


def _each_hint(cameras: tuple[CameraName, ...], kinds: Mapping[str, SourceKind]) -> str:
    """Say, where a source of both cameras is sought, what each camera could have of its own."""
    singles = sorted(name for name, kind in kinds.items() if not kind.both)
    if len(cameras) < len(BOTH) or not singles:
        return ""
    return ", or tables [source.a] and [source.b], each with one of " + ", ".join(f'"{name}"' for name in singles)
