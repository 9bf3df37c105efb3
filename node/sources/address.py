"""URLs of streams: told from files' paths, checked, and shown without the passwords in them."""

from __future__ import annotations

import re
from urllib.parse import SplitResult, urlsplit

from ..errors import ConfigError

SCHEMES = ("http", "https", "rtsp")
_PORTS = {"http": 80, "https": 443, "rtsp": 554}
_SECRET = re.compile(r"(?i)([?&;][^=&;]*(?:pass|pwd|user|login|token|key|secret|auth|sig)[^=&;]*=)[^&;]*")
_EXPECTED = 'expected an address such as "rtsp://192.168.0.20/stream1", or the path of a video file'


def is_stream(url: str) -> bool:
    """Whether it names a stream and no file."""
    return "://" in url


def shown(url: str) -> str:
    """Write a URL so that it may be shown: all up to its last @ is gone, and what its query calls a secret is ***.

    Also takes what was meant for a URL: where a colon stands before an @, a password may stand between them.
    """
    before, at, after = url.rpartition("@")
    scheme, mark, _ = before.partition("://")
    if at and ":" in before:
        url = (scheme + mark if mark else "") + after
    return _SECRET.sub(r"\1***", url)


def checked(url: str, key: str) -> str:
    """Check a stream's URL, and give the one spelling under which it is known: no user, no password, port named.

    Parameters
    ----------
    url : str
        A URL.
    key : str
        Where it stands in the configuration, for messages.

    Raises
    ------
    ConfigError
        Where it is no URL of a stream; shows no password.
    """
    parts = _split(url, key)
    if parts.scheme not in SCHEMES:
        raise ConfigError(
            f'{key} is "{shown(url)}"; expected one that begins with {", ".join(SCHEMES)}, or a file\'s path'
        )
    if "@" in url[url.index("://") + 3 + len(parts.netloc) :]:
        # Read as it stands, a password with a slash in it would be taken for a path, and shown.
        raise ConfigError(
            f'{key} is "{shown(url)}" with an @ after its host; expected one between user:password and host alone: write '
            "/ ? # @ in a password as %2F %3F %23 %40, and an @ in a path as %40"
        )
    host = f"[{parts.hostname}]" if ":" in str(parts.hostname) else parts.hostname
    query = f"?{parts.query}" if parts.query else ""
    return shown(f"{parts.scheme}://{host}:{parts.port or _PORTS[parts.scheme]}{parts.path or '/'}{query}")


def _split(url: str, key: str) -> SplitResult:
    try:
        parts = urlsplit(url)
        good = bool(parts.hostname) and parts.port != 0 and not re.search(r"[\s\x00-\x1f\x7f]", url)
    except ValueError:  # brackets that do not match, or a port that is no number
        good = False
    if not good:  # and not from the other error, whose words may hold a password
        raise ConfigError(f'{key} is "{shown(url)}", which is no URL; {_EXPECTED}')
    return parts
