"""``skewline pose`` for cameras that nobody calibrated: focal lengths guessed from what both see."""

from __future__ import annotations

import argparse
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..calib import CalibrationError
from ..calib.focal_guess import FocalGuess, guess_focal_lengths
from ..calib.matches import Matches

_SEED = 0


def add_options(parser: argparse.ArgumentParser) -> None:
    """Add the options of guessed intrinsics."""
    parser.add_argument(
        "--guess-focal",
        action="store_true",
        help="instead of --rig: guess both focal lengths from the matches; no lens distortion, the middle as principal point",
    )
    parser.add_argument(
        "--same-focal", action="store_true", help="with --guess-focal: both cameras have one focal length"
    )
    parser.add_argument(
        "--accept-guessed-intrinsics",
        action="store_true",
        help="with --guess-focal: let a length give metres, although the guess may be wrong by more than the length is",
    )


def refuse_unfit_options(arguments: argparse.Namespace) -> None:
    """Refuse both sources of intrinsics or none, and options that belong to the other one.

    Raises
    ------
    CalibrationError
    """
    if bool(arguments.rig) == arguments.guess_focal:
        given = "both" if arguments.rig else "neither"
        raise CalibrationError(
            f"{given} of --rig and --guess-focal given; expected one: an earlier rig's intrinsics, or guessed ones"
        )
    if arguments.guess_focal and arguments.keep_baseline:
        raise CalibrationError("--keep-baseline without --rig; expected a rig whose baseline to keep, or --baseline")
    for option in ("same_focal", "accept_guessed_intrinsics"):
        if getattr(arguments, option) and not arguments.guess_focal:
            raise CalibrationError(f"--{option.replace('_', '-')} without --guess-focal; expected both, or --rig alone")


@dataclass(frozen=True, eq=False, kw_only=True)
class GuessedIntrinsics:
    """A guess, and whether it may carry metres.

    Attributes
    ----------
    found : FocalGuess
    accepted : bool
    """

    found: FocalGuess
    accepted: bool

    @classmethod
    def of(
        cls, matches: Matches, size_a: tuple[int, int], size_b: tuple[int, int], *, same: bool, accepted: bool
    ) -> GuessedIntrinsics:
        """Guess both cameras: the same for the same matches."""
        found = guess_focal_lengths(matches, size_a, size_b, np.random.default_rng(_SEED), same=same)
        return cls(found=found, accepted=accepted)

    def warnings(self, *, length_given: bool) -> tuple[str, ...]:
        """Say what the guess is worth, and what became of the scale."""
        found = self.found
        words = [
            f"the intrinsics are guessed from the matches: focal lengths {found.focal_a_px:.1f} px (A) and "
            f"{found.focal_b_px:.1f} px (B) spread by {found.spread_a:.1%} and {found.spread_b:.1%} over {found.samples} "
            "bootstrap samples, and lens distortion is not in that: calibrate with a target before you measure"
        ]
        if self.accepted and length_given:
            words.append("metres rest on guessed intrinsics, as was asked for: check depth against something measured")
        elif length_given:
            words.append(
                "a length is given, yet the scale stays unknown, since wrong focal lengths bend depth in ways that no length "
                "mends: calibrate with a target, or say --accept-guessed-intrinsics"
            )
        return tuple(words)

    def figures(self) -> dict[str, Any]:
        """Give the guess as plain values."""
        names = ("focal_a_px", "focal_b_px", "spread_a", "spread_b", "samples")
        return {**{name: getattr(self.found, name) for name in names}, "accepted": self.accepted}

    def notes(self) -> dict[str, Any]:
        """Give what the rig file says of its intrinsics."""
        return {
            "intrinsics": "guessed from matches",
            "focal_spread_a": self.found.spread_a,
            "focal_spread_b": self.found.spread_b,
            "guess_accepted": self.accepted,
        }

    def print(self) -> None:
        """Print both focal lengths with their spread."""
        found = self.found
        print(
            f"focal lengths guessed from the matches, not calibrated (spread over {found.samples} bootstrap samples):"
        )
        for letter, focal, spread in (
            ("A", found.focal_a_px, found.spread_a),
            ("B", found.focal_b_px, found.spread_b),
        ):
            print(f"  camera {letter}: {focal:.1f} px +- {focal * spread:.1f} ({spread:.1%})")
