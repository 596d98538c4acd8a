"""The review page over a real site, for tests: reviewers of every role, a clock to move, browsers."""

from __future__ import annotations

import re
import shutil
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path

from starlette.testclient import TestClient

from flows.morning.app import create_app
from flows.site.layout import Site, open_site
from flows.site.reviewers import Role, add_reviewer

NOW = datetime(2026, 11, 7, 7, 30, tzinfo=UTC)
HOST = "http://localhost"
PASSWORDS: dict[Role, str] = {
    "reader": "amber tiller foghorn quince",
    "reviewer": "harbour kettle nine plums",
    "approver": "sextant willow brine ladder",
}


@dataclass
class Clock:
    now: datetime = NOW

    def __call__(self) -> datetime:
        return self.now

    def pass_by(self, time: timedelta) -> None:
        self.now += time


@dataclass
class Room:
    site: Site
    clock: Clock

    def browser(self, *, secure: bool = False) -> TestClient:
        """A browser that nobody has signed in with, on an application of its own."""
        app = create_app(self.site, self.clock, hosts=("localhost",), secure=secure)
        return TestClient(app, base_url=HOST, follow_redirects=False)

    def signed_in(self, role: Role = "reviewer") -> TestClient:
        browser = self.browser()
        sign_in(browser, role)
        return browser


def make_room(kept: Site, folder: Path) -> Room:
    """A copy of a site with one reviewer of each role, named as the role."""
    shutil.copytree(kept.root, folder / "site", symlinks=True)
    site = open_site(folder / "site")
    for role, password in PASSWORDS.items():
        add_reviewer(site, role, f"Person of role {role}", role, password, NOW)
    return Room(site, Clock())


def sign_in(browser: TestClient, role: Role) -> None:
    answer = browser.post("/sign-in", data={"name": role, "password": PASSWORDS[role]})
    assert answer.status_code == 303


def csrf(browser: TestClient) -> str:
    """The form token of the session, from its page."""
    found = re.search(r'name="csrf" value="([^"]+)"', browser.get("/").text)
    assert found is not None
    return found[1]


def first(browser: TestClient, address: str, pattern: str) -> str:
    """The first part of a page that matches."""
    found = re.search(pattern, browser.get(address).text)
    assert found is not None, (address, pattern)
    return found[0]
