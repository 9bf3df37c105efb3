"""The exceptions of calibration.

``CalibrationError``
    anything that keeps a camera, a rig or a calibration from being made, read or used
    └── ``RigFileError``: the file, not the caller, is at fault; a node keeps the rig it has
"""

from __future__ import annotations


class CalibrationError(ValueError):
    """A camera, rig or calibration cannot be what was asked; the message names the remedy."""


class RigFileError(CalibrationError):
    """A rig file is missing, cut short, edited or of another version."""
