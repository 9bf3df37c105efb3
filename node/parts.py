"""The parts of a node, made of its configuration: engine, feed, recording, and what is said of a frame."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from dataclasses import replace

from ..calib import Rig
from .camera_report import CameraState
from .config import NodeConfig
from .engine import DepthEngine
from .errors import UNKNOWN_SCALE, ConfigError, NodeError
from .feed import Feed
from .frame import DepthFrame
from .kept_config import without_passwords
from .recording import TOLD_TO_STOP, Recorder
from .recording_format import Heading
from .shot import CameraName, Shot
from .sources import SourceKind
from .steering import Engine, Equipment
from .trust import TrustConfig, judge, skew_depth_error_m, skew_reasons


def depth_engine(rig: Rig, config: NodeConfig) -> Engine:
    """Make the engine that the configuration asks for.

    Raises
    ------
    NodeError
        Where the rig's scale is not known, so that there would be no metres to publish; or as the engine says.
    """
    if not rig.scale_known:
        raise NodeError(f"the depth of {config.rig} would not be in metres, since {UNKNOWN_SCALE}")
    return DepthEngine(
        rig,
        near=config.volume.near_m,
        far=config.volume.far_m,
        settings=config.match.settings,
        resolution=config.match.resolution,
    )


def judged(frame: DepthFrame, baseline_m: float, limits: TrustConfig) -> DepthFrame:
    """Say of a frame how far it may be trusted."""
    error_m = skew_depth_error_m(frame.skew_ns, limits.scene_speed_m_s, frame.far_m, baseline_m)
    return replace(
        frame,
        skew_depth_error_m=error_m,
        scene_speed_m_s=limits.scene_speed_m_s,
        trust=judge(skew_reasons(error_m, limits)),
    )


def equipment(rig: Rig, config: NodeConfig, make_engine: Callable[[Rig, NodeConfig], Engine]) -> Equipment:
    """Make what a rig comes to in a node of this configuration.

    Raises
    ------
    NodeError
        Where the rig's scale is not known, or it does not see the volume.
    """
    return Equipment(
        make_engine(rig, config), rig.fingerprint, lambda frame: judged(frame, rig.baseline_m, config.trust)
    )


def check_same_cameras(rig: Rig, running: Rig) -> None:
    """Refuse a rig of other image sizes than those that the cameras were found to give.

    Raises
    ------
    NodeError
        Where a size differs.
    """
    for name, camera, expected in (("A", rig.a, running.a), ("B", rig.b, running.b)):
        given, wanted = (camera.width, camera.height), (expected.width, expected.height)
        if given != wanted:
            raise NodeError(
                f"the rig's camera {name} gives {given[0]} x {given[1]} pixels; expected {wanted[0]} x {wanted[1]} as the "
                "running node's: solve a rig for these cameras at this size, or start the node anew"
            )


def make_feed(
    config: NodeConfig,
    kinds: Mapping[str, SourceKind],
    rig: Rig,
    log: logging.Logger,
    tap: Callable[[Shot], None] = lambda _: None,
) -> Feed:
    """Make the feed that the configuration asks for, of cameras as large as the rig's; ``tap`` sees every image.

    Raises
    ------
    ConfigError
        As the sources say.
    """

    def tell(camera: CameraName, state: CameraState, detail: str) -> None:
        level = logging.INFO if state in ("opening", "delivering", "ended") else logging.WARNING
        log.log(level, "camera %s: %s%s", camera.upper(), state, f": {detail}" if detail else "")

    return Feed(
        config.sources.make(kinds),
        config.sources.pairing,
        config.sources.watch,
        sizes={"a": (rig.a.width, rig.a.height), "b": (rig.b.width, rig.b.height)},
        tell=tell,
        tap=tap,
    )


def begin_recording(config: NodeConfig, session: str, log: logging.Logger) -> Recorder:
    """Begin a recording as the configuration says, with rig and configuration inside.

    Raises
    ------
    NodeError
        Where it says nothing of recording, or no file can be made.
    CalibrationError
        Where the rig file cannot be read.
    """
    if config.record is None:
        raise ConfigError("record is missing; expected a table [record]: give it one")
    heading = Heading(
        session=session,
        rig=config.rig.read_text(encoding="utf-8") if config.rig.is_file() else None,
        config=without_passwords(config.text) if config.text else None,
    )
    recorder = Recorder(
        config.record,
        config.base,
        heading,
        on_stop=lambda reason: log.log(
            logging.INFO if reason == TOLD_TO_STOP else logging.WARNING, "recording ended: %s", reason
        ),
    )
    log.info("recording to %s", recorder.status.file)
    return recorder
