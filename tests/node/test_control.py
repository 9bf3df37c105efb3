"""Control: requests over real sockets to a server of the test's own commands, and to a running node."""

import json
import logging
import re
import threading
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any

import msgpack
import numpy as np
import pytest
import zmq
from msgspec import Meta, Struct
from skewline.calib import Rig
from skewline.node import DepthSubscriber, NodeError
from skewline.node.access import AccessPolicy
from skewline.node.config import load_config
from skewline.node.control import LONGEST_REQUEST, Command, ControlServer, NoValues, RateLimit
from skewline.node.control_client import NodeControl
from skewline.node.errors import NoReplyError, NotNowError, RefusedError
from skewline.node.gatekeeper import Gatekeeper
from skewline.node.runner import NodeAddresses, run_node
from skewline.node.sources import BUILT_IN

LOG = logging.Logger("quiet")


class Add(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    left: Annotated[int, Meta(ge=0)]
    right: int = 1


def act(values: Add) -> Mapping[str, Any]:
    if values.right == 13:
        raise NotNowError("not on a Friday")
    if values.right == 14:
        raise NodeError("the abacus broke")
    if values.right == 15:
        raise ZeroDivisionError("a fault of ours")
    return {"sum": values.left + values.right}


@pytest.fixture
def server(context: zmq.Context[Any]) -> Iterator[ControlServer]:
    with Gatekeeper(AccessPolicy(), context) as keeper:
        commands = {"add": Command(Add, act), "rest": Command(NoValues, lambda _: {})}
        server = ControlServer("tcp://127.0.0.1:0", keeper, commands, log=LOG)
        server.start()
        yield server
        server.close()


@pytest.fixture
def dealer(server: ControlServer, context: zmq.Context[Any]) -> Iterator[zmq.Socket[bytes]]:
    """Give a bare socket, with which anything may be sent."""
    socket: zmq.Socket[bytes] = context.socket(zmq.DEALER)
    socket.setsockopt(zmq.LINGER, 0)
    socket.setsockopt(zmq.RCVTIMEO, 20_000)
    socket.connect(server.address)
    yield socket
    socket.close()


def request(**changes: Any) -> dict[str, Any]:
    return {
        "format": "skewline request",
        "version": 1,
        "number": 7,
        "ask": "add",
        "values": {"left": 2, "right": 3},
    } | changes


def asked(dealer: zmq.Socket[bytes], body: bytes) -> dict[str, Any]:
    dealer.send(body)
    reply: dict[str, Any] = msgpack.unpackb(dealer.recv())
    return reply


def test_a_request_written_by_the_msgpack_library_is_done_and_its_reply_has_every_specified_key(
    dealer: zmq.Socket[bytes],
) -> None:
    before_ns = time.time_ns()
    reply = asked(dealer, msgpack.packb(request()))

    stamps = reply.pop("received_ns"), reply.pop("sent_ns")
    assert before_ns <= stamps[0] <= stamps[1] <= time.time_ns()
    assert reply == {
        "format": "skewline reply",
        "version": 1,
        "number": 7,
        "done": True,
        "values": {"sum": 5},
        "fault": None,
    }
    text = (Path(__file__).parents[2] / "node" / "WIRE.md").read_text(encoding="utf-8")
    for key in [*reply, *request()]:
        assert f"`{key}`" in text


@pytest.mark.parametrize(
    ("body", "kind", "detail"),
    [
        (b"", "malformed", "0 bytes are no request"),
        (b"\xc1\xc1", "malformed", "expected one msgpack map"),
        (msgpack.packb([1, 2]), "malformed", "expected one msgpack map"),
        (msgpack.packb(request(number=-1)), "malformed", "number"),
        (msgpack.packb(request(ask=5)), "malformed", "ask"),
        (msgpack.packb(request(version=2)), "malformed", r"version 2; expected 'skewline request' and 1"),
        (msgpack.packb(request(format="other")), "malformed", "format is 'other'"),
        (msgpack.packb(request(ask="fly")), "unknown request", r"ask is 'fly'; expected one of add, rest"),
        (msgpack.packb(request(values={"left": "2"})), "bad values", r"the values of add do not fit \(Expected `int`"),
        (msgpack.packb(request(values={"left": -2})), "bad values", ">= 0"),
        (msgpack.packb(request(values={})), "bad values", "missing required field `left`"),
        (msgpack.packb(request(values={"left": 2, "top": 1})), "bad values", "unknown field `top`"),
        (msgpack.packb(request(values={"left": 2, "right": 13})), "not now", "not on a Friday"),
        (msgpack.packb(request(values={"left": 2, "right": 14})), "failed", "the abacus broke"),
        (msgpack.packb(request(values={"left": 2, "right": 15})), "failed", "a fault of ours; see the node's log"),
        (b"\xdf\xff\xff\xff\xff", "malformed", "no request"),  # a map of four billion keys
        (b"\x91" * 100_000, "malformed", "no request"),  # arrays within arrays
        (msgpack.packb(request(values={"left": "x" * LONGEST_REQUEST})), "too long", f"at most {LONGEST_REQUEST}"),
    ],
)
def test_a_bad_request_is_refused_with_its_kind_and_words_and_the_next_good_one_is_done(
    body: bytes, kind: str, detail: str, server: ControlServer, dealer: zmq.Socket[bytes]
) -> None:
    reply = asked(dealer, body)

    assert not reply["done"]
    assert reply["fault"]["kind"] == kind
    assert re.search(detail, reply["fault"]["detail"]), reply["fault"]["detail"]
    assert server.refused == 1
    assert asked(dealer, msgpack.packb(request()))["values"] == {"sum": 5}


def test_the_reply_to_what_could_be_read_has_its_number(dealer: zmq.Socket[bytes]) -> None:
    assert asked(dealer, msgpack.packb(request(ask="fly", number=99)))["number"] == 99
    assert asked(dealer, b"nonsense")["number"] == 0


def test_values_may_be_left_out_where_there_are_none_and_unknown_keys_are_passed_over(
    dealer: zmq.Socket[bytes],
) -> None:
    message = request(ask="rest", colour="red")
    del message["values"]

    assert asked(dealer, msgpack.packb(message))["done"]


def test_a_message_of_more_parts_than_an_envelope_is_dropped_and_counted(
    server: ControlServer, dealer: zmq.Socket[bytes]
) -> None:
    dealer.send_multipart([b"x", b"y", b"z"])

    assert asked(dealer, msgpack.packb(request()))["done"]
    assert server.refused == 1


def test_ten_thousand_mutated_requests_leave_the_server_answering(server: ControlServer) -> None:
    rng = np.random.default_rng(6)
    good = bytearray(msgpack.packb(request()))
    done = 0
    for _ in range(10_000):
        body = bytearray(good)
        for _ in range(rng.integers(1, 4)):
            place = int(rng.integers(len(body)))
            match rng.integers(3):
                case 0:
                    body[place] = int(rng.integers(256))
                case 1:
                    del body[place : place + int(rng.integers(1, 9))]
                case _:
                    body[place:place] = rng.bytes(int(rng.integers(1, 9)))
            if not body:
                break
        done += server.answer(bytes(body)).done

    assert done < 5000  # a number changed in place is still a request
    assert server.answer(bytes(good)).values == {"sum": 5}


def test_who_asks_too_often_is_told_so_and_others_are_served() -> None:
    limit = RateLimit(each_hz=5.0, all_hz=8.0)

    assert [limit.admits(b"a", 0.0) for _ in range(6)] == [True] * 5 + [False]
    assert limit.admits(b"b", 0.0)
    assert not limit.admits(b"a", 0.1)
    assert limit.admits(b"a", 1.2)
    assert sum(limit.admits(bytes([n]), 2.5) for n in range(100)) == 8  # a new name each time meets the common limit


def test_a_peer_at_its_limit_is_refused_in_words(server: ControlServer, dealer: zmq.Socket[bytes]) -> None:
    for _ in range(200):
        dealer.send(msgpack.packb(request()))
    replies = [msgpack.unpackb(dealer.recv()) for _ in range(200)]

    kinds = [reply["fault"]["kind"] for reply in replies if reply["fault"]]
    assert set(kinds) == {"too many"}
    assert len(kinds) == server.refused > 0


def test_the_client_raises_what_the_node_says_and_what_the_network_does(server: ControlServer) -> None:
    with NodeControl(server.address, timeout=20) as node:
        assert node.ask("add", left=40, right=2) == {"sum": 42}
        with pytest.raises(RefusedError, match="refuses add: not on a Friday") as refused:
            node.ask("add", left=1, right=13)
        assert refused.value.kind == "not now"
        assert node.ask("add", left=1) == {"sum": 2}
        reply = node.ask_reply("rest")
        assert reply.received_ns <= reply.sent_ns
    with NodeControl("tcp://127.0.0.1:1", timeout=0.2) as nobody, pytest.raises(NoReplyError, match="no reply to rest"):
        nobody.ask("rest")
    with pytest.raises(NodeError, match="expected an address such as"):
        NodeControl("7603")


class Running:
    """A node on the folder source, with control."""

    def __init__(self, config: Path) -> None:
        self.ready = threading.Event()
        self.stop = threading.Event()
        self.addresses: NodeAddresses | None = None
        self.thread = threading.Thread(
            target=run_node,
            args=(load_config(config, BUILT_IN), BUILT_IN, self.stop),
            kwargs={"log": LOG, "on_ready": self._on_ready},
        )
        self.thread.start()
        assert self.ready.wait(60)

    def _on_ready(self, addresses: NodeAddresses) -> None:
        self.addresses = addresses
        self.ready.set()

    @property
    def depth(self) -> str:
        assert self.addresses is not None
        return self.addresses.publisher.depth_address

    @property
    def control(self) -> str:
        assert self.addresses is not None
        assert self.addresses.control is not None
        return self.addresses.control.address


@pytest.fixture
def running(plane_bench: Any) -> Iterator[Running]:
    node = Running(plane_bench.write_config(source="rate_hz = 20\nloop = true"))
    yield node
    node.stop.set()
    node.thread.join(20)
    assert not node.thread.is_alive()


def test_a_node_pauses_goes_on_and_tells_when_either_makes_no_sense(running: Running) -> None:
    with NodeControl(running.control, timeout=30) as node, DepthSubscriber(running.depth, timeout=30) as depth:
        before = depth.latest(timeout=30).sequence
        node.ask("pause")
        with pytest.raises(RefusedError, match="paused already"):
            node.ask("pause")
        time.sleep(1.0)  # what was on its way
        last = node.ask("status")["published"]
        time.sleep(1.2)
        status = node.ask("status")
        assert status["paused"]
        assert status["published"] == last >= before
        assert status["cameras"]["a"]["state"] == "delivering"
        node.ask("resume")
        with pytest.raises(RefusedError, match="not paused"):
            node.ask("resume")
        # The newest pair of after the pause, not one from before it.
        resumed_ns = time.time_ns()
        frame = depth.latest(timeout=30)
        while frame.sequence < last:
            frame = depth.latest(timeout=30)
        assert frame.stamp_ns > resumed_ns - 500_000_000


def test_another_rig_makes_the_next_frames_and_a_bad_one_changes_nothing(running: Running, plane_bench: Any) -> None:
    rig = plane_bench.rig
    longer = Rig(a=rig.a, b=rig.b, R=rig.R, t=rig.t * 1.1)
    longer.save(plane_bench.folder / "longer.rig.json")
    text = (plane_bench.folder / "longer.rig.json").read_text()
    with NodeControl(running.control, timeout=60) as node, DepthSubscriber(running.depth, timeout=30) as depth:
        for bad, complaint in (
            ("{}", r"refuses rig: bad is no rig file"),
            (text[:200], "not whole JSON"),
            (json.dumps(json.loads(text) | {"scale_known": False}), "scale is not known"),
            (text.replace('"width": 320', '"width": 640'), "gives 640 x 240 pixels; expected 320 x 240"),
        ):
            with pytest.raises(RefusedError, match=complaint):
                node.ask("rig", text=bad, name="bad")
        old = depth.latest(timeout=30)
        assert old.fingerprint == rig.fingerprint
        assert node.ask("rig", text=text, name="longer")["rig"] == longer.fingerprint
        for frame in depth:
            if frame.fingerprint == longer.fingerprint:
                break
            assert frame.fingerprint == rig.fingerprint
    # Depth is proportional to the baseline.
    assert np.nanmedian(frame.depth) / np.nanmedian(old.depth) == pytest.approx(1.1, rel=0.005)


def test_a_node_without_a_place_to_record_says_so_and_stops_when_told(running: Running) -> None:
    with NodeControl(running.control, timeout=30) as node:
        with pytest.raises(RefusedError, match=r"expected a table \[record\]"):
            node.ask("record", on=True)
        node.ask("stop")
    running.thread.join(20)
    assert not running.thread.is_alive()
