"""Everything that would keep a node from starting, found at once and without starting anything.

No port is bound, no camera opened, no file written: tables are read, the rig is loaded, the views are planned without
their maps, sources are made and not entered, keys are read.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from ..calib import CalibrationError, Rig
from ..calib.tables import read_toml
from .access import AccessConfig, AccessPolicy
from .allowed import read_allowed
from .config import ConfigReading, read_config
from .errors import UNKNOWN_SCALE, ConfigError, NodeError
from .feed import faults_between
from .pairing import Pairer, PairingSettings
from .rectify import ViewPlan, plan_views
from .shot import BOTH
from .sources import Source, SourceKind

_Made = TypeVar("_Made")

_SOCKETS = ("publish.depth", "publish.status", "control.address")


@dataclass(frozen=True, kw_only=True)
class Preflight:
    """What a look at a configuration found.

    Attributes
    ----------
    faults : tuple of str
        What keeps the node from starting: each names a path, the value, what is allowed and the remedy.
    notes : tuple of str
        What does not, and is worth knowing: a key file that lets nobody in, for one.
    rig : Rig or None
        None where it cannot be used.
    plan : ViewPlan or None
        The rectified views; None where the rig does not see the volume, or either has a fault.
    sources : tuple of str
        What images would be read from, in words.
    may_connect : str
        Who might, in words; empty where the keys have a fault.
    addresses : mapping of str to str
        Where the node's sockets would be bound, by their keys' paths.
    """

    faults: tuple[str, ...]
    notes: tuple[str, ...] = ()
    rig: Rig | None = None
    plan: ViewPlan | None = None
    sources: tuple[str, ...] = ()
    may_connect: str = ""
    addresses: Mapping[str, str]


def preflight(path: str | Path, kinds: Mapping[str, SourceKind]) -> Preflight:
    """Look at a configuration file and all that it names.

    Parameters
    ----------
    path : path
        A TOML file.
    kinds : mapping of str to SourceKind
        The sources that ``[source] kind`` may name.
    """
    path = Path(path)
    try:
        content = read_toml(path, "the node's configuration", ConfigError)
    except ConfigError as exc:
        return Preflight(faults=exc.faults, addresses={})
    return _Look(read_config(content, kinds, path.parent), kinds).result()


class _Look:
    """The steps, each of which says what it finds and leaves the others to go on."""

    def __init__(self, reading: ConfigReading, kinds: Mapping[str, SourceKind]) -> None:
        self._reading = reading
        self._kinds = kinds
        self._faults = list(reading.faults)
        self._notes: list[str] = []

    def result(self) -> Preflight:
        """Take every step."""
        rig = self._rig()
        plan = None if rig is None else self._plan(rig)
        sources = self._sources()
        policy = self._policy()
        addresses = {key: self._reading.sound[key] for key in _SOCKETS if key in self._reading.sound}
        if self._reading.sound.get("control.on") is False:
            addresses.pop("control.address", None)
        self._faults += self._unreachable(policy, addresses)
        return Preflight(
            faults=tuple(self._faults),
            notes=tuple(self._notes),
            rig=rig,
            plan=plan,
            sources=tuple(source.identity for source in sources),
            may_connect="" if policy is None else policy.describe(),
            addresses=addresses,
        )

    def _rig(self) -> Rig | None:
        path = self._reading.rig
        rig = None if path is None else self._attempt("rig", lambda: Rig.load(path))
        if rig is None or rig.scale_known:
            return rig
        self._faults.append(f"rig: the depth of {path} would not be in metres, since {UNKNOWN_SCALE}")
        return None

    def _plan(self, rig: Rig) -> ViewPlan | None:
        volume, match = self._reading.tables["volume"], self._reading.tables["match"]
        if volume is None or match is None or not volume.near_m < volume.far_m:
            return None  # told already
        return self._attempt(
            "volume", lambda: plan_views(rig, volume.near_m, volume.far_m, resolution=match.resolution)
        )

    def _sources(self) -> list[Source]:
        choices, base = self._reading.choices, self._reading.base
        sources = []
        for choice in choices:
            opener = self._kinds[choice.kind].open
            place = "source" if choice.cameras == BOTH else f"source.{choice.cameras[0]}"
            made = self._attempt(place, lambda o=opener, c=choice: o(c.settings, base, c.cameras))  # type: ignore[misc]
            if made is not None:
                sources.append(made)
                self._notes += made.remarks
        if sorted(name for source in sources for name in source.cameras) == list(BOTH):
            self._faults += [f"source: {fault}" for fault in faults_between(sources)]
            pairing: PairingSettings | None = self._reading.tables["pairing"]
            if pairing is not None:
                self._attempt("pairing", lambda: Pairer(pairing, live=all(source.live for source in sources)))
        return sources

    def _policy(self) -> AccessPolicy | None:
        access: AccessConfig | None = self._reading.tables["access"]
        if access is None:
            return None
        policy = self._attempt("access", lambda: AccessPolicy.from_config(access, self._reading.base))
        if policy is not None and policy.allowed is not None:
            allowed = read_allowed(policy.allowed)
            self._notes += allowed.faults
            if not allowed.keys:
                self._notes.append(f"{policy.allowed} holds no key, so that nobody may connect: skewline keys allow")
        return policy

    @staticmethod
    def _unreachable(policy: AccessPolicy | None, addresses: Mapping[str, str]) -> Iterator[str]:
        """Find addresses that the policy does not let be bound; without one, its own faults come first."""
        for key, address in addresses.items() if policy is not None else ():
            assert policy is not None  # noqa: S101 - for the type checker
            try:
                policy.address_to_bind(address, key)
            except ConfigError as exc:
                yield from exc.faults

    def _attempt(self, place: str, make: Callable[[], _Made]) -> _Made | None:
        """Make something; where that fails, keep what is wrong under its place, unless the words begin with it."""
        try:
            return make()
        except ConfigError as exc:
            faults = exc.faults
        except (NodeError, CalibrationError) as exc:
            faults = (str(exc),)
        named = (f"{place}.", f"{place}:", f"[{place}]")
        self._faults += [fault if fault.startswith(named) else f"{place}: {fault}" for fault in faults]
        return None
