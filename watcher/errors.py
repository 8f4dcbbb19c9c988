"""Every error that `watcher` raises on purpose.

    WatcherError                     exit code 1: something went wrong at run time
    ├── UsageError                   exit code 2: the command, the configuration or the ledger cannot be used as asked
    │   ├── SettingsError            the configuration file; keeps every finding, not only the first
    │   ├── TermsChanged             the configuration differs from the terms frozen at the first look
    │   ├── NotAvailable             a documented value whose room is not built yet
    │   └── SchemaMismatch           the ledger was written by another version
    ├── SourceFailed                 a pull gave no answer that may be counted; keeps a short reason code
    ├── LedgerBusy                   another process holds the ledger, or it moved on since the look began
    └── LedgerDamaged                the chain or the bucket cache does not verify

A message names the key or argument, its value, what is allowed and the next step.
"""

from __future__ import annotations

from collections.abc import Sequence


class WatcherError(Exception):
    """The root: anything that `watcher` raises on purpose."""

    exit_code = 1


class UsageError(WatcherError):
    """The command or its input cannot be used as given."""

    exit_code = 2


class SettingsError(UsageError):
    """The configuration cannot be used; `findings` holds every problem, one sentence each."""

    def __init__(self, findings: Sequence[str]) -> None:
        self.findings = tuple(findings)
        super().__init__("\n".join(self.findings))


class TermsChanged(UsageError):
    """The configuration differs from the terms that were frozen at the first look."""

    def __init__(self, promise: str, version: str, key: str, frozen: str, wanted: str) -> None:
        self.promise, self.version, self.key, self.frozen, self.wanted = promise, version, key, frozen, wanted
        super().__init__(
            f"promise {promise!r} version {version!r}: {key} was frozen as {frozen} at the first look and the "
            f"configuration now says {wanted}. Terms do not change while evidence is being counted: restore {key}, or give "
            f"the promise a new version with its own 'released'; that supersedes this one and starts its evidence afresh."
        )


class NotAvailable(UsageError):
    """A documented value whose room is not built yet."""

    def __init__(self, key: str, value: object, instead: str) -> None:
        self.key, self.value = key, value
        super().__init__(f"{key} = {value!r}: not available yet; {instead}")


class SchemaMismatch(UsageError):
    """The ledger was written with another schema number."""

    def __init__(self, found: int, wanted: int) -> None:
        self.found, self.wanted = found, wanted
        way_out = "run `watcher upgrade CONFIG`, which copies first" if found < wanted else "install the newer watcher"
        super().__init__(f"the ledger has schema number {found}, this program needs {wanted}: {way_out}")


class SourceFailed(WatcherError):
    """A pull gave no answer that may be counted; the counts stay as they were.

    `reason` is one of the codes documented in docs/errors.md, for instance `missing`, `empty-file`, `truncated`,
    `column-missing`, `lines-unaccounted`, `changed-during-pull`, `too-many-values`, `timeout`, `unreachable`.
    """

    def __init__(self, source: str, reason: str, detail: str) -> None:
        self.source, self.reason, self.detail = source, reason, detail
        super().__init__(f"source {source!r}: {reason}: {detail}")


class LedgerBusy(WatcherError):
    """Another process writes the ledger, or it moved on since this look began; nothing was written."""


class LedgerDamaged(WatcherError):
    """The chain of looks or the bucket cache does not verify."""
