"""What was found in an image is remembered by the image's content."""

from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from skewline.calib import CalibrationError, ImageFileError
from skewline.calib.chessboard import Chessboard
from skewline.calib.targets import Target, parse_target
from skewline.tools.sighting_cache import SightingCache, default_folder, look_at_all

DATA = Path(__file__).parent.parent / "data" / "chessboard-pairs"
TARGET = parse_target("chessboard 9x6 30mm")


@pytest.fixture
def finds(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """Count how often a board is looked for."""
    calls: list[int] = []
    find = Chessboard.find

    def counted(self: Chessboard, image: Any) -> Any:
        calls.append(1)
        return find(self, image)

    monkeypatch.setattr(Chessboard, "find", counted)
    return calls


def test_a_second_look_gives_the_same_without_looking(tmp_path: Path, finds: list[int]) -> None:
    file = DATA / "left01.jpg"

    first = SightingCache(TARGET, tmp_path / "cache").look(file)
    second = SightingCache(TARGET, tmp_path / "cache").look(file)

    assert len(finds) == 1
    assert first.size == second.size == (640, 480)
    assert first.seen[0] is not None
    assert second.seen[0] is not None
    assert np.array_equal(first.seen[0].pixels, second.seen[0].pixels)
    assert np.array_equal(first.seen[0].ids, second.seen[0].ids)
    assert first.remarks == second.remarks == ((),)


def test_what_was_not_found_is_remembered_too_with_its_reason(tmp_path: Path, finds: list[int]) -> None:
    file = tmp_path / "blank.png"
    cv2.imwrite(str(file), np.full((480, 640), 128, np.uint8))
    cache = SightingCache(TARGET, tmp_path / "cache")

    looks = [cache.look(file) for _ in range(2)]

    assert len(finds) == 1
    assert [look.seen for look in looks] == [(None,), (None,)]
    assert looks[0].remarks == looks[1].remarks
    assert "grey levels in the whole picture" in looks[1].remarks[0][0]


def test_content_counts_not_names_and_another_target_or_picture_is_looked_at_anew(
    tmp_path: Path, finds: list[int]
) -> None:
    copy = tmp_path / "other-name.jpg"
    copy.write_bytes((DATA / "left01.jpg").read_bytes())
    SightingCache(TARGET, tmp_path / "cache").look(DATA / "left01.jpg")

    assert SightingCache(TARGET, tmp_path / "cache").look(copy).file == copy
    assert len(finds) == 1
    SightingCache(TARGET, tmp_path / "cache").look(DATA / "left02.jpg")
    SightingCache(parse_target("chessboard 9x6 25mm"), tmp_path / "cache").look(copy)
    assert len(finds) == 3


def test_a_damaged_entry_is_made_anew(tmp_path: Path, finds: list[int]) -> None:
    cache = SightingCache(TARGET, tmp_path / "cache")
    good = cache.look(DATA / "left01.jpg")
    (entry,) = (tmp_path / "cache").iterdir()
    whole = entry.read_bytes()

    for damaged in (b"", b"no archive", whole[:200], whole[: len(whole) // 2]):
        entry.write_bytes(damaged)
        again = cache.look(DATA / "left01.jpg")
        assert again.seen[0] is not None
        assert good.seen[0] is not None
        assert np.array_equal(again.seen[0].pixels, good.seen[0].pixels)
        assert entry.read_bytes() == whole
    assert len(finds) == 5


def test_without_a_folder_nothing_is_kept(tmp_path: Path, finds: list[int]) -> None:
    cache = SightingCache(TARGET, None)

    for _ in range(2):
        cache.look(DATA / "left01.jpg")
    assert len(finds) == 2


def test_all_files_are_looked_at_in_order_and_counted(tmp_path: Path) -> None:
    files, counted = sorted(DATA.glob("left0*.jpg")), list[tuple[int, int]]()

    looks = look_at_all(
        SightingCache(TARGET, tmp_path), files, progress=lambda done, total: counted.append((done, total))
    )

    assert [look.file for look in looks] == files
    assert counted == [(number, len(files)) for number in range(1, len(files) + 1)]


def test_a_picture_that_is_to_be_turned_is_refused_with_the_remedy(tmp_path: Path) -> None:
    jpeg = (DATA / "left01.jpg").read_bytes()
    # An Exif segment with orientation 6 (CIPA DC-008, Exif 2.3): turn by 90 degrees to show.
    tiff = b"II*\0\x08\0\0\0\x01\0\x12\x01\x03\0\x01\0\0\0\x06\0\0\0\0\0\0\0"
    segment = b"Exif\0\0" + tiff
    file = tmp_path / "turned.jpg"
    file.write_bytes(jpeg[:2] + b"\xff\xe1" + (len(segment) + 2).to_bytes(2, "big") + segment + jpeg[2:])

    with pytest.raises(CalibrationError, match=r"Exif orientation 6.*switch the camera's rotation off"):
        SightingCache(TARGET, None).look(file)


def test_a_file_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    with pytest.raises(ImageFileError, match=r"gone\.png is gone"):
        SightingCache(TARGET, tmp_path).look(tmp_path / "gone.png")


def test_a_folder_that_cannot_be_written_is_said_to_be(tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("a file")

    with pytest.raises(CalibrationError, match="expected a folder that can be written"):
        SightingCache(TARGET, tmp_path / "taken" / "cache").look(DATA / "left01.jpg")


def test_the_folder_is_where_the_system_says(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))

    assert default_folder() == tmp_path / "skewline" / "sightings"
    assert (
        SightingCache(Target((Chessboard(columns=9, rows=6, square_m=0.03),)), default_folder())
        .look(DATA / "left01.jpg")
        .seen[0]
    )
