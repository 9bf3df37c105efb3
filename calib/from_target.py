"""Intrinsics of both cameras and the pose between them from views of a target.

OpenCV's solvers (Zhang, "A Flexible New Technique for Camera Calibration", 2000) give each camera a start, a robust
refinement settles it alone, and a joint one settles both, the pose and all placings of the boards. Chosen by measurement:
on the chessboard pairs of the tests the joint solution lies within 0.4 of the published uncertainties, with held
intrinsics within 0.9.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np

from .advice import Account, careful_warnings, refuse_folding_lens, refuse_unsettled
from .bundle import Seen
from .camera import Camera, FloatArray
from .errors import CalibrationError
from .exchanged import Exchanged, exchanged_pairs, fits_other_camera
from .judge import Judgement, choose_held_out, judge_held_out, pair_distances, view_fit
from .numbering import Pair, number_alike, pairs_of
from .one_camera import FEWEST_POINTS, spans_the_board
from .reasons import View, exchanged_reason, joined, misfit_reason, unlike_reason
from .result import CalibrationResult, CameraFit, Parameters, SetAside, ViewFit
from .robust_solve import AUTO, FEWEST_VIEWS, Alone, Joint, settle_alone, settle_jointly
from .targets import Target

__all__ = ["AUTO", "FEWEST_VIEWS", "View", "calibrate_pair"]

_HOPELESS_FOCAL = 0.2
"""Relative standard deviation of a focal length, from one camera alone, beyond which no pose can be looked for: usual
views give 0.002, views that are all parallel 0.6 and more."""

_COVERAGE_GRID = (8, 6)


def calibrate_pair(
    target: Target,
    views: Sequence[View],
    size_a: tuple[int, int],
    size_b: tuple[int, int],
    *,
    model: str = "pinhole 5",
    model_a: str | None = None,
    model_b: str | None = None,
    intrinsics_a: Camera | None = None,
    intrinsics_b: Camera | None = None,
    held_out: float | Collection[str] = 0.0,
    baseline_m: float | None = None,
    board_shape: bool = False,
) -> CalibrationResult:
    """Calibrate two cameras and the pose between them.

    Parameters
    ----------
    target : Target
    views : sequence of View
        In the order they were taken. Views that only one camera sees still serve its intrinsics.
    size_a, size_b : (width, height)
        Image sizes in pixels.
    model : str
        Lens model of both cameras: ``pinhole 4``, ``pinhole 5``, ``pinhole 8``, ``pinhole 12``, ``pinhole 14``, ``fisheye``,
        or ``auto`` to have each camera's chosen by its error in views held out in turn.
    model_a, model_b : str, optional
        The model of one camera, where it is another.
    intrinsics_a, intrinsics_b : Camera, optional
        Known intrinsics, which are held; the model of that camera is then its own.
    held_out : float or collection of str
        Share of the pairs, up to 0.5, or the names of the images to keep out of the solve and judge the rig by.
    baseline_m : float, optional
        The baseline as measured otherwise, to check the scale by.
    board_shape : bool
        Refine the boards' points too, for boards that are bent or printed unevenly; takes many views.

    Returns
    -------
    CalibrationResult

    Raises
    ------
    CalibrationError
        Where too few views show the target, the views do not settle the parameters, no one pose fits them, or an option is
        out of its range.
    """
    settings = (
        _Settings("a", size_a, model_a or model, intrinsics_a),
        _Settings("b", size_b, model_b or model, intrinsics_b),
    )
    complete = [view.seen_a is not None and view.seen_b is not None for view in views]
    apart = choose_held_out([(view.name_a, view.name_b) for view in views], complete, held_out)
    solution = _solve(target, views, settings, apart, board_shape)
    strayed: list[Exchanged] = []
    if tuple(size_a) == tuple(size_b):
        strayed = exchanged_pairs(target.boards, solution.unfit_pairs(), solution.joint)
    if strayed:
        # They may have fitted the wrong camera well enough to bend it.
        gone = {pair.view for pair in strayed}
        blind = [replace(v, seen_a=None, seen_b=None) if n in gone else v for n, v in enumerate(views)]
        solution = _solve(target, blind, settings, apart, board_shape)
    result = _result(views, solution, strayed)
    return replace(result, warnings=careful_warnings(_account(target, views, result, solution, baseline_m)))


@dataclass(frozen=True)
class _Settings:
    """What is asked of one camera."""

    letter: str
    size: tuple[int, int]
    model: str
    held: Camera | None


@dataclass(frozen=True, eq=False, kw_only=True)
class _Solution:
    """All that was solved; placings are views."""

    boards: tuple[FloatArray, ...]
    numbered: list[Seen]
    apart: frozenset[int]
    unused: tuple[tuple[Seen, str], ...]
    alones: tuple[Alone, Alone]
    joint: Joint
    out: Judgement

    def unfit_pairs(self) -> list[Pair]:
        """Give the pairs that both cameras saw and that did not fit, whole or with one of their images."""
        fit = {a.placing for a, _ in self.joint.pairs} | self.apart
        return [pair for pair in pairs_of(self.numbered) if pair[0].placing not in fit]


def _solve(
    target: Target,
    views: Sequence[View],
    settings: tuple[_Settings, _Settings],
    apart: frozenset[int],
    board_shape: bool,
) -> _Solution:
    usable, unused = _usable(target, views)
    boards = tuple(board.points for board in target.boards)
    alones: list[Alone] = []
    for camera, asked in enumerate(settings):
        letter = asked.letter.upper()
        seen = [s for s in usable if s.camera == camera and s.placing not in apart]
        remarks = [remark for view in views for remark in view.missed_remarks(camera)]
        _require(len(seen), len(views) - len(apart), f"camera {letter}", target, remarks)
        alone = settle_alone(asked.letter, seen, boards, _checked(asked), asked.model, asked.held)
        if asked.held is None:
            # Before the pose: cameras whose focal length is anybody's guess would look like pairs that do not belong.
            refuse_unsettled(letter, alone.fit, 0, limit=_HOPELESS_FOCAL)
        alones.append(alone)
    numbered = _numbered(target, (alones[0].camera, alones[1].camera), usable)
    kept = {(camera, s.placing) for camera, alone in enumerate(alones) for s in alone.seen}
    used = [s for s in numbered if (s.camera, s.placing) in kept]
    _require(len(pairs_of(used)), len(views), "both cameras at once", target)
    joint = settle_jointly(used, boards, (alones[0], alones[1]), board_shape=board_shape)
    for letter, camera_found in zip("AB", joint.fit.state.cameras, strict=True):
        refuse_folding_lens(letter, camera_found, [s.pixels for s in joint.seen if "AB"[s.camera] == letter])
        refuse_unsettled(letter, joint.fit, "AB".index(letter))
    return _Solution(
        boards=boards,
        numbered=numbered,
        apart=apart,
        unused=unused,
        alones=(alones[0], alones[1]),
        joint=joint,
        out=judge_held_out([s for s in numbered if s.placing in apart], joint.fit.state),
    )


def _result(views: Sequence[View], solution: _Solution, strayed: Sequence[Exchanged]) -> CalibrationResult:
    joint, alones, out = solution.joint, solution.alones, solution.out
    whole = np.concatenate([pair_distances(joint.rig, pair) for pair in joint.pairs])
    return CalibrationResult(
        rig=joint.rig,
        a=_camera_fit(joint, alones[0], 0),
        b=_camera_fit(joint, alones[1], 1),
        pairs=len(joint.pairs),
        rms_px=joint.fit.rms_px,
        epipolar_median_px=float(np.median(whole)),
        epipolar_95_px=float(np.percentile(whole, 95)),
        noise_px=float(np.sqrt(np.mean(np.square(joint.fit.noise_px)))),
        parameters=Parameters(names=joint.fit.names, values=joint.fit.values, covariance=joint.fit.covariance),
        views=(*_view_fits(joint), *out.views),
        set_aside=(*_reasons(views, solution, strayed), *out.set_aside),
        held_out=out.figures,
        trials=(*alones[0].trials, *alones[1].trials),
        warnings=(),
    )


def _reasons(views: Sequence[View], solution: _Solution, strayed: Sequence[Exchanged]) -> list[SetAside]:
    """Say of every image and pair that took no part why."""
    gone = {pair.view for pair in strayed}
    found = [missed for n, view in enumerate(views) if n not in gone for missed in view.missed()]
    found += [
        SetAside(name=s.name, reason=joined(why, views[s.placing].remarks(s.camera))) for s, why in solution.unused
    ]
    others = fits_other_camera(solution.alones, solution.boards)
    for camera, alone in enumerate(solution.alones):
        for s, misfit in alone.aside:
            why = misfit_reason(misfit, views[s.placing].remarks(camera), others.get((camera, s.placing)), "BA"[camera])
            found.append(SetAside(name=s.name, reason=why))
    for misfit in solution.joint.aside:
        view = views[misfit.view]
        found.append(SetAside(name=view.pair_name, reason=unlike_reason(misfit, view.all_remarks)))
    found += [SetAside(name=views[pair.view].pair_name, reason=exchanged_reason(pair)) for pair in strayed]
    return found


def _account(
    target: Target, views: Sequence[View], result: CalibrationResult, solution: _Solution, baseline_m: float | None
) -> Account:
    distances = {
        views[pair[0].placing].pair_name: float(np.median(pair_distances(result.rig, pair)))
        for pair in solution.joint.pairs
    }
    return Account(
        result=result,
        epipolar_px=distances,
        alone=tuple((alone.seen, alone.fit) for alone in solution.alones),
        jump=solution.joint.jump,
        target=target,
        baseline_m=baseline_m,
    )


def _usable(target: Target, views: Sequence[View]) -> tuple[list[Seen], tuple[tuple[Seen, str], ...]]:
    """Give every sighting that can place its board, with the view's number for its placing; and those that cannot."""
    usable, unused = [], []
    for number, view in enumerate(views):
        for camera, (name, sighting) in enumerate(((view.name_a, view.seen_a), (view.name_b, view.seen_b))):
            if sighting is None:
                continue
            seen = Seen(
                name=name, camera=camera, placing=number, board=view.board, ids=sighting.ids, pixels=sighting.pixels
            )
            if spans_the_board(target.boards[view.board].points[sighting.ids]):
                usable.append(seen)
            else:
                few = f"{len(sighting)} points found, or all in one line; expected {FEWEST_POINTS} or more across the board"
                unused.append((seen, few))
    return usable, tuple(unused)


def _require(count: int, looked: int, who: str, target: Target, remarks: Sequence[str] = ()) -> None:
    if count < FEWEST_VIEWS:
        found = "in no view" if count == 0 else f"in {count} view{'s' if count > 1 else ''}"
        common = Counter(remarks).most_common(1)
        seen = f"; in {common[0][1]} of the others: {common[0][0]}" if common else ""
        raise CalibrationError(
            f"{target} was found {found} of {looked} for {who}; expected {FEWEST_VIEWS} or more: check the target's name "
            f"(inner corners, not squares), show it whole, flat, sharp and evenly lit, and take more views{seen}"
        )


def _checked(asked: _Settings) -> tuple[int, int]:
    size, held = asked.size, asked.held
    if held is not None and held.size != tuple(size):
        raise CalibrationError(
            f"the intrinsics given for camera {asked.letter.upper()} are of {held.width}x{held.height} pixels and its images "
            f"of {size[0]}x{size[1]}; expected the same: give those of this image size, or none"
        )
    return size


def _numbered(target: Target, cameras: tuple[Camera, Camera], usable: Sequence[Seen]) -> list[Seen]:
    """Give B's points the numbers of A's in all pairs, those held out among them."""
    alike = number_alike(target.boards, *cameras, pairs_of(usable))
    changed = {seen_b.placing: seen_b for _, seen_b in alike}
    return [changed.get(s.placing, s) if s.camera == 1 else s for s in usable]


def _camera_fit(joint: Joint, alone: Alone, camera: int) -> CameraFit:
    mine = [s for s in joint.solved if s.camera == camera]
    normals = np.array([joint.fit.state.pose_of(s)[:3, 2] for s in mine])
    found = joint.fit.state.cameras[camera]
    return CameraFit(
        camera=found,
        rms_px=alone.fit.rms_px,
        view_rms_px=alone.view_rms_px,
        coverage=_coverage([s.pixels for s in mine], found.size),
        tilt_deg=float(np.rad2deg(np.arccos(np.clip(np.abs(normals[:, 2]), 0, 1)).max())),
    )


def _coverage(corners: Sequence[FloatArray], size: tuple[int, int]) -> float:
    columns, rows = _COVERAGE_GRID
    edges = np.linspace(0, size[0], columns + 1), np.linspace(0, size[1], rows + 1)
    points = np.concatenate(list(corners))
    return float((np.histogram2d(points[:, 0], points[:, 1], bins=edges)[0] > 0).mean())


def _view_fits(joint: Joint) -> list[ViewFit]:
    return [
        view_fit(s, residuals, joint.fit.state, used=True)
        for s, residuals in zip(joint.solved, joint.fit.residuals_px, strict=True)
    ]
