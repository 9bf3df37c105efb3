"""The table of image sources that the command line offers: the node's own, and the virtual cell."""

from __future__ import annotations

from ..node.sources import BUILT_IN, SourceKind
from .virtual_source import VirtualSettings, VirtualSource

SOURCES = {**BUILT_IN, "virtual": SourceKind(VirtualSettings, VirtualSource, both=True)}
"""What ``[source] kind`` of a configuration may name."""
