"""``skewline pose``: R and t between two cameras from what they see, without a target."""

from __future__ import annotations

import argparse
import json
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from ...calib import CalibrationError, Rig
from ...calib.from_scene import ScenePose, pose_from_scene
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
from ..pose_text import pose_figures, pose_notes, print_pose, warnings_of
from ..progress import Progress

_DESCRIPTION = "Solve where camera B stands relative to A from pictures of any scene, and save the rig."

_EXAMPLE = """\
example: ten pairs of the parts on the bench; the intrinsics are those of an earlier rig, and so is the length of the
baseline, since the bracket is rigid

  skewline pose --rig bench.rig.json --a 'shift/a*.png' --b 'shift/b*.png' --keep-baseline -o bench-now.rig.json

or with points picked by hand in the first pair, two of which (P and Q) lie 250 mm apart:

  skewline pose --rig bench.rig.json --a a.png --b b.png --matches picks.csv --length "P Q 250mm" -o bench-now.rig.json

More pairs give a better pose: let the scene change between them, with texture at near and far distance all over both
pictures. Without a length the rig is saved, but it says that its scale is not known, and no depth in metres comes of it.

exit status: 0 when the rig was saved, 2 for bad input or a scene that cannot give the pose
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    files = "pictures of camera {}: names or a quoted pattern"
    parser.add_argument(
        "--rig", required=True, type=Path, metavar="RIG", help="take both cameras' intrinsics from this rig"
    )
    parser.add_argument("--a", nargs="+", required=True, metavar="FILE", help=files.format("A"))
    parser.add_argument("--b", nargs="+", required=True, metavar="FILE", help=files.format("B"))
    parser.add_argument("-o", "--output", required=True, type=Path, metavar="RIG", help="where to save the rig")
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
    parser.add_argument("--baseline", metavar="LENGTH", help='the measured baseline, as "193mm" or "193mm 0.5mm"')
    parser.add_argument("--keep-baseline", action="store_true", help="keep the length of the baseline of --rig")
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
    known = Rig.load(arguments.rig)
    lengths = _lengths(arguments, known)
    pairs = _read_pairs(arguments.a, arguments.b, arguments.pair_by)
    picks = _picks(arguments, known)
    with Progress() as progress:
        pose = pose_from_scene(
            known.a,
            known.b,
            pairs,
            picks=picks,
            features=not arguments.only_picked,
            polished=not (arguments.no_polish or arguments.only_picked),
            progress=progress,
        )
    boards = _boards(arguments.target, pose.rig, pairs) if arguments.target else []
    scaled = scale_pose(pose.rig, pose.picked_noise_px, pose.matches, lengths, boards) if lengths or boards else None
    rig = pose.rig if scaled is None else scaled.rig
    rig = replace(rig, T_base_a=known.T_base_a, notes=pose_notes(pose, scaled, len(pairs)))
    rig.save(arguments.output)
    if arguments.show:
        _show(arguments.show, pairs, pose)
    if arguments.report:
        _report(arguments.report, rig, pose, pairs, scaled, known)
    if arguments.json:
        print(json.dumps({**pose_figures(rig, pose, scaled, known), "saved": str(arguments.output)}, indent=2))
        return 0
    print_pose(rig, pose, scaled, known, len(pairs))
    print(f"saved {arguments.output}, rig {rig.fingerprint[:12]}")
    if arguments.report:
        print(f"report: {arguments.report}")
    return 0


def _lengths(arguments: argparse.Namespace, known: Rig) -> list[KnownLength]:
    lengths = [parse_length(text) for text in arguments.length]
    if lengths and not arguments.matches:
        raise CalibrationError(f"--length {arguments.length[0]!r} names points; expected --matches with their labels")
    if arguments.baseline:
        lengths.append(parse_baseline(arguments.baseline))
    if arguments.keep_baseline:
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


def _picks(arguments: argparse.Namespace, known: Rig) -> Matches | None:
    if arguments.matches is None:
        if arguments.only_picked:
            raise CalibrationError("--only-picked without picked points; expected --matches with a CSV file of them")
        return None
    sizes = [(camera.width, camera.height) for camera in (known.a, known.b)]
    return read_picks(arguments.matches, *sizes)


def _report(
    path: Path, rig: Rig, pose: ScenePose, pairs: Sequence[ImagePair], scaled: Scaled | None, known: Rig
) -> None:
    from ...calib.pose_report import write_pose_report

    lengths = [
        (length.name, length.length_m * 1e3, length.sigma_m * 1e3, length.residual_sigmas)
        for length in (() if scaled is None else scaled.lengths)
    ]
    warnings = warnings_of(pose, scaled, known)
    grey = [(grey_8_bit(image_a), grey_8_bit(image_b)) for image_a, image_b in pairs]
    write_pose_report(path, rig, pose, grey, lengths=lengths, known=known, warnings=warnings)


def _show(path: Path, pairs: Sequence[ImagePair], pose: ScenePose) -> None:
    import cv2

    from ..match_picture import draw_matches

    done, encoded = cv2.imencode(".png", draw_matches(pairs, pose.matches, pose.inliers))
    if not done:
        raise CalibrationError(f"the picture of the matches cannot be encoded for {path}; expected a .png name")
    write_atomically(path, encoded.tobytes())
