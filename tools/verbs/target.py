"""``skewline target``: print a calibration target to scale as PDF or SVG."""

from __future__ import annotations

import argparse
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from ...calib import CalibrationError
from ...calib.drawing import to_pdf, to_svg
from ...calib.print_target import PrintedBoard, lay_out, parse_paper
from ...calib.rig import write_atomically
from ...calib.targets import parse_target

_DESCRIPTION = "Draw a calibration target to scale as vector PDF or SVG, with a ruler."

_EXAMPLE = """\
example: a ChArUco board of 7x5 squares of 30 mm with markers of 22 mm, on A4

  skewline target "charuco 7x5 30mm 22mm DICT_5X5_100" --paper A4 -o board.pdf

Print it at 100 %: not fitted to the page. Then measure the ruler and the board both ways. If they are not what is
printed beside the ruler, print again or name the target by the size that you measured.

targets, each also from a .toml file:

  chessboard 9x6 30mm                   inner corners along and across, edge of a square
  charuco 7x5 40mm 30mm DICT_5X5_100    squares along and across, edges of a square and a marker, OpenCV's dictionary;
                                        add "from 17" to start at marker 17
  circles 7x6 20mm                      circles along and across, from one's middle to the next
  asymmetric-circles 4x11 20mm          circles in a row, rows, from one row to the next (half the distance of
                                        neighbours in a row)

Several boards joined by " + " get a page each in a PDF, and in SVG a file each: board-1.svg, board-2.svg, ...

exit status: 0 when the file was written, 2 for bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    parser.add_argument("target", metavar="TARGET", help='such as "chessboard 9x6 30mm", or a .toml file')
    parser.add_argument("-o", "--output", required=True, type=Path, metavar="FILE", help="a .pdf or .svg file")
    parser.add_argument(
        "--paper",
        metavar="PAPER",
        help="A5 to A0, Letter, Legal, Tabloid or a size such as 210x297mm (the smallest of A4 to A0 that will do)",
    )
    parser.add_argument("--landscape", action="store_true", help="turn the paper, even where the board fits upright")
    parser.add_argument("--json", action="store_true", help="print the sizes as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Lay out and write; nothing is written unless every board fits."""
    target = parse_target(arguments.target)
    paper = None if arguments.paper is None else parse_paper(arguments.paper)
    printed = [lay_out(board, paper, landscape=arguments.landscape) for board in target.boards]
    files = _files(printed, arguments.output)
    for file, data in dict(files).items():
        _write(file, data)
    names = [file for file, _ in files]
    if arguments.json:
        print(json.dumps({"target": str(target), "boards": _sizes(printed, names)}, indent=2))
    else:
        _print(printed, names)
    return 0


def _files(printed: Sequence[PrintedBoard], output: Path) -> list[tuple[Path, bytes]]:
    """Give for each board the file it goes into and all that the file will hold."""
    match output.suffix.lower():
        case ".pdf":
            return [(output, to_pdf([board.page for board in printed]))] * len(printed)
        case ".svg" if len(printed) == 1:
            return [(output, to_svg(printed[0].page))]
        case ".svg":
            names = [output.with_stem(f"{output.stem}-{i}") for i in range(1, len(printed) + 1)]
            return [(name, to_svg(board.page)) for name, board in zip(names, printed, strict=True)]
    raise CalibrationError(f"output is {str(output)!r}; expected a name that ends in .pdf or .svg")


def _write(file: Path, data: bytes) -> None:
    try:
        write_atomically(file, data)
    except OSError as exc:
        raise CalibrationError(f"cannot write {file}: {exc.strerror}; expected a folder that can be written") from exc


def _sizes(printed: Sequence[PrintedBoard], files: Sequence[Path]) -> list[dict[str, Any]]:
    return [
        {
            "board": str(item.board),
            "file": str(file),
            "paper": str(item.paper),
            "paper_mm": [item.paper.width, item.paper.height],
            "board_mm": [round(item.width, 6), round(item.height, 6)],
        }
        for item, file in zip(printed, files, strict=True)
    ]


def _print(printed: Sequence[PrintedBoard], files: Sequence[Path]) -> None:
    for item, file in zip(printed, files, strict=True):
        print(f"{file}: {item.board}, {item.width:g} x {item.height:g} mm, on {item.paper}")
    print("print at 100 % (not fitted to the page), then measure the ruler and the board both ways")
