"""Printed pages, rendered by other people's renderers and found again by our own detectors."""

import re
from typing import Any
from xml.etree import ElementTree

import cv2
import numpy as np
import pypdfium2
import pytest
import resvg_py
from skewline.calib import CalibrationError
from skewline.calib.drawing import Label, outline_of_cells, to_pdf, to_svg
from skewline.calib.print_target import PrintedBoard, lay_out, parse_paper
from skewline.calib.targets import Charuco, MeasuredBoard, parse_target

DPI = 200
SHEETS = [
    ("chessboard 9x6 18mm", "A4"),
    ("chessboard 9x6 30mm", "A3"),
    ("charuco 7x5 30mm 22mm DICT_5X5_100", "A4"),
    ("charuco 5x7 32mm 23mm DICT_4X4_50 from 20", "Letter"),
    ("charuco 9x6 25.4mm 19mm DICT_6X6_250", "300x250mm"),
    ("circles 7x6 20mm", "Letter"),
    ("circles 9x7 33.3mm", "A3"),
    ("asymmetric-circles 4x11 15mm", "A4"),
    ("asymmetric-circles 5x8 12.5mm", "180x260mm"),
]


def printed(text: str, paper: str | None = None, *, landscape: bool = False) -> PrintedBoard:
    (board,) = parse_target(text).boards
    return lay_out(board, None if paper is None else parse_paper(paper), landscape=landscape)


def render_pdf(data: bytes, number: int = 0) -> Any:
    with pypdfium2.PdfDocument(data) as document:
        return document[number].render(scale=DPI / 72, grayscale=True).to_numpy().copy()


def render_svg(data: bytes) -> Any:
    picture = bytes(resvg_py.svg_to_bytes(svg_string=data.decode(), dpi=DPI))
    return cv2.imdecode(np.frombuffer(picture, np.uint8), cv2.IMREAD_GRAYSCALE)


def largest_scale_error(sheet: PrintedBoard, image: Any) -> float:
    """Compare all distances between points on the page with the board's, as shares."""
    # A desk round the page, so that no detector leans on the picture's edge.
    seen = sheet.board.find(cv2.copyMakeBorder(image, 80, 80, 80, 80, cv2.BORDER_CONSTANT, value=90))
    assert seen is not None
    assert len(seen) == len(sheet.board.points)
    first, second = np.triu_indices(len(seen), 1)
    mm = np.linalg.norm(seen.pixels[first] - seen.pixels[second], axis=1) * 25.4 / DPI
    true = np.linalg.norm(sheet.board.points[seen.ids][first] - sheet.board.points[seen.ids][second], axis=1) * 1e3
    return float(np.abs(mm / true - 1).max())


@pytest.mark.parametrize(("text", "paper"), SHEETS)
def test_a_rendered_pdf_shows_the_target_with_every_distance_right_to_a_thousandth(text: str, paper: str) -> None:
    sheet = printed(text, paper)
    data = to_pdf([sheet.page])

    assert largest_scale_error(sheet, render_pdf(data)) < 1e-3
    with pypdfium2.PdfDocument(data) as document:
        size_mm = np.array(document[0].get_size()) * 25.4 / 72  # a PDF measures in points of 1/72 inch
    assert size_mm == pytest.approx([sheet.paper.width, sheet.paper.height], abs=0.01)


@pytest.mark.parametrize(("text", "paper"), SHEETS)
def test_a_rendered_svg_shows_the_target_with_every_distance_right_to_a_thousandth(text: str, paper: str) -> None:
    sheet = printed(text, paper)

    assert largest_scale_error(sheet, render_svg(to_svg(sheet.page))) < 1e-3


def test_pages_are_vectors_and_ask_to_be_printed_at_their_size() -> None:
    sheet = printed("charuco 7x5 30mm 22mm DICT_5X5_100")
    data = to_pdf([sheet.page])

    assert b"/Subtype /Image" not in data
    assert b"/PrintScaling /None" in data
    assert to_pdf([sheet.page]) == data, "the same page gives the same bytes"
    tags = {element.tag.partition("}")[2] for element in ElementTree.fromstring(to_svg(sheet.page)).iter()}  # noqa: S314
    assert tags == {"svg", "title", "rect", "path", "line", "text"}


def test_markers_are_drawn_without_hairlines_as_opencv_draws_them() -> None:
    sheet = printed("charuco 7x5 30mm 22mm DICT_5X5_100", "A4")
    assert isinstance(sheet.board, Charuco)
    image = render_pdf(to_pdf([sheet.page]))
    # The first marker lies in the second square; odd resolutions put its cells' edges between pixels.
    outline = sheet.page.shapes[1]
    corners = np.concatenate([np.array(loop) for loop in outline.loops])  # type: ignore[union-attr]
    (left, top), cell = corners.min(axis=0), 22 / 7
    dark = sheet.board.marker_cells(0)
    for row in range(7):
        for column in range(6):
            if dark[row, column] and dark[row, column + 1]:
                y = round((top + (row + 0.5) * cell) * DPI / 25.4)
                x = np.array([left + (column + 0.5) * cell, left + (column + 1.5) * cell]) * DPI / 25.4
                assert image[y, round(x[0]) : round(x[1])].max() == 0


def test_the_ruler_is_as_long_as_it_says_and_the_note_names_what_to_measure() -> None:
    root = ElementTree.fromstring(to_svg(printed("chessboard 9x6 18mm", "A4").page))  # noqa: S314
    lines = [element for element in root if element.tag.endswith("line")]
    upright = sorted(float(line.attrib["x1"]) for line in lines if line.attrib["x1"] == line.attrib["x2"])
    words = " ".join(element.text or "" for element in root if element.tag.endswith("text"))

    assert np.diff(upright) == pytest.approx(5.0)
    assert upright[-1] - upright[0] == pytest.approx(100)
    for part in ("chessboard 9x6 18mm", "100 mm", "at 100 %", "10 squares 180 mm", "7 squares the other way 126 mm"):
        assert part in words


@pytest.mark.parametrize(("text", "paper"), [*SHEETS, ("circles 3x3 10mm", "80x85mm")])
def test_nothing_is_drawn_off_the_page_and_the_text_leaves_the_board_alone(text: str, paper: str) -> None:
    sheet = printed(text, paper)
    image = render_svg(to_svg(sheet.page))
    margin = round(6 / 25.4 * DPI)

    inner = image[margin:-margin, margin:-margin]
    assert image.min() == 0
    assert inner.min() == 0
    framed = image.copy()
    framed[margin:-margin, margin:-margin] = 255
    assert framed.min() == 255
    assert all(label.size >= 1 for label in sheet.page.shapes if isinstance(label, Label))


def test_the_smallest_paper_is_taken_and_turned_where_that_helps() -> None:
    assert str(printed("chessboard 9x6 18mm").paper) == "A4"
    assert str(printed("chessboard 9x6 30mm").paper) == "A3 landscape"
    assert str(printed("circles 7x6 20mm", "A4", landscape=True).paper) == "A4 landscape"
    assert printed("chessboard 9x6 30mm", "420 x 297mm".replace(" ", "")).page.width == 420


@pytest.mark.parametrize(
    ("text", "paper", "match"),
    [
        (
            "chessboard 9x6 30mm",
            "A4",
            r'330 x 274 mm .* A4 \(210 x 297 mm\) .* paper A3 landscape or "chessboard 9x6 22mm"',
        ),
        (
            "charuco 7x5 50mm 40mm DICT_5X5_100",
            "Letter",
            r'paper A2.* or "charuco 7x5 32.5mm 26mm DICT_5X5_100" at most',
        ),
        ("circles 7x6 500mm", None, r'A0 is too small: expected "circles 7x6 \S+mm" at most'),
        ("asymmetric-circles 4x11 15mm", "A5", r'paper A4 or "asymmetric-circles 4x11 [\d.]+mm" at most'),
    ],
)
def test_a_target_too_large_for_its_paper_is_refused_with_what_would_do(text: str, paper: str, match: str) -> None:
    with pytest.raises(CalibrationError, match=match) as caught:
        printed(text, paper)

    # What the message proposes does fit, and half a millimetre more does not.
    proposed = re.findall(r'"([^"]+)" at most', str(caught.value))[0]
    assert printed(proposed, paper)


def test_what_should_not_be_printed_is_refused() -> None:
    with pytest.raises(CalibrationError, match=r"too little white .* expected 0\.833 or less .* markers of 33\.3 mm"):
        printed("charuco 7x5 40mm 34mm DICT_5X5_100")
    (board,) = parse_target("chessboard 9x6 20mm").boards
    with pytest.raises(CalibrationError, match=r"cannot be printed: its points were measured on the one that there is"):
        lay_out(MeasuredBoard(board=board, points=board.points))


@pytest.mark.parametrize("text", ["", "A7", "210x297", "0x297mm", "210x99999mm"])
def test_a_paper_that_is_none_is_refused_with_those_there_are(text: str) -> None:
    with pytest.raises(CalibrationError, match=r"expected one of A5, A4, .* Letter, .* size such as 210x297mm"):
        parse_paper(text)


def test_an_outline_fills_just_the_dark_cells() -> None:
    rng = np.random.default_rng(2)
    for _ in range(20):
        cells = rng.random((6, 8)) < 0.5
        loops = [np.array(loop) for loop in outline_of_cells(cells, 1, 2, 3).loops]
        drawn = np.zeros((6, 8), int)
        for row, column in np.ndindex(drawn.shape):
            middle = (1 + 3 * (column + 0.5), 2 + 3 * (row + 0.5))
            inside = [cv2.pointPolygonTest(loop.astype(np.float32), middle, measureDist=False) > 0 for loop in loops]
            drawn[row, column] = sum(inside) % 2

        assert np.array_equal(drawn == 1, cells)
