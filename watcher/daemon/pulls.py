"""A source whose every read happens in a child process that can be killed."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Final

from watcher.daemon.children import Cancelled, Children, Overdue
from watcher.errors import SourceFailed, UsageError, WatcherError
from watcher.records import Question, RejectedRow, Tally
from watcher.sources import open_source
from watcher.sources.base import SourceSpec, Survey

GRACE: Final = 15.0
"""Seconds beyond the source's own time-out: for starting the child and handing the answer over."""
Point = Callable[[str], None]


class ChildSource:
    """The same interface as the source itself; files are stat'ed here, rows are read over there."""

    def __init__(self, spec: SourceSpec, children: Children, at_point: Point) -> None:
        open_source(spec)  # a kind or url that cannot be used is said at once, not at every look
        self._spec = spec
        self._children = children
        self._at_point = at_point

    @property
    def name(self) -> str:
        """The source's name in the configuration."""
        return self._spec.name

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """Count in a child. Raises SourceFailed, also when the child hung or died."""
        self._at_point("before-pull")
        answer: list[Tally] = self._call("tally", list(questions))
        self._at_point("after-pull")
        return answer

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        """Samples of the rows that were rejected for `reason`."""
        answer: list[RejectedRow] = self._call("rejected", question, reason, limit)
        return answer

    def signature(self) -> str | None:
        """Of the files; a stat is cheap enough to be made here."""
        return open_source(self._spec).signature()

    def columns(self) -> list[str]:
        """The names of the columns."""
        answer: list[str] = self._call("columns")
        return answer

    def survey(self, question: Question | None = None) -> Survey:
        """The values that a question would read."""
        answer: Survey = self._call("survey", question)
        return answer

    def _call(self, method: str, *arguments: Any) -> Any:
        try:
            return self._children.call(self._spec.timeout + GRACE, _answer, self._spec, method, arguments)
        except Overdue as error:
            raise SourceFailed(self.name, "timeout", str(error)) from None
        except (SourceFailed, UsageError, Cancelled):
            raise
        except WatcherError as error:
            raise SourceFailed(self.name, "pull-died", str(error)) from None


def _answer(spec: SourceSpec, method: str, arguments: tuple[Any, ...]) -> Any:
    return getattr(open_source(spec), method)(*arguments)
