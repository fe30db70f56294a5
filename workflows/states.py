"""Declared files must stay what they were when the workflow was judged, to the end of the run.

A map is known by inode, size and modification time, a region from outside by its bytes. The
study table is known by its bytes since it was read.
"""

from __future__ import annotations

import os

from ..nodes.errors import Refused
from .digests import digest
from .study import Study


class States:
    """What declared files were like when they were first looked at.

    Parameters
    ----------
    study : Study
    """

    def __init__(self, study: Study) -> None:
        self.study = study
        self._first: dict[str, object] = {}

    def look(self, path: str) -> None:
        """Look at a file.

        Raises
        ------
        Refused
            When it is not what it was.
        """
        full = self.study.full(path)
        now = self._state(full)
        if self._first.setdefault(full, now) != now:
            raise Refused(f"{self.study.relative(path)} was changed while the workflow ran")

    def look_again(self) -> None:
        """Look at all files that were looked at, and at the table.

        Raises
        ------
        Refused
        """
        for path in self._first:
            self.look(path)
        for path, was in self.study.read_as.items():
            if not os.path.isfile(path) or digest(path) != was:
                raise Refused(
                    f"{self.study.relative(path)} was changed after it was read; run again, so "
                    "that the verdicts are about what it says now"
                )

    def _state(self, full: str) -> object:
        if not os.path.exists(full):
            return None
        status = os.stat(full)
        # A file's bytes can be replaced and its time set back; for a few masks, reading is cheap.
        if self.study.is_origin(full):
            return digest(full)
        return (status.st_ino, status.st_size, status.st_mtime_ns)
