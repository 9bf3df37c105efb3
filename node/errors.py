"""The exceptions of the node.

``NodeError``
    anything that keeps a frame from being computed, sent or received
    ├── ``ConfigError``: the configuration is at fault; says the key's path, the value and what is allowed
    ├── ``VolumeError``: the working volume cannot be seen by both cameras of this rig
    ├── ``SourceError``: a camera is not there, refuses, or fell away; it may come back, and the node tries again
    ├── ``PairError``: this one pair is unusable; the node counts it and goes on
    ├── ``AccessError``: a key is missing, wrong or not allowed; waiting does not help
    ├── ``WireError``: bytes that are no message of ours
    ├── ``NotNowError``: a request that makes no sense in the node's present state
    ├── ``RefusedError``: a node will not do what it was asked; ``kind`` says why, for programs
    ├── ``NoReplyError``: a node does not answer in time
    └── ``NoFrameError``: nothing arrived in time; the peer or the network, not the caller, is at fault
"""

from __future__ import annotations

UNKNOWN_SCALE = (
    "the rig's scale is not known; expected a rig with a known length: calibrate with a target of known size, or solve the "
    "pose with a length or the baseline given"
)


class NodeError(RuntimeError):
    """A frame cannot be computed, sent or received; the message names the remedy."""


class ConfigError(NodeError):
    """A configuration value is missing, unknown or out of range.

    Attributes
    ----------
    faults : tuple of str
        One sentence for each value that is at fault; the message has each on a line of its own.
    """

    def __init__(self, *faults: str) -> None:
        super().__init__("\n".join(faults))
        self.faults = faults


class VolumeError(NodeError):
    """The working volume cannot be covered by this rig."""


class SourceError(NodeError):
    """A camera or stream cannot be used now; the node tries again with growing pauses."""


class PairError(NodeError):
    """One pair of images cannot be used; the next one may."""


class AccessError(NodeError):
    """A key is missing, unfit or wrong, or the node does not let it in; waiting does not help."""


class WireError(NodeError):
    """Bytes that are not a message of this format and version."""


class NoFrameError(NodeError, TimeoutError):
    """No frame arrived within the time allowed."""


class NotNowError(NodeError):
    """A request makes no sense in the node's present state."""


class RefusedError(NodeError):
    """A node will not do what it was asked.

    Attributes
    ----------
    kind : str
        Why, in one or two words for programs; ``WIRE.md`` lists them.
    """

    def __init__(self, kind: str, message: str) -> None:
        super().__init__(message)
        self.kind = kind


class NoReplyError(NodeError, TimeoutError):
    """A node did not answer within the time allowed."""
