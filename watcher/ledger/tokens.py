"""Tokens of the web: a name, a role and a digest; the token itself is never stored."""

from __future__ import annotations

import hashlib
import secrets
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
PREFIX: Final = "watcher_"
"""How every token begins, so that it is recognised where it should not be: in an address, a log, a repository."""
_BYTES: Final = 32
_LONGEST: Final = 200
"""Characters beyond which a text is no token; it is not even hashed."""
Transaction = Callable[[], AbstractContextManager[Connection]]


@dataclass(frozen=True, slots=True)
class StoredToken:
    """A token as the ledger knows it."""

    name: str
    role: Role
    created: datetime
    revoked: datetime | None


def digest_of(token: str) -> str:
    """What the ledger keeps of a token: SHA-256, hex. A drawn token has 256 random bits, so a slow hash adds nothing."""
    return hashlib.sha256(token.encode("utf-8", "surrogatepass")).hexdigest()


class Tokens:
    """The token table of a ledger."""

    def __init__(self, reading: Transaction, writing: Transaction) -> None:
        self._reading = reading
        self._writing = writing

    def make(self, name: str, role: Role, created: datetime) -> str:
        """Draw a token, store its digest and return it: this is the only time that it can be seen.

        Raises UsageError for a name in use, an empty or overlong name, or an unknown role.
        """
        if not name.strip() or len(name) > 80:
            raise UsageError(f"token name = {name!r}: 1 to 80 characters that say who will use it are needed")
        token = PREFIX + secrets.token_urlsafe(_BYTES)
        self.add(name, role, digest_of(token), created)
        return token

    def verify(self, token: str) -> StoredToken | None:
        """The token that somebody shows; None when there is none like it or it was revoked."""
        if not token.startswith(PREFIX) or len(token) > _LONGEST:
            return None
        return self.find(digest_of(token))

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
