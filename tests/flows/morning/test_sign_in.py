"""Who gets in: sign-in, sessions that end, form tokens, foreign hosts and origins, rights of every route."""

from __future__ import annotations

from datetime import timedelta

import pytest
from fastapi.routing import APIRoute

from flows.morning.guard import COOKIE, LARGEST_BODY, RANK
from flows.morning.sessions import FAILURES_A_NAME, FAILURES_FORGOTTEN_AFTER, IDLE_AFTER, LONGEST
from flows.site.layout import Site
from flows.site.reviewers import Role
from tests.flows.morning.room import PASSWORDS, Room, csrf, make_room, sign_in

OPEN = {("GET", "/sign-in"), ("POST", "/sign-in"), ("GET", "/static/house.css")}


@pytest.fixture(scope="module")
def room(kept_nights: Site, tmp_path_factory: pytest.TempPathFactory) -> Room:
    return make_room(kept_nights, tmp_path_factory.mktemp("room"))


def test_a_session_begins_at_sign_in_and_ends_at_sign_out(room: Room) -> None:
    browser = room.browser()
    assert browser.get("/").headers["location"] == "/sign-in"
    answer = browser.post("/sign-in", data={"name": "reviewer", "password": PASSWORDS["reviewer"]})
    cookie = answer.headers["set-cookie"].lower()
    assert "httponly" in cookie
    assert "samesite=strict" in cookie
    assert "secure" not in cookie
    assert browser.get("/").status_code == 200
    token = browser.cookies[COOKIE]
    assert browser.post("/sign-out", data={"csrf": csrf(browser)}).status_code == 303
    browser.cookies.set(COOKIE, token)
    assert browser.get("/").status_code == 303


def test_over_tls_the_cookie_is_for_tls_alone(room: Room) -> None:
    browser = room.browser(secure=True)
    answer = browser.post("/sign-in", data={"name": "reader", "password": PASSWORDS["reader"]})
    assert "; secure" in answer.headers["set-cookie"].lower()
    assert "strict-transport-security" in answer.headers


def test_a_token_from_before_sign_in_is_worth_nothing_after_it(room: Room) -> None:
    browser = room.browser()
    browser.cookies.set(COOKIE, "planted")
    sign_in(browser, "reviewer")
    stranger = room.browser()
    stranger.cookies.set(COOKIE, "planted")
    assert stranger.get("/").status_code == 303


@pytest.mark.parametrize(
    ("wait", "lives"),
    [
        ([IDLE_AFTER], True),
        ([IDLE_AFTER + timedelta(seconds=1)], False),
        ([IDLE_AFTER] * (LONGEST // IDLE_AFTER), True),
        ([IDLE_AFTER] * (LONGEST // IDLE_AFTER) + [timedelta(seconds=1)], False),
    ],
)
def test_a_session_ends_when_left_alone_and_after_a_working_day(
    room: Room, wait: list[timedelta], lives: bool
) -> None:
    browser = room.signed_in()
    last = browser.get("/quarantine")
    for time in wait:
        room.clock.pass_by(time)
        last = browser.get("/quarantine")
    assert (last.status_code == 200) == lives


def test_failures_are_told_alike_and_counted(room: Room) -> None:
    browser = room.browser()
    problems = set()
    for name in ("reviewer", "nobody"):
        answer = browser.post("/sign-in", data={"name": name, "password": "wrong words wrong words"})
        assert answer.status_code == 403
        problems.add(answer.text.split('role="alert">')[1].split("<")[0])
    assert len(problems) == 1
    for _ in range(FAILURES_A_NAME - 1):
        browser.post("/sign-in", data={"name": "reviewer", "password": "wrong words wrong words"})
    right = {"name": "reviewer", "password": PASSWORDS["reviewer"]}
    assert browser.post("/sign-in", data=right).status_code == 429
    assert browser.post(
        "/sign-in", data={**right, "name": "reader", "password": PASSWORDS["reader"]}
    ).is_redirect
    room.clock.pass_by(FAILURES_FORGOTTEN_AFTER)
    assert browser.post("/sign-in", data=right).status_code == 303


def test_a_form_without_its_sessions_token_does_nothing(room: Room) -> None:
    browser, other = room.signed_in(), room.signed_in()
    for given in ({}, {"csrf": ""}, {"csrf": csrf(other)}):
        assert browser.post("/sign-out", data=given).status_code == 403
    assert browser.get("/").status_code == 200


def test_foreign_hosts_origins_and_large_bodies_are_refused(room: Room) -> None:
    browser = room.signed_in()
    assert browser.get("/", headers={"host": "rebound.example"}).status_code == 421
    token = csrf(browser)
    foreign = {"origin": "http://elsewhere.example"}
    assert browser.post("/sign-out", data={"csrf": token}, headers=foreign).status_code == 403
    large = "x" * (LARGEST_BODY + 1)
    assert browser.post("/sign-in", data={"name": "reader", "password": large}).status_code == 413
    assert browser.get("/").status_code == 200


def test_every_answer_forbids_foreign_content(room: Room) -> None:
    browser = room.signed_in()
    for address in ("/", "/sign-in", "/nowhere", "/static/plate.js", "/plate/none"):
        headers = browser.get(address).headers
        assert "default-src 'none'" in headers["content-security-policy"]
        assert "unsafe" not in headers["content-security-policy"]
        assert headers["x-content-type-options"] == "nosniff"
    assert browser.get("/").headers["cache-control"] == "no-store"


def routes(room: Room) -> list[tuple[str, APIRoute]]:
    found = [route for route in room.browser().app.routes if isinstance(route, APIRoute)]
    return [(method, route) for route in found for method in sorted(route.methods - {"HEAD"})]


def least_role(route: APIRoute) -> Role | None:
    roles = [each.call.role for each in route.dependant.dependencies if hasattr(each.call, "role")]
    return roles[0] if roles else None


def test_every_route_wants_its_role_and_nothing_else_is_open(room: Room) -> None:
    assert {(method, route.path) for method, route in routes(room) if least_role(route) is None} == OPEN
    browsers = {role: room.signed_in(role) for role in RANK}
    tokens = {role: csrf(browser) for role, browser in browsers.items()}
    nobody = room.browser()
    for method, route in routes(room):
        least = least_role(route)
        if least is None or route.path == "/sign-out":
            continue
        address = route.path.replace("{", "").replace("}", "")
        refused = nobody.request(method, address)
        assert refused.status_code in (401, 303), address
        for role, browser in browsers.items():
            answer = browser.request(method, address, headers={"x-halfsat-csrf": tokens[role]})
            assert (answer.status_code == 403) == (RANK[role] < RANK[least]), (address, role)
