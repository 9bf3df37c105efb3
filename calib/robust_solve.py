"""Each camera settled alone, then both together, without the images and pairs that do not fit the rest."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from .advice import refuse_unlike_pairs
from .bundle import Seen, State
from .camera import Camera, FloatArray
from .errors import CalibrationError
from .focal_drift import FocalJump, focal_jump
from .judge import place_pair
from .lens_choice import choose_lens
from .numbering import Pair, agreed_pose, pairs_of
from .one_camera import fit_camera, lens_named, place_board
from .refine import SETTLED, Refined, refine, rms
from .result import ModelTrial
from .rig import Rig
from .set_aside import limit_px, robust_limit, settle

AUTO = "auto"

FEWEST_VIEWS = 3
"""Zhang (2000), section 3.1: with three views or more, all intrinsic parameters have one solution."""

_SUSPECT_SIGMAS = 3.0
_MOVED_SIGMAS = 6.0
"""How far A and B may differ on where the board of a pair stands, in standard deviations of corner noise for each of the
six coordinates of a placing, or times the median of all pairs: the first raises suspicion of a pair that took part in the
solution, the second convicts it before the solution of the others. Noise alone passes the first once in 10^9 pairs. A board
that moved by 1 mm of 800 is at 3.5 to 6, then at 6 to 19; the worst of the real pairs in the tests at 3.9, then at 5.6.
"""

_SMALLEST_NOISE_PX = 0.02

_ROUGHLY = 1e-4
"""How far the solution settles that holds pairs which do not belong: it would creep for long, and none is built on it.
The change of a focal length is told by what no move of the unknowns can take up, so that their last digits tell nothing.
"""


@dataclass(frozen=True, kw_only=True)
class Misfit:
    """One image that does not fit its camera, or one pair that does not fit the rig.

    Attributes
    ----------
    view : int
        Its number.
    rms_px, typical_px, limit_px : float
        Its own RMS, the median of those that were kept, and the limit.
    """

    view: int
    rms_px: float
    typical_px: float
    limit_px: float


@dataclass(frozen=True, eq=False, kw_only=True)
class Alone:
    """One camera's solution on its own; the placings of ``seen`` are views."""

    seen: tuple[Seen, ...]
    fit: Refined
    held: bool
    trials: tuple[ModelTrial, ...]
    aside: tuple[tuple[Seen, Misfit], ...]

    @property
    def camera(self) -> Camera:
        """The camera as its own views have it."""
        return self.fit.state.cameras[0]

    @property
    def view_rms_px(self) -> dict[str, float]:
        """Each image's RMS over all boards in it, by its name."""
        names = dict.fromkeys(s.name for s in self.seen)
        found = list(zip(self.seen, self.fit.residuals_px, strict=True))
        return {name: rms(np.concatenate([r for s, r in found if s.name == name])) for name in names}

    @property
    def limit_px(self) -> float:
        """The RMS above which an image does not fit this camera."""
        return limit_px(_rms_of(self.fit))


@dataclass(frozen=True, eq=False, kw_only=True)
class Joint:
    """Both cameras' solution; the placings of ``seen`` are views, those of ``solved`` the solution's own.

    ``jump`` is a focal length's change, as the solution of all pairs shows it: those after it may be set aside for it.
    """

    seen: tuple[Seen, ...]
    solved: tuple[Seen, ...]
    fit: Refined
    aside: tuple[Misfit, ...] = ()
    jump: FocalJump | None = None

    @property
    def pairs(self) -> list[Pair]:
        """The pairs that took part; their placings are views."""
        return pairs_of(self.seen)

    @property
    def rig(self) -> Rig:
        """Cameras and pose, with the pose's covariance."""
        a, b = self.fit.state.cameras
        return Rig(a=a, b=b, R=self.fit.state.R, t=self.fit.state.t, covariance=self.fit.covariance[-6:, -6:])

    @property
    def pair_rms_px(self) -> FloatArray:
        """RMS of each pair that took part."""
        found = self._residuals()
        return np.array([rms(np.concatenate([found[s.camera, s.placing] for s in pair])) for pair in self.pairs])

    def of_pair(self, pair: Pair) -> tuple[FloatArray, ...] | None:
        """Residuals of a pair's two images: as solved, or of one that took no part; None where it cannot be placed."""
        found = self._residuals()
        if all((s.camera, s.placing) in found for s in pair):
            return tuple(found[s.camera, s.placing] for s in pair)
        try:
            return place_pair([replace(s, placing=0) for s in pair], self.fit.state)[1]
        except CalibrationError:
            return None

    def _residuals(self) -> dict[tuple[int, int], FloatArray]:
        return dict(zip(((s.camera, s.placing) for s in self.seen), self.fit.residuals_px, strict=True))


def settle_alone(
    letter: str,
    seen: Sequence[Seen],
    boards: tuple[FloatArray, ...],
    size: tuple[int, int],
    model: str,
    held: Camera | None,
) -> Alone:
    """Fit one camera alone, setting aside images that do not fit the rest.

    Parameters
    ----------
    letter : str
        ``a`` or ``b``.
    seen : sequence of Seen
        Its images, whose placings are views.
    boards : tuple of ndarray of shape (K, 3)
    size : (width, height)
    model : str
        A lens by name, or ``auto``.
    held : Camera, optional
        Intrinsics that are known and stay.

    Raises
    ------
    CalibrationError
        Where the views do not settle the camera.
    """
    trials: tuple[ModelTrial, ...] = ()
    if model == AUTO and held is None:
        lens, trials = choose_lens(seen, boards, size)
        trials = tuple(replace(trial, name=f"{letter}: {trial.name}") for trial in trials)
    else:
        lens = lens_named("pinhole 5" if model == AUTO else model)

    def judge(fit: Refined, _kept: Sequence[Seen], aside: Sequence[Seen]) -> tuple[FloatArray, FloatArray]:
        of_kept = _rms_of(fit)
        of_aside = [rms_before(fit.state.cameras[0], s, boards) for s in aside]
        return of_kept / limit_px(of_kept), np.array(of_aside) / limit_px(of_kept)

    fit, kept, aside = settle(seen, lambda some: fit_camera(some, boards, size, lens, held), judge, fewest=FEWEST_VIEWS)
    of_kept, camera = _rms_of(fit), fit.state.cameras[0]
    misfits = [(s, _misfit(s.placing, rms_before(camera, s, boards), of_kept)) for s in aside]
    return Alone(seen=tuple(kept), fit=fit, held=held is not None, trials=trials, aside=tuple(misfits))


def rms_before(camera: Camera, seen: Seen, boards: tuple[FloatArray, ...]) -> float:
    """Give the RMS in pixels of one image before a known camera, its board placed as well as may be; infinite for none."""
    try:
        return fit_camera([seen], boards, camera.size, lens_named("pinhole 5"), camera).rms_px
    except CalibrationError:
        return float("inf")


def settle_jointly(
    used: Sequence[Seen], boards: tuple[FloatArray, ...], alones: tuple[Alone, Alone], *, board_shape: bool
) -> Joint:
    """Solve for everything at once, setting aside pairs that do not fit the rest.

    First for the pose alone, since a pair of two instants would bend the cameras too; then for all.

    Parameters
    ----------
    used : sequence of Seen
        The images that fit their cameras, numbered alike, whose placings are views.
    boards : tuple of ndarray of shape (K, 3)
    alones : (Alone, Alone)
    board_shape : bool
        Refine the boards' points too.

    Raises
    ------
    CalibrationError
        Where no one pose fits the pairs, or the views do not settle the parameters.
    """
    pairs = pairs_of(used)
    start = _start(used, boards, (alones[0].camera, alones[1].camera))

    def pose_of(some: Sequence[Pair]) -> Joint:
        used = [s for pair in some for s in pair]
        return _refine(used, start, held=("a", "b"), board_shape=False, settled=SETTLED)

    posed, _, unlike = settle(pairs, pose_of, _judge_by_rms, fewest=FEWEST_VIEWS)
    refuse_unlike_pairs(max(alone.fit.rms_px for alone in alones), posed.fit.rms_px, posed.rig)
    start = replace(start, R=posed.fit.state.R, t=posed.fit.state.t)
    held = [letter for letter, alone in zip("ab", alones, strict=True) if alone.held]
    squares = {(c, s.placing): float((r**2).sum()) for c, alone in enumerate(alones) for s, r in _residuals(alone)}

    def solve(some: Sequence[Pair], settled: float = SETTLED) -> Joint:
        gone = {a.placing for a, _ in pairs} - {a.placing for a, _ in some}
        left = [s for s in used if s.placing not in gone]
        return _refine(left, start, held=held, board_shape=board_shape, settled=settled)

    # A new focal length may spoil the very pairs that are set aside, so it is looked for among all of them.
    whole = _solved_or_none(lambda: solve(pairs, _ROUGHLY if unlike else SETTLED))
    joint, _, aside = settle(
        pairs,
        lambda some: whole if whole is not None and len(some) == len(pairs) and not unlike else solve(some),
        lambda joint, kept, aside: _judge_apart(joint, kept, aside, squares),
        fewest=FEWEST_VIEWS,
        at_first={pairs.index(pair) for pair in unlike},
    )
    typical = joint.pair_rms_px
    misfits = [_misfit(pair[0].placing, _pair_rms(joint, pair), typical) for pair in aside]
    jump = None if whole is None else focal_jump(whole.solved, whole.fit)
    return replace(joint, aside=tuple(misfits), jump=jump)


def _solved_or_none(solve: Callable[[], Joint]) -> Joint | None:
    """Solve; None where pairs that do not belong leave no solution."""
    try:
        return solve()
    except CalibrationError:
        return None


def _residuals(alone: Alone) -> list[tuple[Seen, FloatArray]]:
    return list(zip(alone.seen, alone.fit.residuals_px, strict=True))


def _rms_of(fit: Refined) -> FloatArray:
    return np.array([rms(r) for r in fit.residuals_px])


def _misfit(view: int, rms_px: float, kept_px: FloatArray) -> Misfit:
    return Misfit(view=view, rms_px=rms_px, typical_px=float(np.median(kept_px)), limit_px=limit_px(kept_px))


def _pair_rms(joint: Joint, pair: Pair) -> float:
    residuals = joint.of_pair(pair)
    return float("inf") if residuals is None else rms(np.concatenate(residuals))


def _judge_by_rms(joint: Joint, kept: Sequence[Pair], aside: Sequence[Pair]) -> tuple[FloatArray, FloatArray]:
    found = [np.array([_pair_rms(joint, pair) for pair in some]) for some in (kept, aside)]
    limit = limit_px(found[0])
    return found[0] / limit, found[1] / limit


def _judge_apart(
    joint: Joint, kept: Sequence[Pair], aside: Sequence[Pair], alone_squares: Mapping[tuple[int, int], float]
) -> tuple[FloatArray, FloatArray]:
    """Judge pairs by their RMS and by how far A and B differ on where the board stands, as figures over their limits."""
    by_rms, apart = _judge_by_rms(joint, kept, aside), [_apart(joint, some, alone_squares) for some in (kept, aside)]
    middle = max(1.0, float(np.median(apart[0])))
    suspect = max(_SUSPECT_SIGMAS * middle, robust_limit(apart[0]))
    moved = max(_MOVED_SIGMAS * middle, suspect)
    return np.maximum(by_rms[0], apart[0] / suspect), np.maximum(by_rms[1], apart[1] / moved)


def _apart(joint: Joint, pairs: Sequence[Pair], alone_squares: Mapping[tuple[int, int], float]) -> FloatArray:
    """Tell how far A and B differ on where each pair's board stands: in sigmas of corner noise, for one coordinate.

    Placed by both together, the board fits each image worse than placed by it alone. The sum of squares this adds, over
    the variance of the noise, is distributed as chi squared with the six coordinates that the second placing had free,
    however many points were seen: far sharper than the RMS of all of them.
    """
    noise = [max(sigma, _SMALLEST_NOISE_PX) for sigma in joint.fit.noise_px]
    found = []
    for pair in pairs:
        residuals = joint.of_pair(pair)
        if residuals is None:
            found.append(np.inf)
            continue
        added = [
            (float((r**2).sum()) - alone_squares[s.camera, s.placing]) / noise[s.camera] ** 2
            for s, r in zip(pair, residuals, strict=True)
        ]
        found.append(np.sqrt(max(sum(added), 0.0) / 6))
    return np.array(found)


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


def _refine(seen: Sequence[Seen], start: State, *, held: Sequence[str], board_shape: bool, settled: float) -> Joint:
    """Refine with the placings of these views alone."""
    views = sorted({s.placing for s in seen})
    number = {view: index for index, view in enumerate(views)}
    solved = tuple(replace(s, placing=number[s.placing]) for s in seen)
    part = replace(start, placings=start.placings[views], owners=start.owners[views])
    fit = refine(solved, part, held=held, board_shape=board_shape, settled=settled)
    return Joint(seen=tuple(seen), solved=solved, fit=fit)
