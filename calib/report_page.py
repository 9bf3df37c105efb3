"""The parts of a report's page: one HTML file that needs nothing beside it, without scripts or outside files."""

from __future__ import annotations

import html
import math
import os
from collections.abc import Iterable, Sequence
from pathlib import Path

from .errors import CalibrationError
from .report_style import STYLE
from .rig import write_atomically

MARKS = {"good": "&#10003;", "doubtful": "!", "not usable": "&#10007;"}


def page(title: str, facts: Sequence[str], sections: Iterable[str]) -> str:
    """Write the whole page."""
    return "\n".join(
        [
            '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">',
            '<meta name="viewport" content="width=device-width, initial-scale=1">',
            f"<title>{html.escape(title)}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n<main>",
            f'<header><h1>{html.escape(title)}</h1><p class="facts">{html.escape(" · ".join(facts))}</p></header>',
            *sections,
            "</main>\n</body>\n</html>\n",
        ]
    )


def write_page(path: str | os.PathLike[str], text: str) -> None:
    """Write a page to a file; a reader sees the file that was there before or the new one, never a part.

    Raises
    ------
    CalibrationError
        Where the file cannot be written.
    """
    target = Path(path)
    try:
        write_atomically(target, text.encode())
    except OSError as exc:
        raise CalibrationError(f"cannot write report {target}: {exc}; expected a folder that can be written") from exc


def section(name: str, title: str, body: str) -> str:
    """Write a section under a heading; the body is HTML."""
    return f'<section id="{name}">\n<h2>{html.escape(title)}</h2>\n{body}\n</section>'


def paragraph(text: str, kind: str = "") -> str:
    """Write plain text as a paragraph, of a class of the style where one is named."""
    return f"<p{f' class={chr(34)}{kind}{chr(34)}' if kind else ''}>{html.escape(text)}</p>"


def table(head: Sequence[str], body: Iterable[Sequence[str]]) -> str:
    """Write a table whose first column names the row; it scrolls by itself on a narrow screen."""
    top = "".join(f'<th scope="col">{html.escape(cell)}</th>' for cell in head)
    lines = "".join(
        f'<tr><th scope="row">{html.escape(row[0])}</th>'
        + "".join(f"<td>{html.escape(cell)}</td>" for cell in row[1:])
        + "</tr>"
        for row in body
    )
    return f'<div class="scroll"><table><thead><tr>{top}</tr></thead><tbody>{lines}</tbody></table></div>'


def plot(picture: str, caption: str) -> str:
    """Write a picture, which is SVG, over its caption, which is plain text."""
    return f"<figure>{picture}<figcaption>{html.escape(caption)}</figcaption></figure>"


def verdict_section(grade: str, headline: str, body: str) -> str:
    """Write the section that answers whether the rig may be used; the body is HTML."""
    return (
        f'<section id="verdict" class="{grade.replace(" ", "-")}">\n'
        f'<h2><span class="mark" aria-hidden="true">{MARKS[grade]}</span> '
        f"{html.escape(headline)}</h2>\n{body}\n</section>"
    )


def with_sigma(value: float, sigma: float | None, unit: str, digits: int = 3) -> str:
    """Write a figure with its standard deviation, or say that it has none."""
    if not sigma:
        return f"{value:.{digits}f} {unit} ({'held' if sigma == 0 else 'sigma not known'})"
    return f"{value:.{digits}f} ± {sigma:.{digits}f} {unit}"


def px(value: float | None) -> str:
    """Write pixels."""
    return "not known" if value is None else f"{value:.3f} px"


def mm(metres: float) -> str:
    """Write metres as millimetres."""
    return f"{metres * 1e3:.2f} mm" if math.isfinite(metres) else "not known"
