"""Who may sign in: reviewers with role and hashed password, in one file that its owner alone reads.

Knows no page and no session. The ledger has every change but no password and no hash of one.
"""

from __future__ import annotations

import fcntl
import json
import os
import re
import unicodedata
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import asdict, dataclass, replace
from datetime import UTC, datetime
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Literal, get_args

from flows import ledger
from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import HalfsatError, SiteError
from models.identity import Json

if TYPE_CHECKING:
    from argon2 import PasswordHasher

Role = Literal["reader", "reviewer", "approver"]
ROLES: tuple[Role, ...] = get_args(Role)
MAY_DECIDE: frozenset[Role] = frozenset({"reviewer", "approver"})

SHORTEST_PASSWORD, LONGEST_PASSWORD = 12, 200
LEAST_GUESSES_SCORE = 3
"""Of 0 to 4: from 10^8 guesses on (Wheeler 2016, "zxcvbn: low-budget password strength estimation")."""
# The estimator looks at no more than this.
_ESTIMATED_LENGTH = 72
_NAME = re.compile(r"[a-z][a-z0-9._-]{1,31}")
_LONGEST_FULL_NAME = 80
_OWNER_ONLY = 0o600
_REFUSED = "name or password is wrong, or the account is disabled"


class SignInRefused(HalfsatError):
    """Sign-in failed. The message is the same for every cause, so that it tells nothing about accounts."""


class ReviewerError(HalfsatError):
    """A reviewer cannot be added or changed like that, or a password does not do."""


@dataclass(frozen=True)
class Reviewer:
    """One person who may sign in.

    Attributes
    ----------
    name
        What is typed to sign in. Never given to another person.
    full_name
        As it stands beside a signature.
    added_at
        When, UTC.
    """

    name: str
    full_name: str
    role: Role
    disabled: bool
    added_at: datetime


@dataclass(frozen=True)
class _Account:
    """A reviewer with the hash of the password."""

    reviewer: Reviewer
    password_hash: str


def reviewers_file(site: Site) -> Path:
    """The file that holds the accounts."""
    return site.root / "reviewers.json"


def reviewers(site: Site) -> list[Reviewer]:
    """Everybody who was ever added, in that order.

    Raises
    ------
    SiteError
        If the file is damaged.
    """
    return [account.reviewer for account in _accounts(site).values()]


def find_reviewer(site: Site, name: str) -> Reviewer | None:
    """The reviewer of this name as the account is now, or None."""
    account = _accounts(site).get(name)
    return None if account is None else account.reviewer


def add_reviewer(
    site: Site, name: str, full_name: str, role: Role, password: str, now: datetime, *, actor: str = "halfsat"
) -> Reviewer:
    """Add a person and record it in the ledger.

    Parameters
    ----------
    name
        2 to 32 small letters, digits, dots, hyphens or underscores, a letter first.
    full_name
        As it shall stand beside a signature.
    password
        See `check_password`.
    now
        When, UTC.
    actor
        Who does it, as the ledger shall say.

    Raises
    ------
    ReviewerError
        If the name is taken or no name, the role is none, or the password does not do.
    """
    _check_name(name)
    full_name = _checked_full_name(full_name)
    if role not in ROLES:
        raise ReviewerError(f"there is no role '{role}'", remedy=f"roles are {', '.join(ROLES)}")
    check_password(password, name, full_name)
    with _locked(site):
        accounts = _accounts(site)
        if name in accounts:
            raise ReviewerError(
                f"there is a reviewer '{name}' already",
                where=reviewers_file(site).name,
                remedy="names are never given twice; choose another, or give a new password: "
                "halfsat reviewer reset",
            )
        reviewer = Reviewer(name, full_name, role, False, now.astimezone(UTC))
        ledger.append(site, "reviewer_added", _told(reviewer), at=now, actor=actor)
        _write(site, {**accounts, name: _Account(reviewer, _hasher().hash(_normal(password)))})
    return reviewer


def reset_password(
    site: Site, name: str, password: str, now: datetime, *, actor: str = "halfsat"
) -> Reviewer:
    """Give a reviewer a new password and record in the ledger that it was done.

    A disabled account stays disabled.

    Raises
    ------
    ReviewerError
        If there is no such reviewer, or the password does not do.
    """
    with _locked(site):
        account = _known(site, name)
        check_password(password, name, account.reviewer.full_name)
        ledger.append(site, "password_reset", {"name": name}, at=now, actor=actor)
        hashed = _Account(account.reviewer, _hasher().hash(_normal(password)))
        _write(site, {**_accounts(site), name: hashed})
    return account.reviewer


def disable_reviewer(site: Site, name: str, now: datetime, *, actor: str = "halfsat") -> Reviewer:
    """Let a reviewer sign in no more and record it in the ledger. What was signed stays.

    Raises
    ------
    ReviewerError
        If there is no such reviewer, or the account is disabled already.
    """
    with _locked(site):
        account = _known(site, name)
        disabled = replace(account.reviewer, disabled=True)
        if account.reviewer.disabled and recorded_reviewers(site).get(name) == _told(disabled):
            raise ReviewerError(f"'{name}' is disabled already")
        # First the account: killed in between, nobody signs in, and the same command records it.
        _write(site, {**_accounts(site), name: _Account(disabled, account.password_hash)})
        ledger.append(site, "reviewer_disabled", {"name": name}, at=now, actor=actor)
    return disabled


def authenticate(site: Site, name: str, password: str) -> Reviewer:
    """The reviewer with this name and password.

    Raises
    ------
    SignInRefused
        If there is no such person, the password is another one, or the account is disabled: one message, and
        the same work, for all of them.
    """
    from argon2.exceptions import Argon2Error, InvalidHashError

    account = _accounts(site).get(name)
    right = False
    try:
        right = _hasher().verify(_nobody() if account is None else account.password_hash, _normal(password))
    except (Argon2Error, InvalidHashError):
        right = False
    if account is None or account.reviewer.disabled or not right:
        raise SignInRefused(_REFUSED)
    return account.reviewer


def check_password(password: str, name: str, full_name: str = "") -> None:
    """Refuse a password that is too short, too long, near the name, or among those that are tried first.

    Raises
    ------
    ReviewerError
        With what is wrong; the password itself is never in the message.
    """
    # Heavy: lists of words and names.
    from zxcvbn import zxcvbn

    plain = _normal(password)
    count = min(len(plain), len(password))
    if count < SHORTEST_PASSWORD:
        raise ReviewerError(
            f"the password has {count} characters",
            remedy=f"take at least {SHORTEST_PASSWORD}; several words do well",
        )
    if len(plain) > LONGEST_PASSWORD:
        raise ReviewerError(
            f"the password has {len(plain)} characters", remedy=f"take at most {LONGEST_PASSWORD}"
        )
    low = plain.casefold()
    parts = [part.casefold() for part in re.split(r"[\W_]+", full_name) if len(part) > 3]
    own = [word for word in (name.casefold(), *parts) if len(word) > 3 and word in low]
    if name.casefold() == low or own:
        raise ReviewerError(
            "the password holds the name", remedy="take words that have nothing to do with it"
        )
    found = zxcvbn(plain[:_ESTIMATED_LENGTH], user_inputs=[name, full_name, "halfsat", *parts])
    if found["score"] < LEAST_GUESSES_SCORE:
        why = str(found["feedback"]["warning"]).rstrip(".") or "it is among those that are tried first"
        raise ReviewerError(
            f"the password is easy to guess: {why}", remedy="take several words that do not belong together"
        )


def recorded_reviewers(site: Site) -> dict[str, Mapping[str, Json]]:
    """What the ledger says of each reviewer, by name: as `account_rows` while nothing was tampered with."""
    found: dict[str, Mapping[str, Json]] = {}
    for entry in ledger.entries(site):
        if entry.kind == "reviewer_added":
            found[str(entry.body["name"])] = dict(entry.body)
        elif entry.kind == "reviewer_disabled" and str(entry.body["name"]) in found:
            found[str(entry.body["name"])] = {**found[str(entry.body["name"])], "disabled": True}
    return found


def account_rows(site: Site) -> dict[str, Mapping[str, Json]]:
    """The accounts as they are, without secrets, by name.

    Raises
    ------
    SiteError
        If the file is damaged.
    """
    return {name: _told(account.reviewer) for name, account in _accounts(site).items()}


def _told(reviewer: Reviewer) -> dict[str, Json]:
    return {
        "name": reviewer.name,
        "full_name": reviewer.full_name,
        "role": reviewer.role,
        "disabled": reviewer.disabled,
    }


def _check_name(name: str) -> None:
    if _NAME.fullmatch(name) is None:
        raise ReviewerError(
            f"'{name}' is no name to sign in with"[:120],
            remedy="take 2 to 32 small letters, digits, dots, hyphens or underscores, a letter first",
        )


def _checked_full_name(full_name: str) -> str:
    clean = " ".join(unicodedata.normalize("NFC", full_name).split())
    unprintable = [c for c in clean if unicodedata.category(c).startswith("C")]
    if not clean or len(clean) > _LONGEST_FULL_NAME or unprintable:
        raise ReviewerError(
            "this is no full name", remedy=f"give 1 to {_LONGEST_FULL_NAME} characters that can be printed"
        )
    return clean


def _known(site: Site, name: str) -> _Account:
    account = _accounts(site).get(name)
    if account is None:
        names = ", ".join(_accounts(site)) or "none yet"
        raise ReviewerError(f"there is no reviewer '{name}'", remedy=f"reviewers are {names}")
    return account


def _normal(password: str) -> str:
    # The same password typed on two keyboards may be composed in two ways.
    return unicodedata.normalize("NFC", password)


@cache
def _hasher() -> PasswordHasher:
    from argon2 import PasswordHasher

    # Least cost that the OWASP Password Storage Cheat Sheet recommends for Argon2id: 19 MiB, 2 passes.
    return PasswordHasher(time_cost=2, memory_cost=19_456, parallelism=1)


@cache
def _nobody() -> str:
    """A hash that no password is asked for: an unknown name costs as much time as a known one."""
    return _hasher().hash(os.urandom(32).hex())


@contextmanager
def _locked(site: Site) -> Iterator[None]:
    handle = os.open(site.root / ".reviewers.lock", os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, _OWNER_ONLY)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX)
        yield
    finally:
        os.close(handle)


def _accounts(site: Site) -> dict[str, _Account]:
    path = reviewers_file(site)
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        return {}
    try:
        found = {}
        for each in json.loads(content)["reviewers"]:
            hashed = str(each.pop("password_hash"))
            added_at = datetime.fromisoformat(each.pop("added_at"))
            found[str(each["name"])] = _Account(Reviewer(added_at=added_at, **each), hashed)
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise SiteError(
            "the file of reviewers is damaged",
            where=str(path),
            remedy="bring it back from a backup of the site, or move it away and add the reviewers again",
        ) from error
    return found


def _write(site: Site, accounts: Mapping[str, _Account]) -> None:
    given = [
        {
            **asdict(account.reviewer),
            "added_at": account.reviewer.added_at.isoformat(),
            "password_hash": account.password_hash,
        }
        for account in accounts.values()
    ]
    content = json.dumps({"reviewers": given}, indent=2, ensure_ascii=False) + "\n"
    write_durably(reviewers_file(site), content.encode(), mode=_OWNER_ONLY)
