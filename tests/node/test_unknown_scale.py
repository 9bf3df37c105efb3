"""A rig whose scale is not known gives depth in baselines, and nothing that could pass for metres."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy import ndimage
from skewline.calib import Camera, Rig
from skewline.node import DepthEngine, DepthFrame, NodeError
from skewline.node.config import load_config
from skewline.node.errors import WireError
from skewline.node.parts import depth_engine
from skewline.node.sources import BUILT_IN
from skewline.node.wire import encode_depth

BASELINE_M = 0.1
NEAR_M, FAR_M = 0.7, 1.6


def parallel_rig(*, scale_known: bool) -> Rig:
    camera = Camera(width=320, height=240, K=[[300, 0, 159.5], [0, 300, 119.5], [0, 0, 1]])
    t = [-BASELINE_M, 0, 0]
    return Rig(a=camera, b=camera, R=np.eye(3), t=t, scale_known=scale_known, T_base_a=np.eye(4))


def pair() -> tuple[np.ndarray, np.ndarray]:
    """Random texture, B's shifted by 30 pixels: 10 baselines, 1 m."""
    smooth = ndimage.gaussian_filter(np.random.default_rng(5).standard_normal((240, 400)), 1.2)
    wide = np.clip(127 + 60 * smooth / smooth.std(), 0, 255).astype(np.uint8)
    return wide[:, :320].copy(), wide[:, 30:350].copy()


@pytest.fixture(scope="module")
def in_baselines() -> DepthFrame:
    rig = parallel_rig(scale_known=False)
    return DepthEngine(rig, near=NEAR_M / BASELINE_M, far=FAR_M / BASELINE_M).compute(*pair())


def test_its_depth_is_that_in_metres_over_the_baseline(in_baselines: DepthFrame) -> None:
    in_metres = DepthEngine(parallel_rig(scale_known=True), near=NEAR_M, far=FAR_M).compute(*pair())

    assert in_metres.metric
    assert not in_baselines.metric
    assert np.nanmedian(in_baselines.depth) == pytest.approx(10, rel=2e-3)
    np.testing.assert_allclose(in_baselines.depth * BASELINE_M, in_metres.depth, rtol=1e-5)
    np.testing.assert_allclose(in_baselines.sigma * BASELINE_M, in_metres.sigma, rtol=1e-4)


def test_no_message_is_made_of_it(in_baselines: DepthFrame) -> None:
    with pytest.raises(WireError, match=r"in baselines, not metres.* solve the pose with a length"):
        encode_depth(in_baselines)


def test_no_points_in_the_robots_frame_are_made_of_it(in_baselines: DepthFrame) -> None:
    assert np.isfinite(in_baselines.points(frame="a")).any()
    with pytest.raises(NodeError, match="base frame, but they are in baselines"):
        in_baselines.points(frame="base")


def test_a_node_does_not_start_with_it(tmp_path: Path) -> None:
    rig_file, config_file = tmp_path / "bench.rig.json", tmp_path / "node.toml"
    parallel_rig(scale_known=False).save(rig_file)
    config_file.write_text(
        'rig = "bench.rig.json"\n[volume]\nnear_m = 0.7\nfar_m = 1.6\n'
        '[source]\nkind = "folder"\na = "a*.png"\nb = "b*.png"\n',
        encoding="utf-8",
    )

    with pytest.raises(NodeError, match=r"would not be in metres, since .*scale is not known.* solve the pose"):
        depth_engine(Rig.load(rig_file), load_config(config_file, BUILT_IN))
