"""Where images come from: one small class each behind the one protocol of :mod:`.protocol`."""

from .folder import FolderSettings, FolderSource
from .pace import Pace
from .protocol import Source, SourceKind

BUILT_IN = {"folder": SourceKind(FolderSettings, FolderSource, both=True)}
"""Sources that need nothing but the node; the command line adds its own to a copy of this table."""

__all__ = ["BUILT_IN", "FolderSettings", "FolderSource", "Pace", "Source", "SourceKind"]
