"""The exceptions of calibration.

``CalibrationError``
    anything that keeps a camera, a rig or a calibration from being made, read or used
    ├── ``RigFileError``: the file, not the caller, is at fault; a node keeps the rig it has
    ├── ``HistoryError``: the history of a rig cannot be read or written; the rig itself is as it was
    └── ``ImageFileError``: one image file is missing or unreadable; a node counts it and goes on
"""

from __future__ import annotations


class CalibrationError(ValueError):
    """A camera, rig or calibration cannot be what was asked; the message names the remedy."""


class RigFileError(CalibrationError):
    """A rig file is missing, cut short, edited or of another version."""


class HistoryError(CalibrationError):
    """The history of a rig is damaged, foreign, of another version, held by others or cannot be written."""


class ImageFileError(CalibrationError):
    """An image file is missing or unreadable; ``reason`` says which in two words, for counting."""

    def __init__(self, reason: str, message: str) -> None:
        super().__init__(message)
        self.reason = reason


class NoAlignedViewError(CalibrationError):
    """The cameras look along the line that joins them, so that no views exist in which places share a row."""
