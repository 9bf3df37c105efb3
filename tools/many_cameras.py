"""More than two cameras for ``skewline pose``: from arguments to the file of cameras and the rigs of chosen pairs."""

from __future__ import annotations

import argparse
import datetime
import json
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from numpy.typing import NDArray

from ..calib import CalibrationError, Rig
from ..calib.camera_poses import CameraPoses, refuse_bad_names
from ..calib.from_many import FEWEST, MOST, poses_from_many
from ..calib.images import read_image
from ..calib.lengths import KnownLength, kept_baseline, parse_baseline_of
from ..calib.views import PairBy, group_files
from .given_cameras import MORE_LETTERS, GivenCamera, given_cameras
from .many_text import many_figures, print_many, warnings_of_many
from .pose_text import BASE_FRAME_KEPT
from .progress import Progress

_EXACT_SIGMA_M = 1e-6
"""Standard deviation of a baseline that counts as exact: far below what any pose can tell."""

_FOR_TWO = (
    "matches",
    "only_picked",
    "length",
    "target",
    "show",
    "report",
    "guess_focal",
    "same_focal",
    "accept_guessed_intrinsics",
)
"""Options that only two cameras have."""


@dataclass(frozen=True)
class PairRig:
    """Two cameras whose rig is wanted as a file of its own."""

    first: str
    other: str
    path: Path


Baselines = dict[tuple[str, str], KnownLength]


def add_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that more than two cameras have beside those that name them."""
    parser.add_argument(
        "--pair-rig",
        action="append",
        default=[],
        metavar="TEXT",
        help='of more than two cameras, save these two as a rig: "a c FILE"; may be repeated',
    )


def run_many(arguments: argparse.Namespace) -> int:
    """Solve and save; nothing is written unless all was solved."""
    _refuse_options_for_two(arguments)
    known = _known_rig(arguments)
    given = given_cameras(arguments, known)
    names = _names(given)
    wanted = [_pair_rig(text, names) for text in arguments.pair_rig]
    _refuse_unfit_files([arguments.output, *(pair.path for pair in wanted)])
    baselines = _baselines(arguments, names, known)
    with Progress() as progress:
        poses = poses_from_many(
            {one.name: one.camera for one in given},
            _read_sets(given, arguments.pair_by),
            known={pair: length.length_m for pair, length in baselines.items()},
            known_sigma_m={pair: max(length.sigma_m, _EXACT_SIGMA_M) for pair, length in baselines.items()},
            polished=not arguments.no_polish,
            progress=progress,
        )
    scale_from = [length.name for length in baselines.values()]
    rigs = [(pair.path, _rig(poses, pair, known, scale_from)) for pair in wanted]
    warnings = list(warnings_of_many(poses))
    if any(rig.T_base_a is not None for _, rig in rigs):
        warnings.append(BASE_FRAME_KEPT)
    poses.save(arguments.output)
    for path, rig in rigs:
        rig.save(path)
    saved = [str(path) for path in (arguments.output, *(path for path, _ in rigs))]
    if arguments.json:
        print(json.dumps({**many_figures(poses, warnings), "scale_from": scale_from, "saved": saved}, indent=2))
        return 0
    print_many(poses, warnings)
    for name in saved:
        print(f"saved {name}")
    return 0


def _refuse_options_for_two(arguments: argparse.Namespace) -> None:
    for option in _FOR_TWO:
        if getattr(arguments, option):
            raise CalibrationError(
                f"--{option.replace('_', '-')} with more than two cameras; expected it with two alone: leave it out, or solve "
                "those two by themselves"
            )


def _known_rig(arguments: argparse.Namespace) -> Rig | None:
    """Load the rig of A and B; None where a file names all cameras."""
    if arguments.cameras is None:
        for option in ("rig", "a", "b"):
            if not getattr(arguments, option):
                raise CalibrationError(f"further cameras without --{option}; expected --rig, --a and --b, or --cameras")
        return Rig.load(arguments.rig)
    more = (option for letter in MORE_LETTERS for option in (letter, f"camera_{letter}"))
    for option in ("rig", "keep_baseline", "a", "b", *more):
        if getattr(arguments, option):
            raise CalibrationError(
                f"--{option.replace('_', '-')} beside --cameras; expected one or the other, since that file names all cameras"
            )
    return None


def _names(given: Sequence[GivenCamera]) -> list[str]:
    names = [one.name for one in given]
    refuse_bad_names(names)
    if not FEWEST <= len(names) <= MOST:
        raise CalibrationError(
            f"{len(names)} cameras; expected {FEWEST} to {MOST}: two are solved with --rig, --a and --b alone"
        )
    return names


def _pair_rig(text: str, names: Sequence[str]) -> PairRig:
    parts = text.split(maxsplit=2)
    if len(parts) != 3:
        raise CalibrationError(f"--pair-rig is {text!r}; expected two cameras and a file, such as 'a c ac.rig.json'")
    first, other, file = parts
    _refuse_unknown((first, other), names, f"--pair-rig {text!r}")
    return PairRig(first, other, Path(file))


def _refuse_unknown(pair: tuple[str, str], names: Sequence[str], what: str) -> None:
    if len(set(pair)) != 2 or not set(pair) <= set(names):
        raise CalibrationError(
            f"{what} is of {pair[0]} and {pair[1]}; expected two different ones of {', '.join(names)}"
        )


def _refuse_unfit_files(files: Sequence[Path]) -> None:
    """Refuse, before the long work, files that cannot all be written."""
    places = [file.resolve() for file in files]
    for number, place in enumerate(places):
        if place in places[:number]:
            raise CalibrationError(
                f"{files[number]} is to be written twice; expected a file of its own for each result"
            )
        if not place.parent.is_dir():
            raise CalibrationError(f"{files[number]} lies in no folder that there is; expected one: make it first")


def _baselines(arguments: argparse.Namespace, names: Sequence[str], known: Rig | None) -> Baselines:
    """Give the known baselines by the names of their cameras: those measured, and that of the rig if it is kept."""
    told = [parse_baseline_of(text) for text in arguments.baseline]
    if arguments.keep_baseline and known is not None:
        told.append((None, kept_baseline(known, arguments.rig.name)))
    found: Baselines = {}
    for named, length in told:
        pair = named or (names[0], names[1])
        _refuse_unknown(pair, names, length.name)
        if pair in found or pair[::-1] in found:
            raise CalibrationError(
                f"the baseline of {pair[0]} and {pair[1]} is given twice; expected each once: leave one out"
            )
        found[pair] = length
    return found


def _read_sets(given: Sequence[GivenCamera], by: PairBy) -> list[dict[str, NDArray[Any]]]:
    groups = group_files({one.name: one.files for one in given}, by)
    return [{name: read_image(file) for name, file in group.items()} for group in groups]


def _rig(poses: CameraPoses, pair: PairRig, known: Rig | None, scale_from: Sequence[str]) -> Rig:
    """Give two of the cameras as a rig that says where it comes from; A's place in the base frame stays A's."""
    edge = next((one for one in poses.edges if {one.first, one.other} == {pair.first, pair.other}), None)
    notes: dict[str, Any] = {
        "made": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "pose_from": f"scene, together with {len(poses.names) - 2} more cameras",
        "cameras": [pair.first, pair.other],
        "points": 0 if edge is None else edge.matches,
        "noise_px": None if edge is None else edge.noise_px,
        "scale_from": list(scale_from),
        "warnings": list(poses.remarks),
    }
    rig = replace(poses.rig(pair.first, pair.other), notes=notes)
    return replace(rig, T_base_a=known.T_base_a) if known is not None and pair.first == poses.names[0] else rig
