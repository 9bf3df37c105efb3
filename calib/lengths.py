"""Lengths that are known in metres: from a line of text, or from an earlier rig."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

import numpy as np

from .errors import CalibrationError
from .rig import Rig

SHORTEST_M, LONGEST_M = 1e-3, 1e3
"""Lengths outside are slips of the unit; common sense, no source."""

_LEAST_SIGMA_M = 0.5e-3
_SIGMA_SHARE = 2e-3
"""Standard deviation of a length where none is given: 0.5 mm, or 0.2 % where that is more; common practice, no source."""

_MOST_SIGMA_SHARE = 1 / 3
"""Standard deviation over length above which a length tells nothing."""

_UNITS_M = {"mm": 1e-3, "cm": 1e-2, "m": 1.0}
_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:e[-+]?\d+)?"
_AMOUNT = rf"(?P<length>{_NUMBER})\s*(?P<unit>mm|cm|m)(?:\s+(?P<sigma>{_NUMBER})\s*(?P<sigma_unit>mm|cm|m))?"
_BETWEEN = re.compile(rf"(?P<first>\S+)\s+(?P<second>\S+)\s+{_AMOUNT}", re.IGNORECASE)
_ALONE = re.compile(_AMOUNT, re.IGNORECASE)


def usual_sigma_m(length_m: float) -> float:
    """Give the standard deviation, in metres, of a length measured by hand with care."""
    return max(_LEAST_SIGMA_M, _SIGMA_SHARE * length_m)


def checked_length(name: str, length_m: float, sigma_m: float) -> None:
    """Refuse a length that is none, or is known so badly that it tells nothing.

    Raises
    ------
    CalibrationError
    """
    if not (math.isfinite(length_m) and SHORTEST_M <= length_m <= LONGEST_M):
        raise CalibrationError(
            f"length {name} is {length_m:g} m; expected {SHORTEST_M:g} m to {LONGEST_M:g} m: check the number and its unit"
        )
    if not (math.isfinite(sigma_m) and 0 <= sigma_m <= _MOST_SIGMA_SHARE * length_m):
        raise CalibrationError(
            f"length {name} of {length_m:g} m has a standard deviation of {sigma_m:g} m; expected 0 to a third of the length: "
            "check the number and its unit, or measure it better"
        )


@dataclass(frozen=True, kw_only=True)
class KnownLength:
    """A length that is known in metres.

    Parameters
    ----------
    name : str
        What messages call it.
    length_m, sigma_m : float
        The length and its standard deviation, in metres; 0 where it counts as exact.
    between : (str, str) or None
        Labels of the two picked points that are so far apart; None for the baseline itself.

    Raises
    ------
    CalibrationError
        For a length under 1 mm or over 1 km, a standard deviation that is negative or above a third of it, or one label
        for both ends.
    """

    name: str
    length_m: float
    sigma_m: float
    between: tuple[str, str] | None = None

    def __post_init__(self) -> None:
        checked_length(self.name, self.length_m, self.sigma_m)
        if self.between is not None and self.between[0] == self.between[1]:
            raise CalibrationError(
                f"length {self.name} runs from {self.between[0]!r} to itself; expected the labels of two picked points"
            )


def parse_length(text: str) -> KnownLength:
    """Read the length between two picked points, such as ``P Q 250mm`` or, with its standard deviation, ``P Q 25cm 0.4mm``.

    Without one, the standard deviation is 0.5 mm, or 0.2 % of the length where that is more.

    Raises
    ------
    CalibrationError
        Where the text is no such line, or :class:`KnownLength` refuses what it says.
    """
    match = _BETWEEN.fullmatch(text.strip())
    if not match:
        raise CalibrationError(
            f"length is {text!r}; expected two labels and a length in mm, cm or m, such as 'P Q 250mm', then its standard "
            "deviation if you know it: 'P Q 250mm 0.5mm'"
        )
    first, second = match["first"], match["second"]
    length_m, sigma_m = _amount(match)
    return KnownLength(name=f"{first}-{second}", length_m=length_m, sigma_m=sigma_m, between=(first, second))


def parse_baseline(text: str) -> KnownLength:
    """Read the distance between both cameras' centres, such as ``193mm`` or ``193mm 0.2mm``.

    Raises
    ------
    CalibrationError
        As :func:`parse_length`.
    """
    match = _ALONE.fullmatch(text.strip())
    if not match:
        raise CalibrationError(
            f"baseline is {text!r}; expected a length in mm, cm or m, such as '193mm', then its standard deviation if you know "
            "it: '193mm 0.2mm'"
        )
    length_m, sigma_m = _amount(match)
    return KnownLength(name="baseline", length_m=length_m, sigma_m=sigma_m)


def parse_baseline_of(text: str) -> tuple[tuple[str, str] | None, KnownLength]:
    """Read the distance between the centres of two of several cameras, such as ``a c 193mm`` or ``a c 193mm 0.2mm``.

    Returns
    -------
    (str, str) or None
        The two cameras' names; None where the text has a length alone.
    KnownLength

    Raises
    ------
    CalibrationError
        Where the text is no such line, or :class:`KnownLength` refuses what it says.
    """
    if _ALONE.fullmatch(text.strip()):
        return None, parse_baseline(text)
    match = _BETWEEN.fullmatch(text.strip())
    if not match:
        raise CalibrationError(
            f"baseline is {text!r}; expected the names of two cameras and a length in mm, cm or m, such as 'a c 193mm', then "
            "its standard deviation if you know it: 'a c 193mm 0.2mm'"
        )
    first, second = match["first"], match["second"]
    length_m, sigma_m = _amount(match)
    return (first, second), KnownLength(name=f"baseline {first}-{second}", length_m=length_m, sigma_m=sigma_m)


def _amount(match: re.Match[str]) -> tuple[float, float]:
    length_m = float(match["length"]) * _UNITS_M[match["unit"].lower()]
    if match["sigma"] is None:
        return length_m, usual_sigma_m(length_m)
    return length_m, float(match["sigma"]) * _UNITS_M[match["sigma_unit"].lower()]


def kept_baseline(rig: Rig, source: str) -> KnownLength:
    """Keep the baseline of an earlier rig, with the standard deviation that its covariance says; 0 without covariance.

    Parameters
    ----------
    rig : Rig
    source : str
        Where it comes from, such as its file: for messages.

    Raises
    ------
    CalibrationError
        Where that rig's own scale is not known.
    """
    if not rig.scale_known:
        raise CalibrationError(
            f"the scale of {source} is not known, so its baseline is no length; expected a rig in metres: give a length that "
            "was measured"
        )
    sigma_m = 0.0
    if rig.covariance is not None:
        along = rig.t / rig.baseline_m
        sigma_m = float(np.sqrt(np.maximum(along @ rig.covariance[3:, 3:] @ along, 0.0)))
    return KnownLength(name=f"baseline of {source}", length_m=rig.baseline_m, sigma_m=sigma_m)
