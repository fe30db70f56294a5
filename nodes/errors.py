"""The errors of sequester: one small tree, each with the exit code it ends a command with."""

from __future__ import annotations


class SequesterError(Exception):
    """Base of everything sequester raises on purpose."""

    exit_code = 1


class InputError(SequesterError):
    """The request or the data is wrong: says what, where, expected, got and the remedy.

    Parameters
    ----------
    what : str
        The fault in a few words.
    where : str, optional
        The file, row or setting at fault.
    expected, got : str, optional
        The two sides of the mismatch.
    remedy : str, optional
        What the user can do about it.

    Examples
    --------
    >>> print(InputError("unknown plan", where="s.toml", got="'x'", remedy="use a listed plan"))
    unknown plan (s.toml): got 'x'; use a listed plan
    """

    exit_code = 2

    def __init__(
        self, what: str, *, where: str = "", expected: str = "", got: str = "", remedy: str = ""
    ) -> None:
        self.fields = {
            "what": what,
            "where": where,
            "expected": expected,
            "got": got,
            "remedy": remedy,
        }
        head = f"{what} ({where})" if where else what
        sides = ", ".join(
            f"{word} {side}" for word, side in (("expected", expected), ("got", got)) if side
        )
        tail = "; ".join(part for part in (sides, remedy) if part)
        super().__init__(f"{head}: {tail}" if tail else head)

    def at(self, where: str) -> InputError:
        """The same error at a place, unless it names one: numerics know no file."""
        fields = {**self.fields, "where": self.fields["where"] or where}
        return type(self)(fields.pop("what"), **fields)

    def within(self, place: str) -> InputError:
        """The same error, its own place followed by a wider one: the region it befell, say."""
        where = ", ".join(part for part in (self.fields["where"], place) if part)
        fields = {**self.fields, "where": where}
        return type(self)(fields.pop("what"), **fields)


class EmptyFoldError(InputError):
    """A fold found no region and the plan said to stop."""


class Refused(SequesterError):
    """The guard refused: something chosen would meet the data that chose it."""

    exit_code = 3
