"""The lease of the one writer of a PostgreSQL ledger: a row with a token, judged by the database's clock."""

from __future__ import annotations

import os
import secrets
import socket
from typing import Any

from sqlalchemy import Connection, Row, delete, insert, select, text, update

from watcher.errors import LedgerBusy
from watcher.ledger.tables import LEASE

NAME = "writer"
SECONDS = 10.0


class Lease:
    """Held while its token stands in the row. A writer that slept past `until` may go on if nobody took over meanwhile:
    it is the token that fences, the time only says when another may help himself.
    """

    def __init__(self) -> None:
        self._token: str | None = None

    @property
    def held(self) -> bool:
        """Whether this object took the lease; `check` says whether it still has it."""
        return self._token is not None

    def take(self, connection: Connection) -> None:
        """Take or take over the lease. Raises LedgerBusy with the holder's name while another's has not run out."""
        now = _database_time(connection)
        row = _locked(connection)
        if row is not None and row.until > now and row.token != self._token:
            raise LedgerBusy(f"the ledger is held by {row.holder} for another {row.until - now:.0f} s at most")
        token = secrets.token_hex(16)
        holder = f"process {os.getpid()} on {socket.gethostname()}"
        connection.execute(delete(LEASE).where(LEASE.c.name == NAME))
        connection.execute(insert(LEASE).values(name=NAME, holder=holder, token=token, until=now + SECONDS))
        self._token = token

    def check(self, connection: Connection) -> None:
        """Inside a writing transaction: extend the lease. Raises LedgerBusy when another has taken it over."""
        row = _locked(connection)
        if row is None or row.token != self._token:
            holder = "nobody" if row is None else row.holder
            self._token = None
            raise LedgerBusy(f"the lease of the ledger was lost, it is held by {holder}; nothing was written")
        until = _database_time(connection) + SECONDS
        connection.execute(update(LEASE).where(LEASE.c.name == NAME).values(until=until))

    def release(self, connection: Connection) -> None:
        """Give the lease back, if it still is ours."""
        connection.execute(delete(LEASE).where(LEASE.c.name == NAME, LEASE.c.token == self._token))
        self._token = None

    def drop(self) -> None:
        """Forget the lease without telling the database, which cannot be reached: it runs out by itself."""
        self._token = None


def _locked(connection: Connection) -> Row[Any] | None:
    return connection.execute(select(LEASE).where(LEASE.c.name == NAME).with_for_update()).one_or_none()


def _database_time(connection: Connection) -> float:
    return float(connection.execute(text("SELECT extract(epoch FROM clock_timestamp())")).scalar_one())
