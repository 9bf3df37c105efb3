"""Who may connect to a node, and where its sockets may be bound: the ``[access]`` table and what it comes to.

Without keys a socket may be bound where this host alone reaches it, unless the configuration says otherwise in so many
words. With keys it may be bound anywhere, and :mod:`.gatekeeper` lets in whom the policy allows.
"""

from __future__ import annotations

import ipaddress
import socket
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated

from msgspec import Meta, Struct

from .errors import AccessError, ConfigError
from .keys import SecretKey, read_secret


class AccessConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[access]``: who may connect; paths start from the configuration's folder."""

    key: Annotated[str, Meta(min_length=1, description="the path of the node's secret key file")] | None = None
    allowed: Annotated[str, Meta(min_length=1, description="the folder of allowed public key files")] | None = None
    allow_plain: bool = False


@dataclass(frozen=True, kw_only=True)
class AccessPolicy:
    """What ``[access]`` came to.

    Attributes
    ----------
    key : SecretKey or None
        The node's; with it, every socket takes only those with an allowed key.
    allowed : Path or None
        Folder of their public key files.
    allow_plain : bool
        Without a key: whether sockets may be bound where other hosts reach them.
    """

    key: SecretKey | None = None
    allowed: Path | None = None
    allow_plain: bool = False

    def __post_init__(self) -> None:
        faults = tuple(_contradictions(self.key is not None, self.allowed is not None, self.allow_plain))
        if faults:
            raise ConfigError(*faults)

    @classmethod
    def from_config(cls, config: AccessConfig, base: Path) -> AccessPolicy:
        """Read the key that a configuration names.

        Raises
        ------
        ConfigError
            Where keys are given that do not go together, the key file will not do or the folder is missing; it holds
            all faults.
        """
        faults: list[str] = []
        allowed = None if config.allowed is None else base / config.allowed
        if allowed is not None and not allowed.is_dir():
            faults.append(f"access.allowed is {allowed}, which is no folder; expected one: make it with mkdir")
        key = None
        try:
            key = None if config.key is None else read_secret(base / config.key)
        except AccessError as exc:
            faults.append(f"access.key: {exc}")
        faults += _contradictions(config.key is not None, config.allowed is not None, config.allow_plain)
        if faults:
            raise ConfigError(*faults)
        return cls(key=key, allowed=allowed, allow_plain=config.allow_plain)

    @property
    def open_to_all(self) -> bool:
        """Whether anybody on the network may come: what a person should be reminded of."""
        return self.key is None and self.allow_plain

    def describe(self) -> str:
        """Say in a few words who may connect."""
        if self.key is not None:
            return "only programs with an allowed key"
        return "anybody who reaches this host (allow_plain)" if self.allow_plain else "any program on this host"

    def address_to_bind(self, address: str, key: str) -> str:
        """Give the address to bind, or refuse it.

        Parameters
        ----------
        address : str
            As it was configured.
        key : str
            Its path in the configuration, for messages.

        Returns
        -------
        str
            The same; a host that must be this one is replaced by its number, so that what was checked is what is bound.

        Raises
        ------
        ConfigError
            Where other hosts could reach it and there is no key, or the transport cannot carry keys.
        """
        scheme, separator, rest = address.partition("://")
        if not separator or self.open_to_all or (scheme == "inproc" and self.key is None):
            return address  # what is no address at all is refused by the attempt to bind it
        if scheme not in ("tcp", "ipc"):
            raise ConfigError(f"{key} is {address}; expected tcp:// or ipc://, which alone are kept shut: give one")
        if scheme == "ipc" or self.key is not None:
            return address
        host, _, port = rest.rpartition(":")
        loopback = _loopback(host)
        if loopback is None:
            raise ConfigError(
                f"{key} is {address}, which other hosts may reach, and there are no keys; expected 127.0.0.1: give that, "
                "or access.key and access.allowed (skewline keys new), or access.allow_plain = true to let anybody in"
            )
        return f"{scheme}://{loopback}:{port}"


def _contradictions(has_key: bool, has_allowed: bool, allow_plain: bool) -> Iterator[str]:
    if has_key != has_allowed:
        given, missing = ("key", "allowed") if has_key else ("allowed", "key")
        yield f"access.{given} is given without access.{missing}; expected both or neither: give both"
    if has_key and allow_plain:
        yield (
            "access.allow_plain is true although access.key is given; expected one of them: with a key nothing is plain"
        )


def _loopback(host: str) -> str | None:
    """Give the number of a host that is this one and reached from nowhere else; None for any other."""
    try:
        return host if ipaddress.ip_address(host.strip("[]")).is_loopback else None
    except ValueError:
        pass
    if host in ("", "*") or ";" in host or host in {name for _, name in socket.if_nameindex()}:
        return None  # the library takes names of network interfaces too
    try:
        found = socket.getaddrinfo(host, None, socket.AF_INET, socket.SOCK_STREAM)
    except (OSError, UnicodeError):
        return None
    numbers = [str(entry[4][0]) for entry in found]
    return numbers[0] if all(ipaddress.ip_address(number).is_loopback for number in numbers) else None
