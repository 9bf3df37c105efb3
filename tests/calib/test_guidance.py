"""What to show next is said in words, from boards whose pose is known."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import Camera
from skewline.calib.guidance import (
    GRID,
    SIZE_NAMES,
    TILTS,
    Account,
    Showing,
    StillWatch,
    board_normal,
    next_view,
    showing_of,
)
from skewline.calib.targets import Chessboard, Sighting

BOARD = Chessboard(columns=9, rows=6, square_m=0.03)
CAMERA = Camera(width=1280, height=960, K=[[1280, 0, 640], [0, 1280, 480], [0, 0, 1]])
CENTRED = BOARD.points - BOARD.points.mean(axis=0)


def seen(rotation: Rotation, place: tuple[float, float, float]) -> Sighting:
    return Sighting(ids=np.arange(54), pixels=CAMERA.project(rotation.apply(CENTRED) + np.array(place)))


def turned(axis: str, degrees: float) -> Rotation:
    return Rotation.from_euler(axis, degrees, degrees=True)


@pytest.mark.parametrize("tilt", [(0, 0), (25, 0), (0, -30), (20, 35), (-40, 10)])
def test_the_normal_of_a_board_comes_out_of_its_picture(tilt: tuple[float, float]) -> None:
    rotation = Rotation.from_euler("xy", tilt, degrees=True)
    # With the very focal length that is assumed, the homography gives the exact normal.
    normal = board_normal(BOARD.points, seen(rotation, (0.05, -0.03, 0.8)).pixels, (1280, 960))

    assert normal == pytest.approx(rotation.apply([0, 0, -1]), abs=1e-6)


@pytest.mark.parametrize(
    ("rotation", "name"),
    [
        (Rotation.identity(), "flat"),
        # A turn about y that takes +x to +z moves the right side away: by the right-hand rule a negative angle.
        (turned("y", -30), "right side away"),
        (turned("y", 30), "left side away"),
        # y points down: a positive turn about x takes +y to +z, the bottom away.
        (turned("x", 30), "bottom away"),
        (turned("x", -30), "top away"),
    ],
)
def test_a_tilt_is_named_by_the_side_that_is_further_away(rotation: Rotation, name: str) -> None:
    points = rotation.apply(CENTRED)
    if name != "flat":
        side = {"right": points[CENTRED[:, 0] > 0.1], "left": points[CENTRED[:, 0] < -0.1]}
        side |= {"bottom": points[CENTRED[:, 1] > 0.07], "top": points[CENTRED[:, 1] < -0.07]}
        assert side[name.split()[0]][:, 2].mean() > 0.02  # the name is true of the points

    assert showing_of(BOARD, seen(rotation, (0, 0, 0.8)), CAMERA.size).tilts == {name}


@pytest.mark.parametrize(("distance_m", "size"), [(0.45, "near"), (0.7, "middle"), (1.5, "far")])
def test_size_is_judged_by_the_share_of_the_picture(distance_m: float, size: str) -> None:
    # The board is 0.24 m wide: of a picture as wide as the focal length it fills 0.24 m / distance.
    assert showing_of(BOARD, seen(Rotation.identity(), (0, 0, distance_m)), CAMERA.size).size == size


def test_cells_of_the_picture_that_points_reach_are_counted_once() -> None:
    corner = showing_of(BOARD, seen(Rotation.identity(), (-0.3, -0.2, 0.9)), CAMERA.size)
    account = Account().with_(corner)

    assert corner.cells <= {(x, y) for x in range(3) for y in range(2)}
    assert account.news(corner) == 0
    assert account.map[0].startswith("#")
    assert account.map[-1] == "." * GRID[0]
    assert 0 < account.share < 0.3


def everything() -> Account:
    cells = frozenset((x, y) for x in range(GRID[0]) for y in range(GRID[1]))
    return Account(cells, frozenset(SIZE_NAMES), frozenset(TILTS))


def test_the_next_view_asks_for_what_neither_camera_has_seen_and_then_for_nothing() -> None:
    nothing, whole = Account(), everything()
    lacks_tilt = Account(whole.cells, whole.sizes, whole.tilts - {"top away"})
    lacks_near = Account(whole.cells, whole.sizes - {"near"}, whole.tilts)
    lacks_corner = Account(frozenset(c for c in whole.cells if c[0] > 2 or c[1] > 1), whole.sizes, whole.tilts)

    assert "square to the cameras" in str(next_view([("A", nothing), ("B", nothing)]))
    assert "top away" in str(next_view([("A", lacks_tilt), ("B", lacks_tilt)]))
    assert "nearer" in str(next_view([("A", lacks_near), ("B", lacks_near)]))
    assert "upper left of camera B's picture" in str(next_view([("A", whole), ("B", lacks_corner)]))
    assert next_view([("A", whole), ("B", whole)]) is None


def test_following_the_advice_ends() -> None:
    accounts = {"A": Account(), "B": Account()}
    rng = np.random.default_rng(0)
    for _ in range(400):
        if next_view(list(accounts.items())) is None:
            break
        tilt = Rotation.from_euler("xy", rng.uniform(-35, 35, 2), degrees=True)
        place = (rng.uniform(-0.35, 0.35), rng.uniform(-0.25, 0.25), rng.uniform(0.5, 1.4))
        showing = showing_of(BOARD, seen(tilt, place), CAMERA.size)
        accounts = {name: account.with_(showing) for name, account in accounts.items()}

    assert next_view(list(accounts.items())) is None


def test_a_showing_that_adds_nothing_is_no_news() -> None:
    showing = Showing(frozenset({(1, 1)}), "middle", frozenset({"flat"}))

    assert Account().news(showing) == 3
    assert Account().with_(showing).news(showing) == 0


def test_a_board_is_still_once_it_has_not_moved_for_long_enough() -> None:
    watch = StillWatch(1280, hold_s=0.5)
    rng = np.random.default_rng(1)

    def frame(number: int, shift_px: float) -> bool:
        one = seen(Rotation.identity(), (0, 0, 0.8))
        noisy = Sighting(ids=one.ids, pixels=one.pixels + shift_px + rng.normal(0, 0.05, one.pixels.shape))
        return watch.still(round(number * 1e8), noisy, noisy)

    assert not any(frame(number, shift_px=2.0 * number) for number in range(10))  # it wanders
    assert [frame(10 + number, shift_px=100.0) for number in range(8)] == [False] * 5 + [True] * 3
    assert not frame(18, shift_px=101.0)  # knocked
    assert not watch.still(round(19e8), None, None)  # taken away


def test_a_board_that_one_camera_sees_still_and_the_other_does_not_is_not_still() -> None:
    watch = StillWatch(1280, hold_s=0.1)
    one = seen(Rotation.identity(), (0, 0, 0.8))

    for number in range(6):
        other = Sighting(ids=one.ids, pixels=one.pixels + 3.0 * number)
        assert not watch.still(number * 100_000_000, one, other)
