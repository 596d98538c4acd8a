"""Who is signed in: sessions in memory, and how often a sign-in may fail. Knows no page and no password.

A restart signs everybody out; nothing here is written down.
"""

from __future__ import annotations

import hashlib
import secrets
import threading
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from datetime import datetime, timedelta

from flows.site.reviewers import Role

Clock = Callable[[], datetime]

IDLE_AFTER = timedelta(minutes=30)
"""A page left alone on a bench computer must not stay signed in; common practice, no source."""
LONGEST = timedelta(hours=12)
"""One working day."""
FAILURES_A_NAME, FAILURES_AN_ADDRESS = 5, 20
FAILURES_FORGOTTEN_AFTER = timedelta(minutes=15)


@dataclass(frozen=True)
class Session:
    """One person at one browser.

    Attributes
    ----------
    name, full_name, role
        Of the reviewer, as signed in.
    csrf
        What every form of this session must carry.
    begun_at, seen_at
        UTC.
    """

    name: str
    full_name: str
    role: Role
    csrf: str
    begun_at: datetime
    seen_at: datetime


@dataclass
class Sessions:
    """The sessions of one process; safe to use from several threads."""

    clock: Clock
    _by_digest: dict[str, Session] = field(default_factory=dict)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    def begin(self, name: str, full_name: str, role: Role) -> tuple[str, Session]:
        """A new session and the token that its browser keeps; never one that existed before sign-in."""
        token, now = secrets.token_urlsafe(32), self.clock()
        session = Session(name, full_name, role, secrets.token_urlsafe(32), now, now)
        with self._lock:
            self._by_digest = {key: each for key, each in self._by_digest.items() if self._lives(each)}
            self._by_digest[_digest(token)] = session
        return token, session

    def find(self, token: str | None) -> Session | None:
        """The session of a token, marked as seen; None where there is none or its time is over."""
        if not token:
            return None
        key = _digest(token)
        with self._lock:
            session = self._by_digest.get(key)
            if session is None:
                return None
            if not self._lives(session):
                del self._by_digest[key]
                return None
            self._by_digest[key] = replace(session, seen_at=self.clock())
            return self._by_digest[key]

    def end(self, token: str | None) -> None:
        """Forget a session."""
        with self._lock:
            self._by_digest.pop(_digest(token or ""), None)

    def _lives(self, session: Session) -> bool:
        now = self.clock()
        return now - session.seen_at <= IDLE_AFTER and now - session.begun_at <= LONGEST


@dataclass
class Attempts:
    """Failed sign-ins of the last minutes, by name and by address."""

    clock: Clock
    _failed: dict[str, list[datetime]] = field(default_factory=dict)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    def allowed(self, name: str, address: str) -> bool:
        """Whether another try is let through."""
        with self._lock:
            return (
                self._count(f"name {name}") < FAILURES_A_NAME
                and self._count(f"address {address}") < FAILURES_AN_ADDRESS
            )

    def failed(self, name: str, address: str) -> None:
        """Count a failure."""
        with self._lock:
            for key in (f"name {name}", f"address {address}"):
                self._count(key)
                self._failed.setdefault(key, []).append(self.clock())

    def succeeded(self, name: str) -> None:
        """Forget the failures of a name."""
        with self._lock:
            self._failed.pop(f"name {name}", None)

    def _count(self, key: str) -> int:
        since = self.clock() - FAILURES_FORGOTTEN_AFTER
        kept = [at for at in self._failed.get(key, ()) if at > since]
        if kept:
            self._failed[key] = kept
        else:
            self._failed.pop(key, None)
        return len(kept)


def _digest(token: str) -> str:
    # The table then holds nothing that a browser could be given.
    return hashlib.sha256(token.encode()).hexdigest()
