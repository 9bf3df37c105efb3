"""``skewline history`` as a person meets it."""

import csv
import io
import json
import sys
import xml.etree.ElementTree as ET
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from drifting_rigs import drifted
from read_only import read_only_folder
from skewline.calib import Rig
from skewline.calib.compare import compare_rigs
from skewline.calib.history import Kind, Remark, append, history_path, read_events
from skewline.calib.rig_swap import replace_rig
from skewline.tools.cli import main
from skewline.tools.history_plot import drift

DAY_NS = 86_400 * 10**9
START_NS = 1_780_000_000 * 10**9  # 2026-05-28T20:26:40Z


def history(*words: object) -> int:
    return main(["history", *map(str, words)])


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """Make a rig file with a month of history: two rigs in force, one refused, one only checked."""
    path = tmp_path / "bench.rig.json"
    replace_rig(path, drifted(0), Remark(time_ns=START_NS, operator="kim", note="commissioning"))
    replace_rig(path, drifted(3), Remark(time_ns=START_NS + 7 * DAY_NS, figures={"epipolar_px": 0.25}))
    append(
        history_path(path),
        Kind.REFUSED,
        drifted(90),
        Remark(time_ns=START_NS + 14 * DAY_NS, note="[red] hand, in view"),
    )
    append(history_path(path), Kind.CHECKED, drifted(5), Remark(time_ns=START_NS + 21 * DAY_NS))
    return path


def test_all_events_are_listed_newest_last(path: Path, capsys: Any) -> None:
    assert history(path) == 0
    out = capsys.readouterr().out
    lines = [line for line in out.splitlines() if "2026-" in line]
    assert [line.split()[0] for line in lines] == ["1", "2", "3", "4", "5", "6"]
    assert "2026-05-28 20:26" in lines[0]
    assert "swapped in (1)" in lines[1]
    assert "kim" in lines[1]
    assert "epipolar 0.25 px" in out
    assert "[red]" in out, "brackets in a note are no markup"
    assert drifted(90).fingerprint[:8] in lines[4]

    assert history(path, "--json") == 0
    told = json.loads(capsys.readouterr().out)
    assert told["rig_file"] == "in history"
    assert [event["kind"] for event in told["events"]] == [
        *["swapping in", "swapped in"] * 2,
        "refused",
        "checked",
    ]
    assert told["events"][3]["figures"] == {"epipolar_px": 0.25}
    assert told["events"][0]["time_utc"] == "2026-05-28T20:26:40Z"


def test_without_a_history_it_says_how_to_begin_one(tmp_path: Path, capsys: Any) -> None:
    path = tmp_path / "bench.rig.json"
    assert history(path) == 2
    assert "neither" in capsys.readouterr().err

    drifted(0).save(path)
    assert history(path) == 1
    assert f"begin one with: skewline history {path} --adopt" in capsys.readouterr().err
    for words in (["--compare", "1", "2"], ["--roll-back"], ["--plot", tmp_path / "x.svg"]):
        assert history(path, *words) == 2
        assert "there is no history" in capsys.readouterr().err
    assert [file.name for file in tmp_path.iterdir()] == [path.name]

    assert history(path, "--adopt", "--operator", "kim") == 0
    assert history(path, "--adopt") == 1
    assert "in force by the history already" in capsys.readouterr().err
    (event,) = read_events(history_path(path))
    assert (event.kind, event.operator) == (Kind.ADOPTED, "kim")


def test_a_rig_edited_by_hand_is_told_and_adopted_on_request(path: Path, capsys: Any) -> None:
    content = json.loads(path.read_text())
    content["t"][0] += 1e-3
    path.write_text(json.dumps(content))
    assert history(path) == 1
    assert "is not in the history: somebody edited or exchanged the file" in capsys.readouterr().err
    assert history(path, "--note", "why?") == 2
    assert "--adopt" in capsys.readouterr().err

    assert history(path, "--adopt", "--note", "measured again") == 0
    assert history(path) == 0
    assert read_events(history_path(path))[-1].note == "measured again"


def test_a_missing_or_cut_rig_file_is_told_and_brought_back(path: Path, capsys: Any) -> None:
    for spoil in (Path.unlink, lambda file: file.write_text(drifted(3).to_text()[:100])):
        spoil(path)
        assert history(path) == 1
        assert "--roll-back" in capsys.readouterr().err
        assert history(path, "--roll-back") == 0
        assert f"rig {drifted(3).fingerprint[:12]} is back in force" in capsys.readouterr().out
        assert Rig.load(path).fingerprint == drifted(3).fingerprint


def test_rolling_back_names_the_rig_the_person_and_the_reason(path: Path, capsys: Any) -> None:
    assert history(path, "--roll-back", "--note", "arm hit the bracket", "--operator", "ada", "--json") == 0
    told = json.loads(capsys.readouterr().out)
    assert (told["kind"], told["fingerprint"]) == ("rolled back", drifted(0).fingerprint)
    assert (told["note"], told["operator"]) == ("arm hit the bracket", "ada")
    assert history(path, "--roll-back", drifted(5).fingerprint[:8]) == 0
    assert Rig.load(path).fingerprint == drifted(5).fingerprint
    assert history(path, "--roll-back", "77") == 2
    assert "'77' is in no event" in capsys.readouterr().err


def test_two_rigs_are_set_side_by_side(path: Path, capsys: Any) -> None:
    # From event 1 to 4 camera B turned by 0.03 degrees about its own y axis, and nothing else.
    assert history(path, "--compare", 1, 4, "--distance", 0.8, "--json") == 0
    told = json.loads(capsys.readouterr().out)
    assert told["pose"]["rotation_deg"] == pytest.approx(0.03)
    turns = [told["pose"][name] for name in ("yaw_deg", "pitch_deg", "roll_deg")]
    assert np.linalg.norm(turns) == pytest.approx(0.03, rel=1e-3)
    assert told["pose"]["direction_deg"] == pytest.approx(0, abs=1e-6)
    assert told["pose"]["baseline_mm"] == pytest.approx(0, abs=1e-9)
    assert {row["change"] for row in told["intrinsics"].values()} == {0.0}
    expected = compare_rigs(drifted(0), drifted(3), distance_m=0.8)
    assert told["depth"]["depth_shifts"][0]["centre_mm"] == expected.at_distance.centre_mm

    assert history(path, "--compare", 1, 4, "--distance", 0.8) == 0
    out = capsys.readouterr().out
    assert "turn of camera B   0.0300 degrees, sigma not known" in out
    assert expected.sentence in out


def test_the_export_is_csv_by_rfc_4180(path: Path, tmp_path: Path) -> None:
    note = 'B "straightened",\nthen checked'
    append(history_path(path), Kind.NOTED, drifted(3), Remark(note=note))
    file = tmp_path / "events.csv"
    assert history(path, "--export", file) == 0
    # RFC 4180, section 2: lines end in CRLF (1), a header (3), as many fields in each (4), and fields with quotes, commas
    # or line breaks stand in quotes (6), with each quote doubled (7).
    content = file.read_bytes().decode()
    assert content.endswith("\r\n")
    assert '"B ""straightened"",\nthen checked"' in content
    rows = list(csv.reader(io.StringIO(content, newline=""), strict=True))
    assert {len(row) for row in rows} == {len(rows[0])}
    told = [dict(zip(rows[0], row, strict=True)) for row in rows[1:]]
    assert [row["kind"] for row in told] == [str(event.kind) for event in read_events(history_path(path))]
    assert told[-1]["note"] == note
    assert told[0]["time_ns"] == str(START_NS)
    assert [row["epipolar_px"] for row in told] == ["", "", "0.25", "0.25", "", "", ""]


def test_drift_is_told_once_for_each_rig_with_its_last_verdict(path: Path) -> None:
    points = drift(read_events(history_path(path)), "first")
    assert [point.verdict for point in points] == ["accepted or in force"] * 2 + ["refused", "neither yet"]
    assert [point.change.rotation_deg for point in points] == pytest.approx([0, 0.03, 0.9, 0.05], abs=1e-6)
    assert [(point.time_ns - START_NS) / DAY_NS for point in points] == [0, 7, 14, 21]
    since = drift(read_events(history_path(path)), "accepted")
    assert [point.is_origin for point in since] == [False, True, False, False]
    assert [point.change.rotation_deg for point in since] == pytest.approx([0.03, 0, 0.87, 0.02], abs=1e-6)


def test_the_picture_of_drift_tells_verdicts_by_shape(path: Path, tmp_path: Path) -> None:
    assert history(path, "--plot", tmp_path / "drift.svg") == 0
    assert history(path, "--plot", tmp_path / "drift.png", "--against", "accepted") == 0
    root = ET.fromstring((tmp_path / "drift.svg").read_text())  # noqa: S314 - our own file
    svg, link = "{http://www.w3.org/2000/svg}", "{http://www.w3.org/1999/xlink}href"
    shapes = {f"#{mark.attrib['id']}": mark.get("d", "") for mark in root.iter(f"{svg}path") if mark.get("id")}
    drawn = {
        (use.attrib["style"].partition(";")[0], shapes[use.attrib[link]])
        for use in root.iter(f"{svg}use")
        if use.get("style", "").startswith("fill") and shapes[use.attrib[link]].endswith("z ")  # not the ends of bars
    }
    assert sorted(fill for fill, _ in drawn) == ["fill: #0072b2", "fill: #d55e00", "fill: #ffffff"]
    assert len({shape for _, shape in drawn}) == 3
    picture = cv2.imread(str(tmp_path / "drift.png"))
    assert picture is not None
    assert picture.shape[1] > 900
    colours = {tuple(int(part) for part in colour) for colour in np.unique(picture.reshape(-1, 3), axis=0)}
    assert {(0xB2, 0x72, 0x00), (0x00, 0x5E, 0xD5)} <= colours, "blue and orange, as OpenCV orders them"


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["--plot", "drift.pdf"], "expected a name that ends in .svg or .png"),
        (["--plot", "no/folder/drift.png"], "expected a folder that can be written"),
        (["--export", "no/folder/x.csv"], "expected a folder that can be written"),
        (["--export", "bench.rig.json"], "is the rig file or its history"),
        (["--export", "bench.history.sqlite"], "is the rig file or its history"),
        (["--compare", "1", "99"], "'99' is in no event of the history; expected a number up to 6"),
        (["--distance", "0.8"], "without --compare"),
        (["--note", " "], "--note is empty"),
        (["--note", "x", "--export", "x.csv"], "--note stands beside"),
    ],
)
def test_what_cannot_be_done_is_refused_with_the_remedy(
    path: Path, words: list[str], message: str, capsys: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(path.parent)
    before = {file: file.read_bytes() for file in path.parent.iterdir()}
    assert history(path, *words) == 2
    assert message in capsys.readouterr().err
    assert {file: file.read_bytes() for file in path.parent.iterdir()} == before


def test_a_history_of_one_rig_is_drawn_too(tmp_path: Path) -> None:
    replace_rig(tmp_path / "bench.rig.json", drifted(0))
    assert history(tmp_path / "bench.rig.json", "--plot", tmp_path / "drift.png") == 0
    assert cv2.imread(str(tmp_path / "drift.png")) is not None


def test_without_matplotlib_the_plot_says_what_to_install(
    path: Path, tmp_path: Path, capsys: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    assert history(path, "--plot", tmp_path / "drift.svg") == 2
    assert 'pip install "skewline[report]"' in capsys.readouterr().err


def test_a_damaged_history_is_refused_and_stays(path: Path, capsys: Any) -> None:
    history_path(path).write_bytes(b"no database at all" * 100)
    for words in ([], ["--roll-back"], ["--adopt"], ["--note", "x"]):
        assert history(path, *words) == 2
        assert "is damaged or none at all" in capsys.readouterr().err
    assert history_path(path).read_bytes() == b"no database at all" * 100


def test_a_history_that_cannot_be_written_is_listed_and_nothing_else(capsys: Any) -> None:
    def fill(folder: Path) -> None:
        for step in range(2):
            replace_rig(folder / "bench.rig.json", drifted(step))

    with read_only_folder(fill) as folder:
        assert history(folder / "bench.rig.json") == 0
        assert "swapped in (1)" in capsys.readouterr().out
        for words in (["--note", "x"], ["--roll-back", "1"]):
            assert history(folder / "bench.rig.json", *words) == 2
            assert "expected a folder and a file in it that can be written" in capsys.readouterr().err


def test_a_note_is_kept_with_the_rig_in_force(path: Path, tmp_path: Path) -> None:
    elsewhere = tmp_path / "copy.sqlite"
    elsewhere.write_bytes(history_path(path).read_bytes())  # one file is the whole history
    assert history(path, "--note", "wiped both lenses", "--history", elsewhere) == 0
    event = read_events(elsewhere)[-1]
    assert (event.kind, event.fingerprint, event.note) == (Kind.NOTED, drifted(3).fingerprint, "wiped both lenses")
    assert len(read_events(history_path(path))) == 6
