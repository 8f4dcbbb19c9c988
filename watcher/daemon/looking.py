"""Looks as the daemon makes them: in a thread, outliving whatever happens, and none where nothing can be new."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import structlog

from watcher.daemon.children import Cancelled
from watcher.daemon.hooks import Hooks
from watcher.daemon.parts import Watch
from watcher.daemon.stepback import record_step_back
from watcher.daemon.turns import Turns
from watcher.errors import LedgerBusy, SourceFailed, WatcherError
from watcher.ledger.store import Ledger
from watcher.look import ClockWentBack, Outcome, Routing, attempt, quiet_until
from watcher.text import safe

FIRST_RETRY: Final = 30.0
LONGEST: Final = 600.0
AT_ONCE: Final = max(4, os.cpu_count() or 4)
"""Looks under way at a time."""
PATIENCE: Final = 30.0
"""Seconds after which a look that is still under way leaves its place to another."""


@dataclass(frozen=True, slots=True)
class Looked:
    """What the schedule must know of a look."""

    again: float | None = None
    """Seconds until the next try, if that is not at the usual time."""
    written: bool = False
    """Something was recorded: notices may wait."""


@dataclass(frozen=True, slots=True)
class _Quiet:
    """What makes a look needless: files with this signature bring nothing before `until` (epoch seconds)."""

    signature: str
    until: int


class Looker:
    """Looks at sources, each with its own back-off after failures."""

    def __init__(self, hooks: Hooks, log: Any) -> None:
        self._hooks = hooks
        self._log = log
        self._quiet: dict[str, _Quiet] = {}
        self._failures: dict[str, int] = {}
        self._turns = Turns(AT_ONCE, PATIENCE)
        self.tried: set[str] = set()
        """Sources that were looked at, with or without success, since the daemon started."""

    def forget(self, source: str) -> None:
        """After a change of its configuration a source's files are not taken for unchanged."""
        self._quiet.pop(source, None)

    def look(self, ledger: Ledger, watch: Watch, routings: Sequence[Routing]) -> Looked:
        """One look. Raises Cancelled when the daemon stops; nothing else."""
        structlog.contextvars.clear_contextvars()
        structlog.contextvars.bind_contextvars(source=watch.source.name)
        try:
            with self._turns.turn():
                return self._look(ledger, watch, routings)
        except Cancelled:
            raise
        except ClockWentBack as error:
            self._log.error("clock-went-back", seconds=error.newest - error.now, detail=str(error))
            return Looked(written=record_step_back(ledger, watch.source.name, error, routings, self._log))
        except LedgerBusy as error:
            self._log.warning("the look was thrown away", detail=str(error))
            return Looked(min(float(watch.table.every), FIRST_RETRY))
        except WatcherError as error:
            self._log.error("the look failed; the counts stay", detail=str(error))
        except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
            self._log.exception("the look failed unexpectedly; the counts stay")
        finally:
            self.tried.add(watch.source.name)
        return Looked()

    def _look(self, ledger: Ledger, watch: Watch, routings: Sequence[Routing]) -> Looked:
        name = watch.source.name
        self._hooks.at_point("before-look")
        now = int(self._hooks.clock().timestamp())
        head = ledger.head()
        structlog.contextvars.bind_contextvars(look=head.look, head=head.digest)
        # Before it is asked whether anything is new: a clock that went back must be told even then.
        if now < (newest := ledger.newest_at()):
            raise ClockWentBack(now, newest)
        signature = _signature(watch)
        if self._nothing_new(ledger, watch, signature, now):
            return Looked()
        outcome = attempt(
            ledger,
            watch.source,
            watch.promises,
            now,
            self._hooks.timer,
            routes=routings,
            slice_limit=watch.table.slice_limit,
        )
        self._tell(outcome)
        if outcome.failed:
            return Looked(self._later(watch), outcome.written)
        self._failures.pop(name, None)
        if signature is not None:
            self._remember(ledger, watch, signature, has_future=outcome.has_future)
        return Looked(written=outcome.written)

    def _nothing_new(self, ledger: Ledger, watch: Watch, signature: str | None, now: int) -> bool:
        name = watch.source.name
        if signature is None or name in self._failures:
            return False
        if name not in self._quiet and name not in self.tried:
            # The first look after a start: the ledger knows which files were read to the end before it.
            state = ledger.source_state(name)
            if state.failing_since is None and state.signature == signature:
                self._remember(ledger, watch, signature, has_future=False)
        known = self._quiet.get(name)
        if known is not None and known.signature == signature and now < known.until:
            return True
        self._quiet.pop(name, None)
        return False

    def _remember(self, ledger: Ledger, watch: Watch, signature: str, *, has_future: bool) -> None:
        until = quiet_until(ledger, watch.source.name, watch.promises, has_future)
        if until:
            self._quiet[watch.source.name] = _Quiet(signature, until)

    def _later(self, watch: Watch) -> float:
        """Seconds until a source that failed is tried again: soon at first, then less and less often."""
        name, usual = watch.source.name, float(watch.table.every)
        self._failures[name] = self._failures.get(name, 0) + 1
        return min(max(usual, LONGEST), min(usual, FIRST_RETRY) * 2.0 ** min(self._failures[name] - 1, 10))

    def _tell(self, outcome: Outcome) -> None:
        structlog.contextvars.bind_contextvars(look=outcome.head.look, head=outcome.head.digest)
        for event in outcome.events:
            where = f"{event.column}={event.value}" if event.column else ""
            self._log.info(
                event.kind, promise=event.promise, version=event.version, slice=safe(where), facts=dict(event.facts)
            )
        for failure in outcome.failed:
            self._log.warning("source gave no answer", reason=failure.reason, detail=safe(failure.detail, 500))
        if outcome.written and not outcome.failed:
            self._log.info("look recorded", promises=len({(s.promise, s.version) for s in outcome.standings}))


def _signature(watch: Watch) -> str | None:
    try:
        return watch.source.signature()
    except SourceFailed:
        return None  # the look will meet it, and record it
