"""``skewline pose``: R and t between two cameras from what they see, without a target."""

from __future__ import annotations

import argparse
import json
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from ...calib import CalibrationError, Rig
from ...calib.from_scene import Progress as Told
from ...calib.from_scene import ScenePose, find_all_matches, pose_from_scene
from ...calib.images import find_images, grey_8_bit, read_image
from ...calib.known_board import KnownBoard, known_board
from ...calib.lengths import KnownLength, kept_baseline, parse_baseline, parse_length
from ...calib.matches import Matches
from ...calib.picks import read_picks
from ...calib.polish import ImagePair
from ...calib.rig import write_atomically
from ...calib.scale import Scaled, scale_pose
from ...calib.targets import parse_target
from ...calib.views import PairBy, pair_files
from .. import given_cameras, guessed_intrinsics, many_cameras
from ..guessed_intrinsics import GuessedIntrinsics
from ..pose_text import pose_figures, pose_notes, print_pose, warnings_of
from ..progress import Progress

_DESCRIPTION = "Solve where camera B, and others, stand relative to A from pictures of any scene, and save them."

_EXAMPLE = """\
example: ten pairs of the parts on the bench; the intrinsics are those of an earlier rig, and so is the length of the
baseline, since the bracket is rigid

  skewline pose --rig bench.rig.json --a 'shift/a*.png' --b 'shift/b*.png' --keep-baseline -o bench-now.rig.json

or with points picked by hand in the first pair, two of which (P and Q) lie 250 mm apart:

  skewline pose --rig bench.rig.json --a a.png --b b.png --matches picks.csv --length "P Q 250mm" -o bench-now.rig.json

or a third camera beside those of the rig; b and c are saved as a rig too:

  skewline pose --rig bench.rig.json --a 'a*.png' --b 'b*.png' --c 'c*.png' --camera-c side.rig.json:b \\
      --baseline "a c 412mm" -o bench.cameras.json --pair-rig "b c side-now.rig.json"

or two cameras of one kind that nobody calibrated; a guess, with a scale that stays unknown:

  skewline pose --guess-focal --same-focal --a a.png --b b.png -o guess.rig.json

More pairs give a better pose: let the scene change between them, with texture at near and far distance all over both
pictures. Without a length the rig is saved, but it says that its scale is not known, and no depth in metres comes of it.

exit status: 0 when all was saved, 2 for bad input or a scene that cannot give the pose
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    files = "pictures of camera {}: names or a quoted pattern"
    parser.add_argument("--rig", type=Path, metavar="RIG", help="take both cameras' intrinsics from this rig")
    guessed_intrinsics.add_options(parser)
    parser.add_argument("--a", nargs="+", metavar="FILE", help=files.format("A"))
    parser.add_argument("--b", nargs="+", metavar="FILE", help=files.format("B"))
    given_cameras.add_options(parser)
    parser.add_argument(
        "-o",
        "--output",
        required=True,
        type=Path,
        metavar="FILE",
        help="where to save the rig, or more than two cameras",
    )
    many_cameras.add_options(parser)
    parser.add_argument(
        "--pair-by", choices=("order", "number"), default="order", help="how A's pictures meet B's (order)"
    )
    parser.add_argument(
        "--matches", type=Path, metavar="CSV", help="points picked in the first pair: ax,ay,bx,by or ax,ay,bx,by,label"
    )
    parser.add_argument("--only-picked", action="store_true", help="use the picked points alone; look for no others")
    parser.add_argument(
        "--length",
        action="append",
        default=[],
        metavar="TEXT",
        help='a length between two labelled points, as "P Q 250mm" or "P Q 250mm 0.5mm" with its deviation; may be repeated',
    )
    parser.add_argument(
        "--baseline",
        action="append",
        default=[],
        metavar="TEXT",
        help='the measured baseline, as "193mm" or "193mm 0.5mm"; of more than two cameras as "a c 193mm", may be repeated',
    )
    parser.add_argument("--keep-baseline", action="store_true", help="keep the baseline of A and B in --rig")
    parser.add_argument(
        "--target", metavar="TEXT", help="a target of known size, seen in pairs, to take the scale from"
    )
    parser.add_argument("--no-polish", action="store_true", help="stop at the features; match no further places")
    parser.add_argument(
        "--show", type=Path, metavar="PNG", help="draw the matches, those that count and those rejected"
    )
    parser.add_argument(
        "--report",
        type=Path,
        metavar="HTML",
        help="write a report: what the pose does to depth, and the pictures that say why",
    )
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Solve and save; nothing is written unless all went well."""
    if given_cameras.more_than_two(arguments):
        return many_cameras.run_many(arguments)
    _refuse_unfit_options(arguments)
    known = Rig.load(arguments.rig) if arguments.rig else None
    lengths = _lengths(arguments, known)
    pairs = _read_pairs(arguments.a, arguments.b, arguments.pair_by)
    picks = _picks(arguments, known, pairs)
    with Progress() as progress:
        pose, guess = _solve(arguments, known, pairs, picks, progress)
    length_given = bool(lengths or arguments.target)
    to_scale = length_given and (guess is None or guess.accepted)
    scaled = _scaled(pose, lengths, arguments.target, pairs) if to_scale else None
    notes, warnings = pose_notes(pose, scaled, len(pairs)), warnings_of(pose, scaled, known, length_given=length_given)
    if guess is not None:
        of_guess = guess.warnings(length_given=length_given)
        notes |= {**guess.notes(), "warnings": [*of_guess, *pose.remarks]}
        warnings = (*of_guess, *warnings)
    rig = pose.rig if scaled is None else scaled.rig
    rig = replace(rig, T_base_a=None if known is None else known.T_base_a, notes=notes)
    rig.save(arguments.output)
    if arguments.show:
        _show(arguments.show, pairs, pose)
    if arguments.report:
        _report(arguments.report, rig, pose, pairs, scaled, known, warnings)
    if arguments.json:
        figures = {} if guess is None else {"guess": guess.figures()}
        figures |= pose_figures(rig, pose, scaled, known, warnings)
        print(json.dumps({**figures, "saved": str(arguments.output)}, indent=2))
        return 0
    if guess is not None:
        guess.print()
    print_pose(rig, pose, scaled, known, len(pairs), warnings)
    print(f"saved {arguments.output}, rig {rig.fingerprint[:12]}")
    if arguments.report:
        print(f"report: {arguments.report}")
    return 0


def _refuse_unfit_options(arguments: argparse.Namespace) -> None:
    if not (arguments.a and arguments.b):
        raise CalibrationError("pictures of one camera or none; expected --a and --b, or --cameras with a file of them")
    if arguments.pair_rig:
        raise CalibrationError("--pair-rig with two cameras; expected it with more of them: -o is where their rig goes")
    guessed_intrinsics.refuse_unfit_options(arguments)


def _solve(
    arguments: argparse.Namespace,
    known: Rig | None,
    pairs: Sequence[ImagePair],
    picks: Matches | None,
    progress: Told,
) -> tuple[ScenePose, GuessedIntrinsics | None]:
    """Solve the pose of the cameras known, or of cameras guessed from the matches that then give the pose too."""
    features = not arguments.only_picked
    polished = features and not arguments.no_polish
    if known is not None:
        a, b = known.a, known.b
        return pose_from_scene(a, b, pairs, picks=picks, features=features, polished=polished, progress=progress), None
    matches = find_all_matches(pairs if features else (), picks, progress)
    same, accepted = arguments.same_focal, arguments.accept_guessed_intrinsics
    guess = GuessedIntrinsics.of(matches, *_sizes(known, pairs), same=same, accepted=accepted)
    a, b = guess.found.cameras
    pose = pose_from_scene(a, b, pairs, picks=matches, features=False, polished=polished, progress=progress)
    return pose, guess


def _sizes(known: Rig | None, pairs: Sequence[ImagePair]) -> list[tuple[int, int]]:
    """Give both cameras' width and height; where no rig says them, as the first pair has them."""
    if known is not None:
        return [known.a.size, known.b.size]
    return [(image.shape[1], image.shape[0]) for image in pairs[0]]


def _scaled(pose: ScenePose, lengths: Sequence[KnownLength], target: str | None, pairs: Sequence[ImagePair]) -> Scaled:
    boards = _boards(target, pose.rig, pairs) if target else []
    return scale_pose(pose.rig, pose.picked_noise_px, pose.matches, lengths, boards)


def _lengths(arguments: argparse.Namespace, known: Rig | None) -> list[KnownLength]:
    lengths = [parse_length(text) for text in arguments.length]
    if lengths and not arguments.matches:
        raise CalibrationError(f"--length {arguments.length[0]!r} names points; expected --matches with their labels")
    lengths += [parse_baseline(text) for text in arguments.baseline]
    if arguments.keep_baseline and known is not None:
        lengths.append(kept_baseline(known, arguments.rig.name))
    return lengths


def _boards(text: str, rig: Rig, pairs: Sequence[ImagePair]) -> list[KnownBoard]:
    """Find a target's boards in the pairs; each that both cameras see at once is a known length."""
    target = parse_target(text)
    found = []
    for number, (image_a, image_b) in enumerate(pairs, start=1):
        both = zip(target.boards, target.find(image_a), target.find(image_b), strict=True)
        found += [
            known_board(rig, board, seen_a, seen_b, name=f"target in pair {number}")
            for board, seen_a, seen_b in both
            if seen_a is not None and seen_b is not None
        ]
    if not found:
        raise CalibrationError(
            f"the target {text!r} is in none of the {len(pairs)} pairs for both cameras at once; expected it whole and sharp "
            "in both pictures of one pair at least"
        )
    return found


def _read_pairs(files_a: Sequence[str], files_b: Sequence[str], by: PairBy) -> list[ImagePair]:
    paired = pair_files(find_images(files_a), find_images(files_b), by)
    pairs = [(read_image(a), read_image(b)) for a, b in paired if a is not None and b is not None]
    if not pairs:
        raise CalibrationError("no picture of A has a partner of B; expected pairs: mend the patterns or the numbers")
    return pairs


def _picks(arguments: argparse.Namespace, known: Rig | None, pairs: Sequence[ImagePair]) -> Matches | None:
    if arguments.matches is None:
        if arguments.only_picked:
            raise CalibrationError("--only-picked without picked points; expected --matches with a CSV file of them")
        return None
    return read_picks(arguments.matches, *_sizes(known, pairs))


def _report(
    path: Path,
    rig: Rig,
    pose: ScenePose,
    pairs: Sequence[ImagePair],
    scaled: Scaled | None,
    known: Rig | None,
    warnings: Sequence[str],
) -> None:
    from ...calib.pose_report import write_pose_report

    lengths = [
        (length.name, length.length_m * 1e3, length.sigma_m * 1e3, length.residual_sigmas)
        for length in (() if scaled is None else scaled.lengths)
    ]
    grey = [(grey_8_bit(image_a), grey_8_bit(image_b)) for image_a, image_b in pairs]
    write_pose_report(path, rig, pose, grey, lengths=lengths, known=known, warnings=warnings)


def _show(path: Path, pairs: Sequence[ImagePair], pose: ScenePose) -> None:
    import cv2

    from ..match_picture import draw_matches

    done, encoded = cv2.imencode(".png", draw_matches(pairs, pose.matches, pose.inliers))
    if not done:
        raise CalibrationError(f"the picture of the matches cannot be encoded for {path}; expected a .png name")
    write_atomically(path, encoded.tobytes())
