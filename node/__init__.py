"""All that happens to a frame, from a pair of images to a robot program. Imports nothing of the tools."""

from .errors import ConfigError, NodeError, NoFrameError, PairError, VolumeError, WireError
from .frame import DepthFrame

__all__ = [
    "ConfigError",
    "DepthFrame",
    "NoFrameError",
    "NodeError",
    "PairError",
    "VolumeError",
    "WireError",
]
