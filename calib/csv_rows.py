"""CSV files that people write by hand or save from a spreadsheet: their rows, with the lines they stand in."""

from __future__ import annotations

import csv
from pathlib import Path

from .errors import CalibrationError


def read_rows(path: Path, content: str) -> tuple[tuple[str, ...], list[tuple[int, list[str]]]]:
    """Read a CSV file in UTF-8, with or without byte order mark; spaces around cells and empty lines do not count.

    Parameters
    ----------
    path : Path
    content : str
        What the file should hold, for messages.

    Returns
    -------
    header : tuple of str
        The cells of the first line, in small letters; empty where the file is.
    rows : list of (int, list of str)
        The line in the file, from 1, and the cells of each further row.

    Raises
    ------
    CalibrationError
        Where the file cannot be read, is no text in UTF-8 or no CSV.
    """
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except OSError as exc:
        raise CalibrationError(f"cannot read {path}: {exc.strerror}; expected a CSV file of {content}") from exc
    except UnicodeDecodeError as exc:
        raise CalibrationError(
            f"{path} is no text in UTF-8; expected a CSV file of {content}: save it as such"
        ) from exc
    reader = csv.reader(lines, skipinitialspace=True, strict=True)
    try:
        rows = [(reader.line_num, [cell.strip() for cell in cells]) for cells in reader]
    except csv.Error as exc:
        raise CalibrationError(
            f"{path}, line {reader.line_num}: {exc}; expected a CSV file of {content}: close each double quote"
        ) from exc
    rows = [(line, cells) for line, cells in rows if any(cells)]
    header = tuple(cell.lower() for cell in rows[0][1]) if rows else ()
    return header, rows[1:]
