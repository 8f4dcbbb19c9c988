"""Tokens of the web: a name, a role and a digest; the token itself is never stored."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import AbstractContextManager
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final, Literal

from sqlalchemy import Connection, insert, select, update

from watcher.errors import UsageError
from watcher.ledger.rows import epoch_of
from watcher.ledger.standing import instant
from watcher.ledger.tables import TOKEN

Role = Literal["read", "act"]
ROLES: Final = ("read", "act")
Transaction = Callable[[], AbstractContextManager[Connection]]


@dataclass(frozen=True, slots=True)
class StoredToken:
    """A token as the ledger knows it."""

    name: str
    role: Role
    created: datetime
    revoked: datetime | None


class Tokens:
    """The token table of a ledger."""

    def __init__(self, reading: Transaction, writing: Transaction) -> None:
        self._reading = reading
        self._writing = writing

    def add(self, name: str, role: Role, digest: str, created: datetime) -> None:
        """Store a token by its digest (SHA-256, hex). Raises UsageError for a name in use or an unknown role."""
        if role not in ROLES:
            raise UsageError(f"role = {role!r}: allowed are {', '.join(ROLES)}")
        with self._writing() as connection:
            if connection.execute(select(TOKEN.c.name).where(TOKEN.c.name == name)).one_or_none() is not None:
                raise UsageError(f"token {name!r} exists already: names are not used again, choose another")
            values = {"name": name, "role": role, "digest": digest, "created": epoch_of(created)}
            connection.execute(insert(TOKEN).values(values))

    def listed(self) -> list[StoredToken]:
        """All tokens, revoked ones too, by name."""
        with self._reading() as connection:
            return sorted((_stored(row) for row in connection.execute(select(TOKEN))), key=lambda t: t.name)

    def find(self, digest: str) -> StoredToken | None:
        """The token of a digest; None when there is none or it was revoked."""
        with self._reading() as connection:
            row = connection.execute(
                select(TOKEN).where(TOKEN.c.digest == digest, TOKEN.c.revoked.is_(None))
            ).one_or_none()
            return None if row is None else _stored(row)

    def revoke(self, name: str, at: datetime) -> None:
        """From now on the token opens nothing. Raises UsageError for an unknown or revoked name."""
        with self._writing() as connection:
            where = (TOKEN.c.name == name, TOKEN.c.revoked.is_(None))
            done = connection.execute(update(TOKEN).where(*where).values(revoked=epoch_of(at)))
            if done.rowcount != 1:
                raise UsageError(f"token {name!r} does not exist or is revoked: `watcher token CONFIG list` shows them")


def _stored(row: Any) -> StoredToken:
    revoked = None if row.revoked is None else instant(row.revoked)
    return StoredToken(row.name, row.role, instant(row.created), revoked)
