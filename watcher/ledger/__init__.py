"""The ledger: what was counted, said and sent, in a chain that can be audited."""

from watcher.ledger.counts import CountTable
from watcher.ledger.store import Ledger

__all__ = ["CountTable", "Ledger"]
