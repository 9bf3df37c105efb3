"""All that happens to a frame, from a pair of images to a robot program. Imports nothing of the tools."""

from .engine import DepthEngine
from .errors import AccessError, ConfigError, NodeError, NoFrameError, PairError, SourceError, VolumeError, WireError
from .frame import DepthFrame
from .keys import ClientKeys
from .match import MatchSettings
from .status import NodeStatus
from .subscriber import DepthSubscriber, StatusSubscriber

__all__ = [
    "AccessError",
    "ClientKeys",
    "ConfigError",
    "DepthEngine",
    "DepthFrame",
    "DepthSubscriber",
    "MatchSettings",
    "NoFrameError",
    "NodeError",
    "NodeStatus",
    "PairError",
    "SourceError",
    "StatusSubscriber",
    "VolumeError",
    "WireError",
]
