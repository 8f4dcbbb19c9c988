"""Looks as the daemon makes them: in a thread, outliving whatever happens, and none where nothing can be new."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Final

import structlog

from watcher.daemon.children import Cancelled
from watcher.daemon.parts import Watch
from watcher.errors import LedgerBusy, WatcherError
from watcher.ledger.store import Ledger
from watcher.look import ClockWentBack, Outcome, Routing, attempt, quiet_until

if TYPE_CHECKING:
    from watcher.daemon.service import Hooks

FIRST_RETRY: Final = 30.0
LONGEST: Final = 600.0


class Looker:
    """Looks at sources, each with its own back-off after failures."""

    def __init__(self, hooks: Hooks, log: Any) -> None:
        self._hooks = hooks
        self._log = log
        self._quiet: dict[str, tuple[str, int]] = {}
        """source -> signature of its files at the newest look, and until when unchanged files bring nothing"""
        self._failures: dict[str, int] = {}
        self.tried: set[str] = set()

    def forget(self) -> None:
        """After a reload nothing is taken for unchanged."""
        self._quiet.clear()

    def look(self, ledger: Ledger, watch: Watch, routings: Sequence[Routing]) -> float | None:
        """One look; returns after how many seconds to try again if not at the usual time.

        Raises Cancelled when the daemon stops; nothing else.
        """
        name, now = watch.source.name, int(self._hooks.clock().timestamp())
        structlog.contextvars.clear_contextvars()
        structlog.contextvars.bind_contextvars(source=name)
        try:
            self._hooks.at_point("before-look")
            signature = watch.source.signature() if name in self._quiet else None
            if name in self._quiet and signature == self._quiet[name][0] and now < self._quiet[name][1]:
                return None
            self._quiet.pop(name, None)
            structlog.contextvars.bind_contextvars(look=ledger.head().look)
            signature = watch.source.signature()
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
            return self._after(ledger, watch, outcome, signature)
        except Cancelled:
            raise
        except ClockWentBack as error:
            self._log.error("clock-went-back", detail=str(error))
        except LedgerBusy as error:
            self._log.warning("the look was thrown away", detail=str(error))
            return FIRST_RETRY
        except WatcherError as error:
            self._log.error("the look failed; the counts stay", detail=str(error))
        except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
            self._log.exception("the look failed unexpectedly; the counts stay")
        finally:
            self.tried.add(name)
        return None

    def _after(self, ledger: Ledger, watch: Watch, outcome: Outcome, signature: str | None) -> float | None:
        name = watch.source.name
        if outcome.failed:
            self._failures[name] = self._failures.get(name, 0) + 1
            usual = float(watch.table.every)
            return min(max(usual, LONGEST), min(usual, FIRST_RETRY) * 2.0 ** min(self._failures[name] - 1, 10))
        self._failures.pop(name, None)
        if signature is not None:
            until = quiet_until(ledger, name, watch.promises, outcome.has_future)
            if until:
                self._quiet[name] = (signature, until)
        return None

    def _tell(self, outcome: Outcome) -> None:
        structlog.contextvars.bind_contextvars(look=outcome.head.look)
        for event in outcome.events:
            facts = {"promise": event.promise, "version": event.version}
            where = f"{event.column}={event.value}" if event.column else ""
            self._log.info(event.kind, **facts, slice=where, facts=dict(event.facts))
        for failure in outcome.failed:
            self._log.warning("source gave no answer", reason=failure.reason, detail=failure.detail)
        if outcome.written:
            self._log.info(
                "look recorded", head=outcome.head.digest, promises=len({s.promise for s in outcome.standings})
            )
