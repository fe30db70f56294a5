"""Content digests of files, each computed once.

A digest is remembered by path, inode, size and the times (ns) of modification and of change, so
that weeks of preprocessing need not be read again to be recognised.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path

import nibabel as nib
import numpy as np

from ..nodes.images import read_map

_PIECE = 1 << 16
_PLACE_MM = 1e-3  # what tells grids apart
_known: dict[tuple[object, ...], str] = {}


def _once(what: str, path: str | Path, make: Callable[[], str]) -> str:
    """What is made of a file, made again when the file has changed."""
    status = Path(path).stat()
    # The time of change tells when somebody has set the other one back.
    times = (status.st_mtime_ns, status.st_ctime_ns)
    key = (what, str(path), status.st_ino, status.st_size, *times)
    if key not in _known:
        _known[key] = make()
    return _known[key]


def digest(path: str | Path) -> str:
    """The SHA-256 of a file's bytes, in hexadecimal."""

    def make() -> str:
        with Path(path).open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()

    return _once("bytes", path, make)


def map_digest(path: str | Path, volume: int | None = None) -> str:
    """The SHA-256 of what a map says where, whatever file holds it.

    The same for a map that is packed, stored in another type that holds its values to float32,
    one of the volumes of another file, or stored along other axes.

    Raises
    ------
    InputError
        As `read_map`.
    """

    def make() -> str:
        data, geometry = read_map(path, volume)
        turned = nib.as_closest_canonical(nib.Nifti1Image(data, geometry.affine))
        values = np.asarray(turned.dataobj, dtype="<f4") + np.float32(0)  # one zero, not two
        values[np.isnan(values)] = np.nan
        place = np.rint(turned.affine / _PLACE_MM).astype("<i8")
        said = (str(values.shape).encode(), place.tobytes(), values.tobytes())
        return hashlib.sha256(b"".join(said)).hexdigest()

    return _once(f"volume {volume}", path, make)


def fingerprint(path: str | Path) -> str:
    """What tells files apart without reading large ones: the digest of their size and some pieces.

    Those are the beginning, the middle and the end, which in a packed file has its checksum.
    """

    def make() -> str:
        size = Path(path).stat().st_size
        made = hashlib.sha256(str(size).encode())
        with Path(path).open("rb") as stream:
            for start in (0, max(_PIECE, (size - _PIECE) // 2), max(2 * _PIECE, size - _PIECE)):
                stream.seek(start)
                made.update(stream.read(_PIECE))
        return made.hexdigest()

    return _once("pieces", path, make)


def digest_text(text: str) -> str:
    """The SHA-256 of a text in UTF-8."""
    return hashlib.sha256(text.encode()).hexdigest()
