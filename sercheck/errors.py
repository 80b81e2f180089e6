"""The errors a user can meet; depends on nothing of ours.

Every one of them tells four things: the place, what came, what was wanted and what to do. The command line prints
them and ends with exit status 2; a failed batch is a result, not an error (only ``BatchHeld`` carries one).
"""

from __future__ import annotations


class SercheckError(Exception):
    """Base of all errors meant for the user.

    Args:
        place: where it happened (``rules.yaml:12:5``, a file, a column, a database).
        came: what was found there.
        wanted: what would have been right.
        todo: what the reader can do about it.
    """

    def __init__(self, place: str, came: str, wanted: str = "", todo: str = "") -> None:
        self.place = place
        self.came = came
        self.wanted = wanted
        self.todo = todo
        super().__init__(self.sentence())

    def __reduce__(self) -> tuple[object, ...]:
        """An error of another process arrives whole."""
        return type(self), (self.place, self.came, self.wanted, self.todo)

    def sentence(self) -> str:
        """The whole error as one line of text."""
        text = f"{self.place}: {self.came}"
        if self.wanted:
            text += f"; wanted {self.wanted}"
        if self.todo:
            text += f". {self.todo}"
        return text


class RuleFileError(SercheckError):
    """One or more mistakes in a rule file, all of them at once.

    ``mistakes`` holds one ``RuleFileError`` for each; a single mistake is its own list.
    """

    def __init__(self, place: str, came: str, wanted: str = "", todo: str = "") -> None:
        self.mistakes: tuple[RuleFileError, ...] = (self,)
        super().__init__(place, came, wanted, todo)

    @classmethod
    def of(cls, mistakes: list[RuleFileError]) -> RuleFileError:
        """Bundle several mistakes; the first lends its fields."""
        first = mistakes[0]
        bundle = cls(first.place, first.came, first.wanted, first.todo)
        bundle.mistakes = tuple(mistakes)
        bundle.args = ("\n".join(mistake.sentence() for mistake in mistakes),)
        return bundle


class BatchError(SercheckError):
    """A batch or history that cannot be read or placed in time."""


class StoreError(SercheckError):
    """The store, ledger or archive cannot be read or written."""


class OutputError(SercheckError):
    """A file that was asked for cannot be written or moved."""


class LimitError(SercheckError):
    """A batch takes more memory or time than its rule file allows."""


class EngineError(SercheckError):
    """Workers that were asked for cannot be started, reached or kept."""


class UsageError(SercheckError):
    """A call that asks for something contradictory or unknown."""


class BatchHeld(SercheckError):
    """Raised by ``Verdict.raise_if_held`` for a pipeline step: the batch was judged and held."""
