"""The ledger: an append-only file of what was declared, made and looked at, and in which order.

One JSON object a line. ``entry`` is the SHA-256 of the rest of the line's raw bytes, ``parents``
names the entries that were last when it was written: usually one; none for the first; two or
more where branches of a repository were merged. A changed byte is so found in any line, and a
removed, inserted or moved line by the parents. What follows the last line end is a torn tail:
a write that was cut off. It is reported, and the next append takes it away.

Only the process that drives a run writes, under a lock; what is written is on the disk before
the run goes on. Times are in the ledger alone: nothing of them may reach a run's outputs.

What no chain can show is that all of it was written again. Whoever holds an earlier head digest
(a commit, a deposit) can: `Chain.heads` must then have it among their ancestors.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout

from ..nodes.errors import InputError, SequesterError

SUFFIX = ".ledger.jsonl"
DECLARATION, UNITS, ARTEFACT = "declaration", "units", "artefact"
WAIVER, LOOK, MERGE = "waiver", "look", "merge"
_START, _DIGITS, _STOP = b'{"entry":"', 64, b'",'
_HEAD = len(_START) + _DIGITS + len(_STOP)
_WAIT_S, _LOOK_S = 60, 0.005  # how long and how often the lock is asked for
_SHORTEST = 12  # digits of a digest that name an entry


def ledger_path(study_toml: Path) -> Path:
    """Where the ledger of a study file lies: beside it.

    Examples
    --------
    >>> str(ledger_path(Path("garden/STUDY.toml")))
    'garden/STUDY.ledger.jsonl'
    """
    return study_toml.with_name(f"{study_toml.stem}{SUFFIX}")


class Unjoined(SequesterError):
    """Branches of a ledger were merged, and nothing has been written since to join them."""

    exit_code = 4


def deposited_digest(text: str) -> str:
    """A digest that was noted, as ledgers have it.

    Raises
    ------
    InputError
        When it is none.

    Examples
    --------
    >>> deposited_digest(" 0123456789ABcd ")
    '0123456789abcd'
    """
    made = text.strip().lower()
    if not re.fullmatch(rf"[0-9a-f]{{{_SHORTEST},{_DIGITS}}}", made):
        raise InputError(
            "no digest",
            where="--deposited",
            expected=f"a head as verify prints it: {_DIGITS} hexadecimal digits, or the first "
            f"{_SHORTEST} of them or more",
            got=repr(text),
        )
    return made


@dataclass(frozen=True)
class Entry:
    """One line of a ledger.

    Parameters
    ----------
    digest : str
        SHA-256 of the line's bytes behind it.
    parents : tuple of str
        Digests of the entries that were last when it was written.
    kind, time : str
    body : mapping
        Everything else.
    number : int
        Its line, from 1.
    """

    digest: str
    parents: tuple[str, ...]
    kind: str
    time: str
    body: Mapping[str, Any]
    number: int


class Chain:
    """The entries of a ledger as read, and what is wrong with them.

    Parameters
    ----------
    blob : bytes
        The file.

    Attributes
    ----------
    entries : list of Entry
    faults : list of str
        Each names its line; a torn tail is none.
    torn : int
        Bytes behind the last line end.
    length : int
        Bytes up to it.
    """

    def __init__(self, blob: bytes = b"") -> None:
        self.entries: list[Entry] = []
        self.faults: list[str] = []
        self.torn = self.length = 0
        self.last = b""
        self._number: dict[str, int] = {}
        self._heads: dict[str, None] = {}
        self._before: list[int] = []
        self.feed(blob)

    def feed(self, blob: bytes) -> None:
        """Read on: what follows the lines that are known."""
        *lines, rest = blob.split(b"\n")
        for line in lines:
            self._line(line)
            self.last = line + b"\n"
        self.length += len(blob) - len(rest)
        self.torn = len(rest)

    def _line(self, line: bytes) -> None:
        number = len(self.entries) + len(self.faults) + 1
        made = _parsed(line, number)
        if isinstance(made, str):
            self.faults.append(f"line {number}: {made}")
            return
        absent = [parent for parent in made.parents if parent not in self._number]
        if made.digest in self._number:
            self.faults.append(f"line {number}: the same entry as line {self._number[made.digest]}")
        elif absent:
            self.faults.append(f"line {number}: follows entry {absent[0][:12]}, which is not above")
        else:
            before = 0
            for parent in made.parents:
                at = self._number[parent]
                before |= self._before[at] | 1 << at
                self._heads.pop(parent, None)
            self._number[made.digest] = len(self.entries)
            self._heads[made.digest] = None
            self._before.append(before)
            self.entries.append(made)

    @property
    def heads(self) -> tuple[str, ...]:
        """The entries that none follows: one, unless branches wait to be joined."""
        return tuple(self._heads)

    def of_kind(self, kind: str) -> list[Entry]:
        """The entries of a kind, in the order of the file."""
        return [entry for entry in self.entries if entry.kind == kind]

    @property
    def unjoined(self) -> str:
        """That branches which were merged wait to be joined, which is no fault; "" if none do."""
        if len(self.heads) < 2 or self.faults:
            return ""
        ends = " and ".join(head[:_SHORTEST] for head in self.heads)
        return f"branches end at {ends}: the next run or declare joins them"

    def problems(self, deposited: str = "") -> list[str]:
        """Everything that is wrong: faults, and a head that is gone.

        Parameters
        ----------
        deposited : str
            The digest (or its first 12 digits or more) of a head that was noted earlier.
        """
        found = list(self.faults)
        noted = deposited_digest(deposited) if deposited else ""
        if noted and not any(entry.digest.startswith(noted) for entry in self.entries):
            found.append(f"no entry {deposited}: what was there then was written again")
        return found

    def __contains__(self, entry: Entry) -> bool:
        return entry.digest in self._number

    def precedes(self, one: Entry, other: Entry) -> bool:
        """Whether one entry was in the ledger when the other was written."""
        at = self._number[one.digest]
        return bool(self._before[self._number[other.digest]] >> at & 1)


class Shelf:
    """A ledger with those that lie beside it: another study file's, a copy's, a script's.

    Data of one folder may be looked at by any of them. Within a ledger the order of entries is
    that of its chain; between two of them only the clock says what came first, and what it leaves
    open did not. Entries that two ledgers share, one being a copy of the other, count once.

    Parameters
    ----------
    own : Chain
    beside : mapping of str to Chain
        By the names of their files.

    Attributes
    ----------
    entries : list of Entry
        The own ones first.
    """

    def __init__(self, own: Chain, beside: Mapping[str, Chain] | None = None) -> None:
        self.own, self._chains = own, {"": own, **(beside or {})}
        of_digest: dict[str, Entry] = {}
        self._name: dict[str, str] = {}
        for name, chain in self._chains.items():
            for entry in chain.entries:
                of_digest.setdefault(entry.digest, entry)
                self._name.setdefault(entry.digest, name)
        self.entries = list(of_digest.values())

    @property
    def beside(self) -> tuple[str, ...]:
        """The names of the ledgers beside the own one."""
        return tuple(self._chains)[1:]

    def of_kind(self, kind: str) -> list[Entry]:
        """The entries of a kind."""
        return [entry for entry in self.entries if entry.kind == kind]

    def name_of(self, entry: Entry) -> str:
        """The ledger beside the own one that an entry is in; "" for the own."""
        return self._name[entry.digest]

    def precedes(self, one: Entry, other: Entry) -> bool:
        """Whether one entry was there when the other was written, for all that can be known."""
        chain = self._of_both(one, other)
        return one.time < other.time if chain is None else chain.precedes(one, other)

    def may_know(self, one: Entry, other: Entry) -> bool:
        """Whether the other entry may have been written with the one at hand."""
        if self._of_both(one, other) is None:
            return not self.precedes(other, one)
        return self.precedes(one, other)

    def _of_both(self, one: Entry, other: Entry) -> Chain | None:
        return next((c for c in self._chains.values() if one in c and other in c), None)


def shelf_of(path: Path, own: Chain) -> Shelf:
    """A ledger with those that lie beside it in its folder.

    Parameters
    ----------
    path : Path
        Where the own ledger lies; it need not exist.
    own : Chain

    Raises
    ------
    InputError
        When one of them was changed or cannot be read: its looks would be counted wrongly.
    """
    found = sorted(one for one in path.absolute().parent.glob(f"*{SUFFIX}") if one.is_file())
    # What begins with a dot is a lock, or what a system keeps of a file on a foreign disk.
    others = [one for one in found if one.name != path.name and not one.name.startswith(".")]
    return Shelf(own, {one.name: Ledger(one).sound(beside=path.name) for one in others})


def _parsed(line: bytes, number: int) -> Entry | str:
    """The entry of a line, or what is wrong with it."""
    stated, content = line[len(_START) : _HEAD - len(_STOP)], line[_HEAD:]
    if line[: len(_START)] != _START or line[_HEAD - len(_STOP) : _HEAD] != _STOP:
        return "not an entry of a ledger"
    if hashlib.sha256(content).hexdigest().encode() != stated:
        return "its bytes are not those that were written"
    try:
        body = json.loads(b"{" + content)
        parents, kind, time = (body.pop(name) for name in ("parents", "kind", "time"))
    except (ValueError, KeyError):
        return "its digest is right, but it is no entry of a ledger"
    return Entry(stated.decode(), tuple(map(str, parents)), str(kind), str(time), body, number)


def _lines(bodies: Sequence[Mapping[str, Any]], parents: tuple[str, ...]) -> bytes:
    """The lines of entries, each following the one before; the first follows `parents`."""
    blob, now = b"", datetime.now(UTC).isoformat(timespec="seconds")
    for body in bodies:
        kind, rest = body["kind"], {k: v for k, v in body.items() if k != "kind"}
        whole = {"parents": list(parents), "kind": kind, "time": now, **rest}
        content = json.dumps(whole, separators=(",", ":")).encode()[1:]
        digest = hashlib.sha256(content).hexdigest()
        blob += _START + digest.encode() + _STOP + content + b"\n"
        parents = (digest,)
    return blob


class Ledger:
    """A ledger file.

    Parameters
    ----------
    path : Path
        Need not exist: an absent file is a ledger without entries.

    Examples
    --------
    >>> import tempfile
    >>> folder = tempfile.TemporaryDirectory()
    >>> ledger = Ledger(Path(folder.name) / "STUDY.ledger.jsonl")
    >>> made = ledger.append([{"kind": "waiver", "says": "these subjects"}])
    >>> ledger.chain().heads == (made[0].digest,)
    True
    >>> folder.cleanup()
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._chain = Chain()
        self._inode = -1

    def chain(self) -> Chain:
        """The file as it is now, faults included."""
        try:
            with self.path.open("rb") as stream:
                self._read(stream)
        except FileNotFoundError:
            self._chain, self._inode = Chain(), -1
        except OSError as error:
            raise self._unusable(error) from error
        return self._chain

    def sound(self, beside: str = "") -> Chain:
        """The file as it is now.

        Parameters
        ----------
        beside : str
            The ledger that it lies beside, when it is not the study's own.

        Raises
        ------
        InputError
            When it was changed.
        """
        chain = self.chain()
        if chain.faults:
            moved = f", or move it out of the folder of {beside}, whose looks it tells of"
            raise InputError(
                "a ledger beside the study's own was changed"
                if beside
                else "the ledger was changed",
                where=str(self.path),
                expected="the lines as sequester wrote them, and in their order",
                got=chain.faults[0]
                + f" (and {len(chain.faults) - 1} more)" * (len(chain.faults) > 1),
                remedy=f"take it back from a copy or a commit{moved if beside else ''}",
            )
        return chain

    def check_writable(self) -> None:
        """Raise an `InputError` when entries could not be written; writes nothing."""
        there = self.path if self.path.exists() else self.path.parent
        if not (os.access(self.path.parent, os.W_OK) and os.access(there, os.W_OK)):
            raise InputError(
                "the ledger cannot be written",
                where=str(self.path),
                expected="a folder in which the study's ledger can lie beside its study file",
                got="no permission to write",
                remedy="copy or link the study into a folder of your own",
            )

    def append(self, bodies: Sequence[Mapping[str, Any]]) -> list[Entry]:
        """Write entries behind the last one, to the disk; open branches are joined first.

        Parameters
        ----------
        bodies : sequence of mapping
            Each with its ``kind``, and plain types for JSON.

        Returns
        -------
        list of Entry
            As written, a merge not among them.

        Raises
        ------
        InputError
            When the ledger was changed, is in use, or cannot be written.
        """
        return self.extend(lambda chain: bodies)

    def extend(self, make: Callable[[Chain], Sequence[Mapping[str, Any]]]) -> list[Entry]:
        """Like `append`, for entries that depend on what is there: nobody writes in between."""
        with self._locked():
            chain = self.sound()
            bodies = make(chain)
            if not bodies and len(chain.heads) < 2:
                return []
            if len(chain.heads) > 1:
                bodies = [{"kind": MERGE}, *bodies]
            try:
                self._write(_lines(bodies, chain.heads), chain.length)
            except OSError as error:
                raise self._unusable(error) from error
            written = self.sound().entries[-len(bodies) :]
        return [entry for entry in written if entry.kind != MERGE]

    def _write(self, blob: bytes, length: int) -> None:
        new = not self.path.exists()
        with self.path.open("ab") as stream:
            stream.truncate(length)  # a torn tail goes
            stream.write(blob)
            stream.flush()
            os.fsync(stream.fileno())
        if new:  # its name must be on the disk too
            folder = os.open(self.path.parent, os.O_RDONLY)
            try:
                os.fsync(folder)
            finally:
                os.close(folder)

    def _read(self, stream: Any) -> None:
        """Read what is new; all of it, when the file is not the one that was read before."""
        status, known = os.fstat(stream.fileno()), self._chain
        stream.seek(max(known.length - len(known.last), 0))
        goes_on = status.st_ino == self._inode and stream.read(len(known.last)) == known.last
        if not goes_on:
            stream.seek(0)
            self._chain = Chain()
        self._inode = status.st_ino
        self._chain.feed(stream.read())

    @contextmanager
    def _locked(self) -> Iterator[None]:
        # The lock's file stays: taking it away while somebody waits for it would admit two.
        lock = FileLock(self.path.with_name(f".{self.path.name}.lock"))
        try:
            lock.acquire(timeout=_WAIT_S, poll_interval=_LOOK_S)
        except Timeout:
            raise InputError(
                "ledger in use",
                where=str(self.path),
                got=f"another process has held it for {_WAIT_S} s",
                remedy="wait for that process, or end it",
            ) from None
        except OSError as error:
            raise self._unusable(error) from error
        try:
            yield
        finally:
            lock.release()

    def _unusable(self, error: OSError) -> InputError:
        return InputError(
            "the ledger cannot be read or written",
            where=str(self.path),
            got=os.strerror(error.errno or 0),
            remedy="check the folder and its permissions",
        )
