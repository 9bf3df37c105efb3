"""``skewline target`` as a person meets it."""

import json
import os
from pathlib import Path
from typing import Any

import pypdfium2
import pytest
from skewline.tools.cli import main


def test_a_pdf_is_written_and_its_sizes_said(tmp_path: Path, capsys: Any) -> None:
    assert main(["target", "chessboard 9x6 30mm", "-o", str(tmp_path / "board.pdf")]) == 0

    said = capsys.readouterr().out
    assert "300 x 210 mm, on A3 landscape" in said
    assert "print at 100 %" in said
    assert os.listdir(tmp_path) == ["board.pdf"]
    with pypdfium2.PdfDocument(tmp_path / "board.pdf") as document:
        assert len(document) == 1
        assert "chessboard 9x6 30mm" in document[0].get_textpage().get_text_range()


def test_sizes_come_as_json(tmp_path: Path, capsys: Any) -> None:
    path = tmp_path / "board.svg"
    assert main(["target", "charuco 7x5 30mm 22mm DICT_5X5_100", "--paper", "A4", "-o", str(path), "--json"]) == 0

    content = json.loads(capsys.readouterr().out)
    (board,) = content["boards"]
    assert content["target"] == board["board"] == "charuco 7x5 30mm 22mm DICT_5X5_100"
    assert (board["file"], board["paper"]) == (str(path), "A4 landscape")
    assert (board["paper_mm"], board["board_mm"]) == ([297, 210], [210, 150])
    assert path.read_bytes().startswith(b"<?xml")


def test_several_boards_get_a_page_each_or_a_file_each(tmp_path: Path) -> None:
    text = "charuco 7x5 30mm 22mm DICT_5X5_100 + charuco 7x5 30mm 22mm DICT_5X5_100 from 17"
    assert main(["target", text, "-o", str(tmp_path / "boards.pdf")]) == 0
    assert main(["target", text, "-o", str(tmp_path / "boards.svg")]) == 0

    assert sorted(os.listdir(tmp_path)) == ["boards-1.svg", "boards-2.svg", "boards.pdf"]
    with pypdfium2.PdfDocument(tmp_path / "boards.pdf") as document:
        assert len(document) == 2
    assert (tmp_path / "boards-1.svg").read_bytes() != (tmp_path / "boards-2.svg").read_bytes()


def test_a_target_file_is_printed_as_its_text_is(tmp_path: Path) -> None:
    (tmp_path / "b.toml").write_text('[[board]]\nkind = "circles"\ncolumns = 7\nrows = 6\nspacing_mm = 20\n')
    assert main(["target", str(tmp_path / "b.toml"), "-o", str(tmp_path / "file.svg")]) == 0
    assert main(["target", "circles 7x6 20mm", "-o", str(tmp_path / "text.svg")]) == 0

    assert (tmp_path / "file.svg").read_bytes() == (tmp_path / "text.svg").read_bytes()


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (["chessboard 9x6 30mm", "--paper", "A4"], "expected paper A3 landscape"),
        (["chessboard 9x6 30mm", "--paper", "B7"], "paper is 'B7'; expected one of"),
        (["dotted thing"], 'such as "chessboard 9x6 30mm"'),
        (["none.toml"], "cannot read none.toml"),
        (["charuco 7x5 40mm 34mm DICT_5X5_100"], "too little white"),
    ],
)
def test_bad_input_ends_with_status_2_and_leaves_what_was_there(
    words: list[str], complaint: str, tmp_path: Path, capsys: Any
) -> None:
    kept = tmp_path / "board.pdf"
    kept.write_text("good")

    assert main(["target", *words, "-o", str(kept)]) == 2

    said = capsys.readouterr().err
    assert complaint in said
    assert "Traceback" not in said
    assert kept.read_text() == "good"
    assert os.listdir(tmp_path) == ["board.pdf"]


@pytest.mark.parametrize(
    ("name", "complaint"), [("board.png", "ends in .pdf or .svg"), ("no/board.pdf", "expected a folder that can be")]
)
def test_an_output_that_cannot_be_is_refused(name: str, complaint: str, tmp_path: Path, capsys: Any) -> None:
    assert main(["target", "chessboard 9x6 30mm", "-o", str(tmp_path / name)]) == 2
    assert complaint in capsys.readouterr().err
    assert os.listdir(tmp_path) == []
