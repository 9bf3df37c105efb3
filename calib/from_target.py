"""Intrinsics of both cameras and the pose between them from views of a target.

OpenCV's solvers (Zhang, "A Flexible New Technique for Camera Calibration", 2000) give each camera a start, a robust
refinement settles it alone, and a joint one settles both, the pose and all placings of the boards. Chosen by measurement:
on the chessboard pairs of the tests the joint solution lies within 0.4 of the published uncertainties, with held
intrinsics within 0.9.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np

from .advice import Account, careful_warnings, refuse_folding_lens, refuse_unlike_pairs, refuse_unsettled
from .bundle import Seen, State
from .camera import Camera, FloatArray
from .errors import CalibrationError
from .focal_drift import FocalJump, focal_jump
from .judge import choose_held_out, judge_held_out, pair_distances, view_fit
from .lens_choice import choose_lens
from .numbering import Pair, agreed_pose, number_alike, pairs_of
from .one_camera import FEWEST_POINTS, fit_camera, lens_named, place_board, spans_the_board
from .refine import Refined, refine, rms
from .result import CalibrationResult, CameraFit, ModelTrial, Parameters, SetAside, ViewFit
from .rig import Rig
from .set_aside import outlying
from .targets import Sighting, Target

FEWEST_VIEWS = 3
"""Zhang (2000), section 3.1: with three views or more, all intrinsic parameters have one solution."""

_HOPELESS_FOCAL = 0.2
"""Relative standard deviation of a focal length, from one camera alone, beyond which no pose can be looked for: usual
views give 0.002, views that are all parallel 0.6 and more."""

_COVERAGE_GRID = (8, 6)
_ROUNDS = 3
"""How often bad views are set aside and the rest solved again."""

AUTO = "auto"


@dataclass(frozen=True, eq=False, kw_only=True)
class View:
    """What both cameras saw of one board in one pair.

    Attributes
    ----------
    name_a, name_b : str
        File names, for messages.
    seen_a, seen_b : Sighting or None
        None where the board was not found.
    board : int
        Which of the target's boards.
    """

    name_a: str
    name_b: str
    seen_a: Sighting | None
    seen_b: Sighting | None
    board: int = 0


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
    usable, unused = _usable(target, views)
    complete = [view.seen_a is not None and view.seen_b is not None for view in views]
    apart = choose_held_out([(view.name_a, view.name_b) for view in views], complete, held_out)
    boards = tuple(board.points for board in target.boards)
    alones: list[_Alone] = []
    for letter, size, lens, held in (
        ("a", size_a, model_a or model, intrinsics_a),
        ("b", size_b, model_b or model, intrinsics_b),
    ):
        seen = [s for s in usable if s.camera == "ab".index(letter) and s.placing not in apart]
        _require(len(seen), len(views) - len(apart), f"camera {letter.upper()}", target)
        alone = _fit_alone(letter, seen, boards, _checked(letter, held, size), lens, held)
        if held is None:
            # Before the pose: cameras whose focal length is anybody's guess would look like pairs that do not belong.
            refuse_unsettled(letter.upper(), alone.fit, 0, limit=_HOPELESS_FOCAL)
        alones.append(alone)
    cameras = (alones[0].camera, alones[1].camera)
    numbered = _numbered(target, cameras, usable)
    kept = {(camera, s.placing) for camera, alone in enumerate(alones) for s in alone.seen}
    used = [s for s in numbered if (s.camera, s.placing) in kept]
    joint = _solve_jointly(target, views, used, boards, (alones[0], alones[1]), board_shape)
    rig = _rig(joint.fit)
    for letter, camera in (("A", rig.a), ("B", rig.b)):
        refuse_folding_lens(letter, camera, [s.pixels for s in joint.seen if "AB"[s.camera] == letter])
        refuse_unsettled(letter, joint.fit, "AB".index(letter))
    out = judge_held_out([s for s in numbered if s.placing in apart], joint.fit.state)
    fits = [_camera_fit(joint, alone, camera) for camera, alone in enumerate(alones)]
    distances = {name: pair_distances(rig, pair) for name, pair in joint.named_pairs(views)}
    whole = np.concatenate(list(distances.values()))
    result = CalibrationResult(
        rig=rig,
        a=fits[0],
        b=fits[1],
        pairs=len(joint.pairs),
        rms_px=joint.fit.rms_px,
        epipolar_median_px=float(np.median(whole)),
        epipolar_95_px=float(np.percentile(whole, 95)),
        noise_px=float(np.sqrt(np.mean(np.square(joint.fit.noise_px)))),
        parameters=Parameters(names=joint.fit.names, values=joint.fit.values, covariance=joint.fit.covariance),
        views=(*_view_fits(joint), *out.views),
        set_aside=(*unused, *alones[0].aside, *alones[1].aside, *joint.aside, *out.set_aside),
        held_out=out.figures,
        trials=(*alones[0].trials, *alones[1].trials),
        warnings=(),
    )
    account = Account(
        result=result,
        epipolar_px={name: float(np.median(d)) for name, d in distances.items()},
        alone=tuple((alone.seen, alone.fit) for alone in alones),
        jump=joint.jump,
        target=target,
        baseline_m=baseline_m,
    )
    return replace(result, warnings=careful_warnings(account))


@dataclass(frozen=True, eq=False, kw_only=True)
class _Alone:
    """One camera's solution on its own."""

    seen: tuple[Seen, ...]
    fit: Refined
    held: bool
    trials: tuple[ModelTrial, ...]
    aside: tuple[SetAside, ...]

    @property
    def camera(self) -> Camera:
        return self.fit.state.cameras[0]

    @property
    def view_rms_px(self) -> dict[str, float]:
        return _rms_by_name(self.seen, self.fit.residuals_px)


@dataclass(frozen=True, eq=False, kw_only=True)
class _Joint:
    """Both cameras' solution; the placings of ``seen`` are views, those of ``solved`` the solution's own."""

    seen: tuple[Seen, ...]
    solved: tuple[Seen, ...]
    fit: Refined
    aside: tuple[SetAside, ...]
    jump: FocalJump | None = None

    @property
    def pairs(self) -> list[Pair]:
        return pairs_of(self.seen)

    def named_pairs(self, views: Sequence[View]) -> list[tuple[str, Pair]]:
        return [(_pair_name(views[a.placing]), (a, b)) for a, b in self.pairs]


def _usable(target: Target, views: Sequence[View]) -> tuple[list[Seen], tuple[SetAside, ...]]:
    """Give every sighting that can place its board, with the view's number for its placing; and those that cannot."""
    usable, unused = [], []
    for number, view in enumerate(views):
        for camera, (name, sighting) in enumerate(((view.name_a, view.seen_a), (view.name_b, view.seen_b))):
            if sighting is None:
                continue
            if spans_the_board(target.boards[view.board].points[sighting.ids]):
                seen = Seen(
                    name=name, camera=camera, placing=number, board=view.board, ids=sighting.ids, pixels=sighting.pixels
                )
                usable.append(seen)
            else:
                reason = f"{len(sighting)} points found, or all in one line; expected {FEWEST_POINTS} or more across the board"
                unused.append(SetAside(name=name, reason=reason))
    return usable, tuple(unused)


def _require(count: int, looked: int, who: str, target: Target) -> None:
    if count < FEWEST_VIEWS:
        found = "in no view" if count == 0 else f"in {count} view{'s' if count > 1 else ''}"
        raise CalibrationError(
            f"{target} was found {found} of {looked} for {who}; expected {FEWEST_VIEWS} or more: check the target's name "
            "(inner corners, not squares), show it whole, flat, sharp and evenly lit, and take more views"
        )


def _checked(letter: str, held: Camera | None, size: tuple[int, int]) -> tuple[int, int]:
    if held is not None and held.size != tuple(size):
        raise CalibrationError(
            f"the intrinsics given for camera {letter.upper()} are of {held.width}x{held.height} pixels and its images of "
            f"{size[0]}x{size[1]}; expected the same: give those of this image size, or none"
        )
    return size


def _fit_alone(
    letter: str,
    seen: Sequence[Seen],
    boards: tuple[FloatArray, ...],
    size: tuple[int, int],
    model: str,
    held: Camera | None,
) -> _Alone:
    """Fit one camera alone, setting aside images that do not fit the rest."""
    trials: tuple[ModelTrial, ...] = ()
    if model == AUTO and held is None:
        lens, trials = choose_lens(seen, boards, size)
        trials = tuple(replace(trial, name=f"{letter}: {trial.name}") for trial in trials)
    else:
        lens = lens_named("pinhole 5" if model == AUTO else model)
    kept, aside = list(seen), []
    fit = fit_camera(kept, boards, size, lens, held)
    for _ in range(_ROUNDS):
        rms_px = np.array([rms(r) for r in fit.residuals_px])
        bad, limit = outlying(rms_px, fewest=FEWEST_VIEWS)
        if not bad.any():
            break
        typical = float(np.median(rms_px))
        aside += [_misfit(s.name, float(rms_px[i]), typical, limit) for i, s in enumerate(kept) if bad[i]]
        kept = [s for s, out in zip(kept, bad, strict=True) if not out]
        fit = fit_camera(kept, boards, size, lens, held)
    return _Alone(seen=tuple(kept), fit=fit, held=held is not None, trials=trials, aside=tuple(aside))


def _misfit(name: str, rms_px: float, typical_px: float, limit_px: float) -> SetAside:
    reason = f"RMS {rms_px:.2f} px against {typical_px:.2f} px elsewhere, limit {limit_px:.2f} px"
    return SetAside(name=name, reason=f"{reason}: look for blur, glare, a bent or moving target, wrong corners")


def _rms_by_name(seen: Sequence[Seen], residuals: Sequence[FloatArray]) -> dict[str, float]:
    """Give each image's RMS over all boards in it."""
    names = dict.fromkeys(s.name for s in seen)
    return {
        name: rms(np.concatenate([r for s, r in zip(seen, residuals, strict=True) if s.name == name])) for name in names
    }


def _pair_name(view: View) -> str:
    return f"{view.name_a} with {view.name_b}"


def _numbered(target: Target, cameras: tuple[Camera, Camera], usable: Sequence[Seen]) -> list[Seen]:
    """Give B's points the numbers of A's in all pairs, those held out among them."""
    alike = number_alike(target.boards, *cameras, pairs_of(usable))
    changed = {seen_b.placing: seen_b for _, seen_b in alike}
    return [changed.get(s.placing, s) if s.camera == 1 else s for s in usable]


def _solve_jointly(
    target: Target,
    views: Sequence[View],
    used: Sequence[Seen],
    boards: tuple[FloatArray, ...],
    alones: tuple[_Alone, _Alone],
    board_shape: bool,
) -> _Joint:
    """Solve for everything at once, setting aside pairs that do not fit the rest."""
    _require(len(pairs_of(used)), len(views), "both cameras at once", target)
    start = _start(used, boards, (alones[0].camera, alones[1].camera))
    posed = _refine(_pairs_only(used), start, held=("a", "b"), board_shape=False)
    refuse_unlike_pairs(max(alone.fit.rms_px for alone in alones), posed.fit.rms_px, _rig(posed.fit))
    start = replace(start, R=posed.fit.state.R, t=posed.fit.state.t)
    held = [letter for letter, alone in zip("ab", alones, strict=True) if alone.held]
    kept, aside = list(used), []
    joint = _refine(kept, start, held=held, board_shape=board_shape)
    jump = focal_jump(joint.solved, joint.fit)  # before views that a new focal length spoils are set aside
    for _ in range(_ROUNDS):
        pairs = pairs_of(kept)
        residuals = dict(zip(((s.camera, s.placing) for s in kept), joint.fit.residuals_px, strict=True))
        rms_px = np.array([rms(np.concatenate([residuals[0, a.placing], residuals[1, a.placing]])) for a, _ in pairs])
        bad, limit = outlying(rms_px, fewest=FEWEST_VIEWS)
        if not bad.any():
            break
        typical = float(np.median(rms_px))
        gone = {pair[0].placing: float(value) for pair, value, out in zip(pairs, rms_px, bad, strict=True) if out}
        aside += [_misfit(_pair_name(views[placing]), value, typical, limit) for placing, value in gone.items()]
        kept = [s for s in kept if s.placing not in gone]
        joint = _refine(kept, start, held=held, board_shape=board_shape)
    return replace(joint, aside=tuple(aside), jump=jump)


def _pairs_only(seen: Sequence[Seen]) -> list[Seen]:
    return [s for pair in pairs_of(seen) for s in pair]


def _start(seen: Sequence[Seen], boards: tuple[FloatArray, ...], cameras: tuple[Camera, Camera]) -> State:
    """Place every view's board, number by number, and B from A."""
    alone = {(s.camera, s.placing): place_board(boards[s.board][s.ids], s.pixels, cameras[s.camera]) for s in seen}
    both = [a.placing for a, _ in pairs_of(seen)]
    R, t = agreed_pose([alone[0, view] for view in both], [alone[1, view] for view in both])
    count = 1 + max(s.placing for s in seen)
    placings, owners = np.tile(np.eye(4), (count, 1, 1)), np.zeros(count, dtype=np.intp)
    for view in {s.placing for s in seen}:
        owners[view] = 0 if (0, view) in alone else 1
        placings[view] = alone[int(owners[view]), view]
    return State(cameras=cameras, R=R, t=t, placings=placings, owners=owners, boards=boards)


def _refine(seen: Sequence[Seen], start: State, *, held: Sequence[str], board_shape: bool) -> _Joint:
    """Refine with the placings of these views alone."""
    views = sorted({s.placing for s in seen})
    number = {view: index for index, view in enumerate(views)}
    solved = tuple(replace(s, placing=number[s.placing]) for s in seen)
    part = replace(start, placings=start.placings[views], owners=start.owners[views])
    fit = refine(solved, part, held=held, board_shape=board_shape)
    return _Joint(seen=tuple(seen), solved=solved, fit=fit, aside=())


def _rig(fit: Refined) -> Rig:
    a, b = fit.state.cameras
    return Rig(a=a, b=b, R=fit.state.R, t=fit.state.t, covariance=fit.covariance[-6:, -6:])


def _camera_fit(joint: _Joint, alone: _Alone, camera: int) -> CameraFit:
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


def _view_fits(joint: _Joint) -> list[ViewFit]:
    return [
        view_fit(s, residuals, joint.fit.state, used=True)
        for s, residuals in zip(joint.solved, joint.fit.residuals_px, strict=True)
    ]
