"""Content digests of files, each computed once.

A digest is remembered by path, inode, size and the times (ns) of modification and of change, so
that weeks of preprocessing need not be read again to be recognised.
"""

from __future__ import annotations

import hashlib
from pathlib import Path

_known: dict[tuple[str, int, int, int, int], str] = {}


def digest(path: str | Path) -> str:
    """The SHA-256 of a file's bytes, in hexadecimal."""
    status = Path(path).stat()
    # The time of change tells when somebody has set the other one back.
    times = (status.st_mtime_ns, status.st_ctime_ns)
    key = (str(path), status.st_ino, status.st_size, *times)
    if key not in _known:
        with Path(path).open("rb") as stream:
            _known[key] = hashlib.file_digest(stream, "sha256").hexdigest()
    return _known[key]


def digest_text(text: str) -> str:
    """The SHA-256 of a text in UTF-8."""
    return hashlib.sha256(text.encode()).hexdigest()
