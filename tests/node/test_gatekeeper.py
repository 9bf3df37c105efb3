"""Who is let in over real sockets on loopback, who is turned out, and what those are told who are not let in."""

import logging
import re
import socket
import time
from pathlib import Path
from typing import Any

import pytest
import zmq
from guarded import ANY, MARK, PLAIN, Place, frame, publishing, wait_until
from skewline.node import AccessError, ClientKeys, DepthSubscriber, NodeError, NoFrameError, StatusSubscriber
from skewline.node.allowed import allow, revoke
from skewline.node.gatekeeper import Gatekeeper, secure_client, secure_server, zap_reply
from skewline.node.handshake import HandshakeWatch
from skewline.node.keys import make_key_files
from skewline.node.publisher import Publisher


@pytest.fixture
def place(tmp_path: Path) -> Place:
    return Place(tmp_path)


# --- the answer to one question (RFC 27: version, request id, domain, address, identity, mechanism, credentials)

KEY = bytes(range(32))
ASKED = [b"1.0", b"7", b"home", b"127.0.0.1", b"", b"CURVE", KEY]


def test_an_allowed_key_is_answered_200_with_its_owner_s_name() -> None:
    reply = zap_reply(ASKED, "home", {KEY: "arm-3"}.get)
    assert reply == [b"1.0", b"7", b"200", b"OK", b"arm-3", b""]


@pytest.mark.parametrize(
    "request_frames",
    [
        [*ASKED[:6], bytes(32)],
        [*ASKED[:6], KEY[:31]],
        [*ASKED[:2], b"other", *ASKED[3:]],
        [*ASKED[:5], b"NULL"],
        [*ASKED[:5], b"PLAIN", b"user", b"password"],
        [*ASKED[:5], b"GSSAPI", KEY],
        [b"2.0", *ASKED[1:]],
        [*ASKED, b"more"],
        ASKED[:2],
        [b""],
    ],
)
def test_anything_else_is_answered_400(request_frames: list[bytes]) -> None:
    reply = zap_reply(request_frames, "home", {KEY: "arm-3"}.get)
    assert len(reply) == 6
    assert reply[2] == b"400"
    assert reply[4] == b""


def refusal(node: DepthSubscriber | StatusSubscriber) -> str:
    with pytest.raises(AccessError, match="expected") as refused:
        node.latest(timeout=20)
    return str(refused.value)


# --- over sockets


def test_a_program_with_an_allowed_key_gets_depth_and_status(place: Place) -> None:
    keys = place.program("arm-3")
    with publishing(place.policy) as publisher:
        with DepthSubscriber(publisher.depth_address, keys=keys) as node:
            assert node.latest(timeout=20).fingerprint == MARK
            numbers = [one.sequence for _, one in zip(range(5), node.frames(timeout=20), strict=False)]
            assert numbers == list(range(numbers[0], numbers[0] + 5))
        with StatusSubscriber(publisher.status_address, keys=keys) as status:
            assert status.latest(timeout=20).rig == MARK


def test_a_program_with_keys_may_start_before_the_node(place: Place) -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{probe.getsockname()[1]}"
    with DepthSubscriber(address, keys=place.program("arm-3")) as node:
        with pytest.raises(NoFrameError, match="check that it runs"):
            node.latest(timeout=0.3)
        with Gatekeeper(place.policy) as keeper, Publisher(address, ANY, keeper=keeper) as publisher:
            assert publisher.wait_for_subscriber(20)
            publisher.send_depth(frame())
            assert node.latest(timeout=20).session == publisher.session


def test_a_key_that_is_not_allowed_is_told_so_and_gets_in_once_it_is(place: Place) -> None:
    keys = place.program("arm-3", allowed=False)
    with publishing(place.policy) as publisher, DepthSubscriber(publisher.depth_address, keys=keys) as node:
        said = refusal(node)
        assert f"does not let in this program's key, fingerprint {keys.own.public.fingerprint}" in said
        assert "skewline keys allow" in said
        with StatusSubscriber(publisher.status_address, keys=keys) as status:
            assert "does not let in" in refusal(status)

        allow(place.allowed, place.folder / "arm-3.public.key")
        assert node.latest(timeout=20).fingerprint == MARK


def test_iterating_without_a_time_limit_does_not_wait_for_ever_at_a_closed_door(place: Place) -> None:
    other = place.program("other")
    wrong_node = ClientKeys(place.program("arm-3").own, other.own.public)
    stranger = place.program("stranger", allowed=False)
    with publishing(place.policy) as publisher:
        for keys in (wrong_node, stranger, None):
            with (
                DepthSubscriber(publisher.depth_address, keys=keys, timeout=None) as node,
                pytest.raises(AccessError, match=re.escape(publisher.depth_address)),
            ):
                next(iter(node))


def test_the_key_of_another_node_is_told_by_its_fingerprint(place: Place) -> None:
    make_key_files(place.folder, "other-node")
    keys = place.program("arm-3", node="other-node")
    with publishing(place.policy) as publisher, DepthSubscriber(publisher.depth_address, keys=keys) as node:
        said = refusal(node)
    assert f"hangs up on whoever asks for the node of fingerprint {keys.node.fingerprint}" in said
    assert "check the address and the node's public key file" in said


def test_a_program_without_a_key_is_told_that_it_needs_one(place: Place) -> None:
    with publishing(place.policy) as publisher, DepthSubscriber(publisher.depth_address) as node:
        # Which of the two it is told hangs on who is the first to notice and to hang up.
        assert re.search("with a key and none was given|give keys if it has them", refusal(node))


def test_a_program_with_keys_does_not_take_depth_from_a_node_without(place: Place) -> None:
    with publishing(PLAIN) as publisher:
        with DepthSubscriber(publisher.depth_address, keys=place.program("arm-3")) as node:
            assert re.search("has no keys, so that it may be anybody|or none, or is a relay", refusal(node))
        with DepthSubscriber(publisher.depth_address) as node:
            assert node.latest(timeout=20).fingerprint == MARK


def test_a_revoked_key_is_turned_out_and_stays_out_while_the_others_come_back(place: Place) -> None:
    revoked, kept = place.program("arm-3"), place.program("eye")
    with (
        publishing(place.policy) as publisher,
        DepthSubscriber(publisher.depth_address, keys=revoked) as out,
        StatusSubscriber(publisher.status_address, keys=revoked) as out_of_status,
        DepthSubscriber(publisher.depth_address, keys=kept) as stays,
    ):
        before = [out.latest(timeout=20), stays.latest(timeout=20)]
        assert out_of_status.latest(timeout=20).rig == MARK
        revoke(place.allowed, "arm-3")

        for node in (out, out_of_status):
            with pytest.raises(AccessError, match="does not let in this program's key"):
                read_for(node, 20)
        after = [stays.latest(timeout=20) for _ in range(3)]
        assert after[-1].session == before[1].session
        assert after[-1].sequence > before[1].sequence
        assert stays.restarts == 0


def read_for(node: DepthSubscriber | StatusSubscriber, seconds: float, timeout: float = 20.0) -> None:
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline:
        node.latest(timeout=timeout)


def test_a_key_that_never_came_in_is_revoked_without_disturbing_anybody(place: Place) -> None:
    place.program("idle")
    with publishing(place.policy) as publisher:
        keeper = publisher._keeper
        assert keeper is not None
        with DepthSubscriber(publisher.depth_address, keys=place.program("eye")) as node:
            node.latest(timeout=20)
            revoke(place.allowed, "idle")
            time.sleep(1.2)  # more than two looks at the folder; too short a wait could not fail this test
            assert keeper.revocations == 0
            revoke(place.allowed, "eye")
            wait_until(lambda: keeper.revocations == 1)


def test_a_node_bound_to_every_address_is_bound_there_again_after_a_revocation(place: Place) -> None:
    keys = place.program("arm-3")
    with publishing(place.policy, "tcp://*:0") as publisher:
        address = publisher.depth_address.replace("0.0.0.0", "127.0.0.1")  # noqa: S104 - what was bound, with keys
        with DepthSubscriber(address, keys=keys) as first:
            first.latest(timeout=20)
        revoke(place.allowed, "arm-3")
        wait_until(lambda: publisher._revocations == 1)
        allow(place.allowed, place.folder / "arm-3.public.key")
        with DepthSubscriber(address, keys=keys) as second:
            assert second.latest(timeout=20).fingerprint == MARK


def test_a_damaged_file_among_the_allowed_lets_nobody_in_and_is_told_once(
    place: Place, caplog: pytest.LogCaptureFixture
) -> None:
    good, bad = place.program("good"), place.program("bad")
    path = place.allowed / "bad.public.key"
    path.write_text(path.read_text()[:-6])
    with caplog.at_level(logging.WARNING), publishing(place.policy) as publisher:
        with DepthSubscriber(publisher.depth_address, keys=bad) as node:
            assert "does not let in" in refusal(node)
        for _ in range(3):
            with DepthSubscriber(publisher.depth_address, keys=good) as node:
                assert node.latest(timeout=20).fingerprint == MARK
    told = [record.getMessage() for record in caplog.records if "bad.public.key" in record.getMessage()]
    assert len(told) == 1
    assert "passed over among the allowed keys" in told[0]


# --- a door whose keeper fails


def test_a_check_that_fails_refuses_and_the_next_one_is_made(place: Place, monkeypatch: pytest.MonkeyPatch) -> None:
    keys = place.program("arm-3")
    asked = []
    look = Gatekeeper._look

    def failing(self: Gatekeeper, raw: bytes = b"") -> str | None:
        asked.append(raw)
        if raw and asked.count(raw) == 1:
            raise MemoryError
        return look(self, raw)

    monkeypatch.setattr(Gatekeeper, "_look", failing)
    with publishing(place.policy) as publisher, DepthSubscriber(publisher.depth_address, keys=keys) as node:
        assert "could not check keys (status 500)" in refusal(node)
        assert node.latest(timeout=20).fingerprint == MARK


def test_a_dead_handler_closes_the_door_and_ends_what_it_let_in(
    place: Place, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    keys = place.program("arm-3")
    with publishing(place.policy) as publisher, DepthSubscriber(publisher.depth_address, keys=keys) as inside:
        inside.latest(timeout=20)
        keeper = publisher._keeper
        assert keeper is not None
        monkeypatch.setattr("skewline.node.gatekeeper.read_allowed", lambda _: None)  # no answer that it can work with
        wait_until(lambda: not keeper.answering)
        monkeypatch.undo()
        assert "nobody comes in until the node is started anew" in caplog.text

        address = re.escape(publisher.depth_address)
        with pytest.raises(NodeError, match=address):  # hung up on, or nothing comes any more
            read_for(inside, 20, timeout=2)
        with (
            DepthSubscriber(publisher.depth_address, keys=keys) as late,
            pytest.raises(NodeError, match=address),
        ):
            late.latest(timeout=1)


def test_a_socket_is_secured_before_it_is_bound_and_by_a_keeper_at_work(
    place: Place, context: zmq.Context[Any]
) -> None:
    with context.socket(zmq.REP) as early, pytest.raises(NodeError, match="whose gatekeeper is not at work"):
        secure_server(early, Gatekeeper(place.policy, context))
    with Gatekeeper(place.policy, context) as keeper:
        with context.socket(zmq.REP) as late:
            late.bind(ANY)
            with pytest.raises(NodeError, match="bound already"):
                secure_server(late, keeper)
        with (
            zmq.Context() as other,
            other.socket(zmq.REP) as foreign,
            pytest.raises(NodeError, match="of another context"),
        ):
            secure_server(foreign, keeper)
        with pytest.raises(NodeError, match="somebody who checks keys already"), Gatekeeper(place.policy, context):
            pass
    for _ in range(10):
        with Gatekeeper(place.policy, context) as again:  # the address is free at once
            assert again.answering


@pytest.mark.parametrize(("server", "client"), [(zmq.REP, zmq.REQ), (zmq.ROUTER, zmq.DEALER)])
def test_sockets_that_answer_requests_are_secured_too_and_know_who_asks(server: int, client: int, place: Place) -> None:
    keys, stranger = place.program("arm-3"), place.program("stranger", allowed=False)
    with (
        Gatekeeper(place.policy) as keeper,
        keeper.context.socket(server) as answering,
        zmq.Context() as far,
        far.socket(client) as asking,
        far.socket(client) as refused,
    ):
        secure_server(answering, keeper)
        port = answering.bind_to_random_port("tcp://127.0.0.1")
        for end, own in ((refused, stranger), (asking, keys)):
            end.setsockopt(zmq.LINGER, 0)
            secure_client(end, own)
            end.connect(f"tcp://127.0.0.1:{port}")
            end.send(b"ask")
        assert answering.poll(20_000)
        parts = answering.recv_multipart(copy=False)
        assert parts[-1].get("User-Id") == "arm-3"
        answering.send_multipart(parts)
        assert asking.poll(20_000)
        assert asking.recv() == b"ask"
        assert not answering.poll(200)


def test_connections_may_be_watched_one_after_the_other_without_a_pause(context: zmq.Context[Any]) -> None:
    for _ in range(100):
        with context.socket(zmq.SUB) as watched:
            HandshakeWatch(watched, ANY, None).close()
