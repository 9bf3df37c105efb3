"""``skewline keys`` as a person meets it, and the keys that ``skewline listen`` takes."""

import json
import stat
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from skewline.node import DepthFrame
from skewline.node.access import AccessConfig, AccessPolicy
from skewline.node.gatekeeper import Gatekeeper
from skewline.node.keys import read_secret
from skewline.node.publisher import Publisher
from skewline.tools.cli import main

ANY = "tcp://127.0.0.1:0"


def keys(*words: object) -> int:
    return main(["keys", *map(str, words)])


def test_a_pair_is_made_and_shown_without_its_secret(tmp_path: Path, capsys: Any) -> None:
    assert keys("new", "arm-3", "-o", tmp_path, "--comment", "third arm") == 0
    made = capsys.readouterr().out
    secret, public = tmp_path / "arm-3.secret.key", tmp_path / "arm-3.public.key"
    assert {path.name for path in tmp_path.iterdir()} == {secret.name, public.name}
    assert stat.S_IMODE(secret.stat().st_mode) == 0o600

    shown = {}
    for path in (secret, public):
        assert keys("show", path, "--json") == 0
        shown[path] = json.loads(capsys.readouterr().out)
        assert keys("show", path) == 0
        text = capsys.readouterr().out
        assert shown[path]["public_key"] in text
        assert shown[path]["fingerprint"] in text
        assert shown[path]["fingerprint"] in made
        assert read_secret(secret).z85 not in text + made + json.dumps(shown[path])
    assert (shown[secret].pop("kind"), shown[public].pop("kind")) == ("secret", "public")
    assert shown[secret].pop("file") != shown[public].pop("file")
    assert shown[secret] == shown[public]
    assert shown[public]["comment"] == "third arm"


def test_a_pair_is_not_made_over_another(tmp_path: Path, capsys: Any) -> None:
    assert keys("new", "arm-3", "-o", tmp_path) == 0
    before = {path: path.read_bytes() for path in tmp_path.iterdir()}

    assert keys("new", "arm-3", "-o", tmp_path) == 2
    assert "is there already and stays as it is" in capsys.readouterr().err
    assert {path: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_allowing_and_revoking_say_what_they_did(tmp_path: Path, capsys: Any) -> None:
    folder = tmp_path / "allowed"
    keys("new", "arm-3", "-o", tmp_path, "--json")
    made = json.loads(capsys.readouterr().out)
    assert keys("allow", folder, made["public_file"]) == 2
    assert "make it with mkdir" in capsys.readouterr().err
    folder.mkdir()

    assert keys("allow", folder, made["public_file"], "--json") == 0
    allowed = json.loads(capsys.readouterr().out)
    assert allowed["allowed_file"] == str(folder / "arm-3.public.key")
    assert allowed["fingerprint"] == made["fingerprint"]
    assert keys("allow", folder, made["secret_file"]) == 2
    assert "hand the secret one to nobody" in capsys.readouterr().err
    assert keys("revoke", folder, "arm-3") == 0
    assert capsys.readouterr().out == f"{folder / 'arm-3.public.key'}: revoked\n"
    assert keys("revoke", folder, "arm-3") == 1
    assert "arm-3 was not allowed" in capsys.readouterr().err
    assert list(folder.iterdir()) == []


@contextmanager
def publishing(policy: AccessPolicy) -> Iterator[str]:
    depth = np.full((4, 4), 0.8, dtype=np.float32)
    frame = DepthFrame(depth=depth, sigma=depth / 800, K=np.eye(3), T_a_view=np.eye(4), near_m=0.45, far_m=1.2)
    with Gatekeeper(policy) as keeper, Publisher(ANY, ANY, keeper=keeper) as publisher:
        done = threading.Event()

        def work() -> None:
            while not done.is_set():
                publisher.send_depth(frame)
                time.sleep(0.01)

        thread = threading.Thread(target=work)
        thread.start()
        try:
            yield publisher.depth_address
        finally:
            done.set()
            thread.join()


def test_the_worked_example_lets_listen_in_and_out_again(
    tmp_path: Path, capsys: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    for name in ("keys", "allowed"):
        Path(name).mkdir()
    assert keys("new", "bench-node", "-o", "keys") == 0
    assert keys("new", "arm-3", "-o", ".") == 0
    policy = AccessPolicy.from_config(AccessConfig(key="keys/bench-node.secret.key", allowed="allowed"), tmp_path)
    options = ["--key", "arm-3.secret.key", "--node-key", "keys/bench-node.public.key", "--count", "1", "--json"]
    with publishing(policy) as address:
        assert main(["listen", address, *options]) == 2
        assert "does not let in this program's key" in capsys.readouterr().err
        assert keys("allow", "allowed", "arm-3.public.key") == 0
        capsys.readouterr()
        assert main(["listen", address, "--timeout", "20", *options]) == 0
        assert json.loads(capsys.readouterr().out)["median_depth_m"] == pytest.approx(0.8)
        assert keys("revoke", "allowed", "arm-3") == 0
        assert main(["listen", address, *options]) == 2


@pytest.mark.parametrize(("given", "missing"), [("--key", "--node-key"), ("--node-key", "--key")])
def test_listen_takes_both_keys_or_neither(given: str, missing: str, capsys: Any) -> None:
    assert main(["listen", "tcp://127.0.0.1:1", given, "some.key"]) == 2
    assert f"{given} is given without {missing}" in capsys.readouterr().err
