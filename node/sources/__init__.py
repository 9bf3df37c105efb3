"""Where images come from: one small class each behind the one protocol of :mod:`.protocol`."""

from .device import DeviceSettings, DeviceSource
from .folder import FolderSettings, FolderSource
from .gige import GigeSource
from .gige_settings import GigeSettings
from .pace import Pace
from .protocol import Source, SourceKind
from .recording import RecordingSettings, RecordingSource
from .socket import SocketSettings, SocketSource
from .url import UrlSettings, UrlSource

BUILT_IN = {
    "device": SourceKind(DeviceSettings, DeviceSource, both=False),
    "folder": SourceKind(FolderSettings, FolderSource, both=True),
    "gige": SourceKind(GigeSettings, GigeSource, both=False),
    "recording": SourceKind(RecordingSettings, RecordingSource, both=True),
    "socket": SourceKind(SocketSettings, SocketSource, both=False),
    "url": SourceKind(UrlSettings, UrlSource, both=False),
}
"""Sources that need nothing but the node; the command line adds its own to a copy of this table."""

__all__ = [
    "BUILT_IN",
    "DeviceSettings",
    "DeviceSource",
    "FolderSettings",
    "FolderSource",
    "GigeSettings",
    "GigeSource",
    "Pace",
    "RecordingSettings",
    "RecordingSource",
    "SocketSettings",
    "SocketSource",
    "Source",
    "SourceKind",
    "UrlSettings",
    "UrlSource",
]
