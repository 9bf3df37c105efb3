"""Choosing a lens model by how well it foretells views that it was not fitted to.

The rule against over-fitting: k-fold over views, and of all models the simplest whose held-out view RMS is within two
standard errors of the best one's, where the error is that of the mean difference over the same views, and at most a
tenth above it, since a wrong model's errors differ so much between views that their mean is always uncertain. It is the
standard-error rule of Breiman, Friedman, Olshen and Stone, Classification and Regression Trees, 1984, section 3.4.3,
taken on paired differences, since views differ from one another far more than models do; two errors and not one, since
the best of six is best by chance too. A model that folds where corners were seen, or between them, is out, be it
pinhole or fisheye; a fold beyond all corners is told and decides nothing (:mod:`.folds`).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from .bundle import Seen, State
from .camera import FloatArray
from .errors import CalibrationError
from .folds import fold_among, fold_in_picture
from .one_camera import LENSES, Lens, alone_in_order, fit_camera, with_lens
from .refine import Refined, refine, rms
from .result import ModelTrial

_FOLDS = 5
_STANDARD_ERRORS = 2.0
_LARGEST_EXCESS = 0.1
_FEWEST_VIEWS = 6
"""Below this there is nothing to choose by, and the simplest model is taken."""

_HOPELESS = 2.0
"""A model that fits all views so many times worse than the best is not tried on held-out ones."""

_IDLE = 0.995
"""Nor is a richer pinhole whose fit leaves so much of each view's RMS, in the mean: its further coefficients are idle.

Noise alone gave ten further coefficients 0.997 to 1.000 in 12 views of 54 corners, and held-out views gain less than that.
"""

_FOLD_SETTLED = 1e-7
"""Held-out errors are compared to a thousandth, not to their last digit."""

_EXACT_PX = 1e-6
"""RMS below which corners have no errors to compare."""


@dataclass(frozen=True, eq=False)
class _Candidate:
    lens: Lens
    fit: Refined | None
    view_rms_px: FloatArray | None
    note: str


def choose_lens(
    seen: Sequence[Seen],
    boards: tuple[FloatArray, ...],
    size: tuple[int, int],
    lenses: Sequence[Lens] = tuple(LENSES.values()),
) -> tuple[Lens, tuple[ModelTrial, ...]]:
    """Choose the lens model of one camera.

    Parameters
    ----------
    seen : sequence of Seen
        All that the camera saw, one a view.
    boards : tuple of ndarray of shape (K, 3)
    size : (width, height)
    lenses : sequence of Lens
        Those to choose from, one at least.

    Returns
    -------
    Lens, tuple of ModelTrial
        The model and all that were tried, from simple to rich.

    Raises
    ------
    CalibrationError
        Where no model fits.
    """
    lenses = sorted(lenses, key=lambda each: each.coefficients)
    if len(seen) < _FEWEST_VIEWS:
        note = f"taken as the simplest: {len(seen)} views are too few to choose by, expected {_FEWEST_VIEWS} or more"
        return lenses[0], (_only(lenses[0], note),)
    candidates = _held_out(_fitted(alone_in_order(seen), boards, size, lenses), alone_in_order(seen))
    able = [c for c in candidates if c.view_rms_px is not None]
    if not able:
        reasons = "; ".join(f"{c.lens.name}: {c.note}" for c in candidates)
        raise CalibrationError(
            f"no lens model fits the {len(seen)} views ({reasons}); expected views from different sides and distances"
        )
    best = min(able, key=_mean)
    chosen = next(c for c in able if _as_good(c, best))
    return chosen.lens, tuple(_trial(c, best, chosen) for c in candidates)


def _only(lens: Lens, note: str) -> ModelTrial:
    parameters = 4 + lens.coefficients
    return ModelTrial(name=lens.name, held_out_rms_px=float("nan"), parameters=parameters, chosen=True, note=note)


def _fitted(
    seen: list[Seen], boards: tuple[FloatArray, ...], size: tuple[int, int], lenses: Sequence[Lens]
) -> list[_Candidate]:
    """Fit every model to all views; a richer pinhole model starts from the one before it."""
    candidates = []
    previous: State | None = None
    for lens in lenses:
        try:
            warm = previous is not None and lens.model == "pinhole"
            fit = refine(seen, with_lens(previous, lens)) if warm and previous else fit_camera(seen, boards, size, lens)
        except CalibrationError as exc:
            candidates.append(_Candidate(lens, None, None, f"cannot be fitted: {exc}"))
            continue
        previous = fit.state if lens.model == "pinhole" else previous
        lost = fold_among(fit.state.cameras[0], [s.pixels for s in seen])
        note = f"not one to one in {lost:.1%} of where corners were seen" if lost else ""
        candidates.append(_Candidate(lens, None if lost else fit, None, note))
    return candidates


def _held_out(candidates: Sequence[_Candidate], seen: Sequence[Seen]) -> list[_Candidate]:
    least = min((c.fit.rms_px for c in candidates if c.fit), default=0.0)
    tried: list[_Candidate] = []
    for candidate in candidates:
        if candidate.fit is None:
            tried.append(candidate)
        elif candidate.fit.rms_px > _HOPELESS * least:
            tried.append(replace(candidate, note=f"fits all views to {candidate.fit.rms_px:.2f} px only"))
        elif simpler := next((c for c in tried if _makes_idle(c, candidate)), None):
            tried.append(replace(candidate, note=f"not held out: fits all views no better than {simpler.lens.name}"))
        else:
            tried.append(replace(candidate, view_rms_px=fold_errors(seen, candidate.fit.state)))
    return tried


def _makes_idle(simpler: _Candidate, richer: _Candidate) -> bool:
    """Tell whether one pinhole model, held out before, fits all views as well as one of more coefficients, which contains it.

    By the ratio in each view: of the RMS of all, one blurred view may make up most.
    """
    if simpler.fit is None or richer.fit is None or simpler.view_rms_px is None:
        return False
    if not simpler.lens.model == richer.lens.model == "pinhole":
        return False
    by_richer, by_simpler = (
        np.array([max(rms(r), _EXACT_PX) for r in fit.residuals_px]) for fit in (richer.fit, simpler.fit)
    )
    return float((by_richer / by_simpler).mean()) > _IDLE


def fold_errors(seen: Sequence[Seen], state: State, folds: int = _FOLDS) -> FloatArray:
    """Give each view's RMS, shape (M,), in pixels, by the camera fitted to the views of the other folds.

    The fits start at ``state``, that of all views, and end where their own views lead them.
    """
    number = np.arange(len(seen)) % folds
    errors = np.empty(len(seen))
    for fold in range(min(folds, len(seen))):
        inside, outside = np.flatnonzero(number != fold), np.flatnonzero(number == fold)
        trained = refine(*_part(seen, state, inside), settled=_FOLD_SETTLED)
        left, placed = _part(seen, replace(state, cameras=trained.state.cameras), outside)
        errors[outside] = [rms(r) for r in refine(left, placed, held=("a",), settled=_FOLD_SETTLED).residuals_px]
    return errors


def _part(seen: Sequence[Seen], state: State, chosen: np.ndarray) -> tuple[list[Seen], State]:
    part = replace(state, placings=state.placings[chosen], owners=state.owners[chosen])
    return alone_in_order([seen[index] for index in chosen]), part


def _errors(candidate: _Candidate) -> FloatArray:
    return np.array([np.nan]) if candidate.view_rms_px is None else candidate.view_rms_px


def _mean(candidate: _Candidate) -> float:
    return float(_errors(candidate).mean())


def _excess(candidate: _Candidate, best: _Candidate) -> float:
    return _mean(candidate) - _mean(best)


def _as_good(candidate: _Candidate, best: _Candidate) -> bool:
    likely = _STANDARD_ERRORS * _standard_error(candidate, best)
    return _excess(candidate, best) <= min(likely, _LARGEST_EXCESS * _mean(best))


def _standard_error(candidate: _Candidate, best: _Candidate) -> float:
    difference = _errors(candidate) - _errors(best)
    return float(difference.std(ddof=1) / np.sqrt(len(difference)))


def _trial(candidate: _Candidate, best: _Candidate, chosen: _Candidate) -> ModelTrial:
    errors = _errors(candidate)
    return ModelTrial(
        name=candidate.lens.name,
        held_out_rms_px=float(np.sqrt((errors**2).mean())),
        parameters=4 + candidate.lens.coefficients,
        chosen=candidate is chosen,
        note=(candidate.note or _verdict(candidate, best, chosen)) + _remark(candidate),
    )


def _remark(candidate: _Candidate) -> str:
    lost = fold_in_picture(candidate.fit.state.cameras[0]) if candidate.fit else 0.0
    return f"; no ray in {lost:.2%} of the picture, beyond all corners" if lost else ""


def _verdict(candidate: _Candidate, best: _Candidate, chosen: _Candidate) -> str:
    excess, error = _excess(candidate, best), _standard_error(candidate, best)
    if candidate is chosen:
        return (
            "chosen: the best"
            if candidate is best
            else f"chosen: the simplest within two standard errors ({error:.4f} px)"
        )
    if candidate is best:
        return "the best, but by less than two standard errors and a tenth"
    return f"{excess:.4f} px above the best, standard error {error:.4f} px"
