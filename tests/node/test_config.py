"""The configuration file: what is accepted, and refusals that name the key's path, the value and what is allowed."""

from pathlib import Path
from typing import Any

import pytest
from skewline.node import ConfigError
from skewline.node.config import MatchConfig, NodeConfig, PublishConfig, load_config, parse_config
from skewline.node.match import MatchSettings
from skewline.node.sources import BUILT_IN, FolderSettings
from skewline.node.wire import Packing

MINIMAL = """
rig = "bench.rig.json"
[volume]
near_m = 0.45
far_m = 1
[source]
kind = "folder"
a = "a*.png"
b = ["b1.png", "b2.png"]
"""


def load(tmp_path: Path, text: str) -> NodeConfig:
    path = tmp_path / "node.toml"
    path.write_text(text, encoding="utf-8")
    return load_config(path, BUILT_IN)


def table(**changes: Any) -> dict[str, Any]:
    """Give a good content in which whole tables are replaced."""
    return {
        "rig": "r.json",
        "volume": {"near_m": 0.4, "far_m": 1.2},
        "source": {"kind": "folder", "a": "a*", "b": "b*"},
        **changes,
    }


def test_a_minimal_file_gives_values_defaults_and_paths_from_its_own_folder(tmp_path: Path) -> None:
    config = load(tmp_path, MINIMAL)

    assert config.rig == tmp_path / "bench.rig.json"
    assert config.sources.base == tmp_path
    assert (config.volume.near_m, config.volume.far_m) == (0.45, 1.0)
    (choice,) = config.sources.choices
    assert (choice.kind, choice.cameras) == ("folder", ("a", "b"))
    assert choice.settings == FolderSettings(a="a*.png", b=["b1.png", "b2.png"], rate_hz=None, loop=False)
    assert config.match == MatchConfig(matcher="block", resolution=1.0)
    assert config.publish == PublishConfig(depth="tcp://127.0.0.1:7601", status="tcp://127.0.0.1:7602")


def test_the_matcher_s_settings_and_the_wire_s_packing_come_out_as_their_own_values(tmp_path: Path) -> None:
    text = MINIMAL + '[match]\nmatcher = "semiglobal"\nspeckle_px = 50\n[publish]\npixels = "float32"\n'

    config = load(tmp_path, text)

    assert config.match.settings == MatchSettings(matcher="semiglobal", speckle_px=50)
    assert config.publish.packing == Packing(pixels="float32")
    assert MatchConfig().settings == MatchSettings()


def test_a_rig_elsewhere_is_found_by_its_absolute_path(tmp_path: Path) -> None:
    assert load(tmp_path, MINIMAL.replace("bench.rig.json", "/rigs/x.json")).rig == Path("/rigs/x.json")


def test_values_cannot_be_changed_later(tmp_path: Path) -> None:
    with pytest.raises(AttributeError, match="immutable type: 'VolumeConfig'"):
        load(tmp_path, MINIMAL).volume.near_m = 2.0  # type: ignore[misc]


@pytest.mark.parametrize(
    ("changes", "complaint"),
    [
        ({"volum": {}}, r"volum \(a table\) is no key of the top level; .*; did you mean volume\?"),
        ({"rig": 3}, r"rig is 3; expected the path of a rig file"),
        ({"rig": ""}, r"rig is ''; expected the path of a rig file"),
        ({"volume": 3}, r"volume is 3; expected a table"),
        ({"volume": {"far_m": 1}}, r"volume\.near_m is missing; expected a number above 0 and at most 1000"),
        ({"volume": {"near_m": -0.1, "far_m": 1}}, r"volume\.near_m is -0\.1; expected a number above 0"),
        ({"volume": {"near_m": "x", "far_m": 1}}, r"volume\.near_m is 'x'; expected a number above 0"),
        ({"volume": {"near_m": True, "far_m": 1}}, r"volume\.near_m is True; expected a number above 0"),
        ({"volume": {"near_m": float("nan"), "far_m": 1}}, r"volume\.near_m is nan; expected a number"),
        ({"volume": {"near_m": 0.5, "far_m": float("inf")}}, r"volume\.far_m is inf; expected a number"),
        (
            {"volume": {"near_m": 1.2, "far_m": 1.2}},
            r"near_m is 1\.2 and volume\.far_m is 1\.2; expected near_m < far_m",
        ),
        ({"volume": {"near_m": 2, "far_m": 1}}, r"near_m is 2 and volume\.far_m is 1; expected near_m < far_m"),
        (
            {"volume": {"naer_m": 0.4, "far_m": 1}},
            r"volume\.naer_m \(0\.4\) is no key of \[volume\]; expected one of far_m, near_m; did you mean near_m\?",
        ),
        ({"source": {"a": "x"}}, r'source\.kind is missing; expected one of "folder"'),
        ({"source": {"kind": "cam"}}, r"source\.kind is 'cam'; expected one of \"folder\""),
        ({"source": {"kind": ["x"]}}, r"source\.kind is \['x'\]; expected one of"),
        ({"source": {"kind": "folder", "a": "x"}}, r"source\.b is missing; expected text or a list"),
        (
            {"source": {"kind": "folder", "a": "x", "b": ["y", 5]}},
            r"source\.b\[1\] is 5; expected text or a list \(text each, one or more\)",
        ),
        ({"source": {"kind": "folder", "a": "x", "b": []}}, r"source\.b is \[\]; expected .* one or more"),
        (
            {"source": {"kind": "folder", "a": "x", "b": "y", "rate_hz": 0}},
            r"source\.rate_hz is 0; expected a number above 0 and at most 1000",
        ),
        (
            {"source": {"kind": "folder", "a": "x", "b": "y", "lop": True}},
            r"source\.lop \(True\) is no key of \[source\]; expected one of a, b, kind, loop, rate_hz; did you mean loop",
        ),
        ({"match": {"matcher": "magic"}}, r"match\.matcher is 'magic'; expected one of \"block\", \"semiglobal\""),
        ({"match": {"resolution": 1.5}}, r"match\.resolution is 1\.5; expected a number above 0 and at most 1$"),
        ({"match": {"block_px": 8}}, r"match\.block_px is 8; expected an odd number"),
        ({"match": {"uniqueness_percent": 1.5}}, r"uniqueness_percent is 1\.5; expected a whole number at least 0"),
        ({"publish": {"depth": "7601"}}, r"publish\.depth is '7601'; expected an address such as \"tcp://"),
        ({"publish": {"depth": "tcp://h/x:1"}}, r"publish\.depth is 'tcp://h/x:1'; expected an address"),
        ({"publish": {"pixels": "uint8"}}, r"publish\.pixels is 'uint8'; expected one of \"float32\", \"uint16\""),
        ({"publish": {"picture": "yes"}}, r"publish\.picture is 'yes'; expected true or false"),
        ({"publish": {"status": "tcp://127.0.0.1:7601"}}, r"are both tcp://127\.0\.0\.1:7601; expected two addresses"),
        (
            {"publish": {"depth_unit_m": 1e-5}},
            r"far_m is 1\.2, beyond the 0\.65535 m .* depth_unit_m of 1\.9e-05 or more",
        ),
    ],
)
def test_a_bad_value_is_refused_with_path_value_and_what_is_allowed(changes: dict[str, Any], complaint: str) -> None:
    with pytest.raises(ConfigError, match=complaint):
        parse_config(table(**changes), BUILT_IN, Path())


def test_float32_pixels_lift_the_limit_on_far() -> None:
    config = parse_config(table(volume={"near_m": 1, "far_m": 20}, publish={"pixels": "float32"}), BUILT_IN, Path())

    assert config.volume.far_m == 20


def test_control_may_be_turned_off_and_its_port_is_free_then() -> None:
    quiet = {"on": False, "address": "tcp://127.0.0.1:7601"}

    assert not parse_config(table(control=quiet), BUILT_IN, Path()).control.on
    with pytest.raises(ConfigError, match=r"publish\.depth and control\.address are both tcp://127\.0\.0\.1:7601"):
        parse_config(table(control=quiet | {"on": True}), BUILT_IN, Path())


@pytest.mark.parametrize("key", ["rig", "volume", "source"])
def test_a_missing_key_of_the_top_level_is_named(key: str) -> None:
    content = table()
    del content[key]

    with pytest.raises(ConfigError, match=f"^{key} is missing; expected"):
        parse_config(content, BUILT_IN, Path())


def test_a_file_that_is_missing_or_no_toml_is_named_with_the_line(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"cannot read .*gone\.toml: No such file"):
        load_config(tmp_path / "gone.toml", BUILT_IN)
    with pytest.raises(ConfigError, match=r"node\.toml is no TOML file: .*line 2"):
        load(tmp_path, 'rig = "x"\nvolume = ]\n')
    (tmp_path / "binary.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(ConfigError, match=r"binary\.toml is no TOML file"):
        load_config(tmp_path / "binary.toml", BUILT_IN)


def test_a_refusal_begins_with_the_file_s_name(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"node\.toml: volume\.near_m is 0; "):
        load(tmp_path, MINIMAL.replace("0.45", "0"))
