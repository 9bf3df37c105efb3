"""Where a socket may be bound, and what the [access] table comes to."""

import socket
from pathlib import Path
from typing import Any

import pytest
from guarded import ANY, MARK, PLAIN, Place, publishing
from skewline.node import ConfigError, DepthSubscriber
from skewline.node.access import AccessConfig, AccessPolicy
from skewline.node.gatekeeper import Gatekeeper
from skewline.node.publisher import Publisher


@pytest.fixture
def place(tmp_path: Path) -> Place:
    return Place(tmp_path)


@pytest.mark.parametrize(
    ("address", "bound"),
    [
        ("tcp://127.0.0.1:7601", "tcp://127.0.0.1:7601"),
        ("tcp://127.8.9.10:0", "tcp://127.8.9.10:0"),
        ("tcp://[::1]:7601", "tcp://[::1]:7601"),
        ("tcp://localhost:7601", "tcp://127.0.0.1:7601"),
        ("tcp://2130706433:7601", "tcp://127.0.0.1:7601"),  # another way to write 127.0.0.1 (inet_aton)
        ("ipc:///run/skewline", "ipc:///run/skewline"),
        ("inproc://here", "inproc://here"),
        ("nonsense", "nonsense"),  # no address: the attempt to bind it says so
    ],
)
def test_what_this_host_alone_reaches_may_be_bound_without_keys(address: str, bound: str) -> None:
    assert PLAIN.address_to_bind(address, "publish.depth") == bound


BEYOND = [
    "tcp://*:7601",
    "tcp://0.0.0.0:7601",
    "tcp://[::]:7601",
    "tcp://:7601",
    "tcp://192.0.2.1:7601",
    "tcp://3221225985:7601",  # 192.0.2.1 (inet_aton)
    "tcp://127.0.0.1;192.0.2.1:7601",
    "tcp://lo:7601",  # a network interface, whatever addresses it has
    "tcp://no-such-host.invalid:7601",
    "tcp://[fe80::1%lo]:7601",
]


@pytest.mark.parametrize("address", BEYOND)
def test_what_other_hosts_may_reach_is_not_bound_without_keys(address: str) -> None:
    with pytest.raises(
        ConfigError, match=r"publish\.depth is tcp://.* expected 127\.0\.0\.1.*access\.allow_plain = true"
    ):
        PLAIN.address_to_bind(address, "publish.depth")


@pytest.mark.parametrize("address", BEYOND)
def test_it_is_bound_with_keys_and_on_express_wish(address: str, place: Place) -> None:
    for policy in (place.policy, AccessPolicy(allow_plain=True)):
        assert policy.address_to_bind(address, "publish.depth") == address


def test_a_name_with_one_address_beyond_this_host_is_beyond_it(monkeypatch: pytest.MonkeyPatch) -> None:
    def resolved(*_: object) -> list[Any]:
        return [(socket.AF_INET, socket.SOCK_STREAM, 6, "", (number, 0)) for number in ("127.0.0.1", "192.0.2.1")]

    monkeypatch.setattr(socket, "getaddrinfo", resolved)
    with pytest.raises(ConfigError, match="other hosts may reach"):
        PLAIN.address_to_bind("tcp://bench:7601", "publish.depth")


@pytest.mark.parametrize("address", ["inproc://x", "udp://127.0.0.1:7601", "pgm://x"])
def test_a_transport_that_carries_no_keys_is_refused_where_there_are_keys(address: str, place: Place) -> None:
    with pytest.raises(ConfigError, match=r"expected tcp:// or ipc://"):
        place.policy.address_to_bind(address, "publish.depth")


def has_ipv6() -> bool:
    try:
        with socket.create_server(("::1", 0), family=socket.AF_INET6):
            return True
    except OSError:
        return False


@pytest.mark.skipif(not has_ipv6(), reason="this host has no ::1")
def test_the_loopback_of_ipv6_serves_as_well(place: Place) -> None:
    for policy, keys in ((PLAIN, None), (place.policy, place.program("arm-3"))):
        with (
            publishing(policy, "tcp://[::1]:0") as publisher,
            DepthSubscriber(publisher.depth_address, keys=keys) as node,
        ):
            assert publisher.depth_address.startswith("tcp://[::1]:")
            assert node.latest(timeout=20).fingerprint == MARK


def test_a_publisher_asks_before_it_binds() -> None:
    with Gatekeeper(PLAIN) as keeper, pytest.raises(ConfigError, match=r"publish\.status is tcp://\*:0"):
        Publisher(ANY, "tcp://*:0", keeper=keeper)


def test_a_configuration_s_paths_start_from_its_folder(place: Place) -> None:
    policy = AccessPolicy.from_config(AccessConfig(key="node.secret.key", allowed="allowed"), place.folder)
    assert policy == place.policy
    assert AccessPolicy.from_config(AccessConfig(), place.folder) == PLAIN


@pytest.mark.parametrize(
    ("config", "complaint"),
    [
        (AccessConfig(key="node.secret.key"), r"access\.key is given without access\.allowed"),
        (AccessConfig(allowed="allowed"), r"access\.allowed is given without access\.key"),
        (AccessConfig(key="node.secret.key", allowed="allowed", allow_plain=True), r"access\.allow_plain is true alth"),
        (AccessConfig(key="node.secret.key", allowed="gone"), r"access\.allowed is .*gone, which is no folder"),
        (AccessConfig(key="gone.key", allowed="allowed"), r"access\.key: cannot read .*gone\.key"),
        (AccessConfig(key="node.public.key", allowed="allowed"), r"access\.key: .* is a public key"),
    ],
)
def test_a_configuration_that_would_not_keep_the_door_is_refused(
    config: AccessConfig, complaint: str, place: Place
) -> None:
    with pytest.raises(ConfigError, match=complaint):
        AccessPolicy.from_config(config, place.folder)


def test_a_policy_says_who_may_connect(place: Place) -> None:
    said = {policy.describe(): policy.open_to_all for policy in (PLAIN, AccessPolicy(allow_plain=True), place.policy)}
    assert said == {
        "any program on this host": False,
        "anybody who reaches this host (allow_plain)": True,
        "only programs with an allowed key": False,
    }
