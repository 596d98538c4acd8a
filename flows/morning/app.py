"""The review page as an application: routes, who may use them, and what goes wrong in words.

Pages read through `flows.morning.asking`; what they show is laid out in modules of their own.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Hashable, Sequence
from pathlib import Path
from typing import Annotated, cast

from fastapi import FastAPI, Form, Query, Request
from starlette.exceptions import HTTPException
from starlette.responses import FileResponse, HTMLResponse, JSONResponse, RedirectResponse, Response
from starlette.staticfiles import StaticFiles

from flows.morning import drawings
from flows.morning import series as series_page
from flows.morning.asking import NotFound, published
from flows.morning.guard import COOKIE, Guard, NotAllowed, NotSignedIn, Reader
from flows.morning.lot import the_lot
from flows.morning.night import the_night
from flows.morning.pages import page
from flows.morning.plate import SHOWN, curves_of, plate_head, the_plate
from flows.morning.quarantine import quarantined_file, quarantined_files
from flows.morning.sessions import Attempts, Clock, Sessions
from flows.site.configuration import load_configuration
from flows.site.layout import Site
from flows.site.reviewers import SignInRefused, authenticate
from models.errors import HalfsatError

HERE = Path(__file__).resolve().parent
HOUSE_STYLE = HERE.parent / "pages" / "style.css"
LOOPBACK = ("127.0.0.1", "localhost", "::1")
Theme = Annotated[str, Query(pattern="^(light|dark|print)$")]
Wells = Annotated[str, Query(pattern="^(clear|all|curves)$")]


def create_app(site: Site, clock: Clock, *, hosts: Sequence[str] = LOOPBACK, secure: bool = False) -> FastAPI:
    """The application of one site.

    Parameters
    ----------
    clock
        Tells the time, UTC.
    hosts
        Host names under which it is reached.
    secure
        Whether it is served by TLS: the cookie is then sent by TLS alone.
    """
    app = FastAPI(title="halfsat", docs_url=None, redoc_url=None, openapi_url=None)
    app.state.site, app.state.clock, app.state.secure = site, clock, secure
    app.state.sessions, app.state.attempts = Sessions(clock), Attempts(clock)
    app.add_middleware(Guard, hosts=frozenset(hosts), secure=secure)

    @app.get("/static/house.css")
    def house_style() -> Response:
        return FileResponse(HOUSE_STYLE, media_type="text/css")

    app.mount("/static", StaticFiles(directory=HERE / "static"))
    _add_sign_in(app)
    _add_pages(app, site)
    _add_figures(app, site)
    _add_answers_to_errors(app)
    return app


def _add_sign_in(app: FastAPI) -> None:
    site = cast(Site, app.state.site)
    sessions, attempts = cast(Sessions, app.state.sessions), cast(Attempts, app.state.attempts)

    @app.get("/sign-in", response_class=HTMLResponse)
    def sign_in_page(request: Request) -> Response:
        if sessions.find(request.cookies.get(COOKIE)) is not None:
            return RedirectResponse("/", 303)
        return page(request, None, "sign_in.html", problem=None, name="")

    @app.post("/sign-in", response_class=HTMLResponse)
    def sign_in(
        request: Request,
        name: Annotated[str, Form(max_length=64)],
        password: Annotated[str, Form(max_length=1024)],
    ) -> Response:
        address = request.client.host if request.client else ""
        if not attempts.allowed(name, address):
            problem = "too many tries have failed: wait a quarter of an hour"
            return page(request, None, "sign_in.html", status=429, problem=problem, name=name)
        try:
            reviewer = authenticate(site, name, password)
        except SignInRefused as refused:
            attempts.failed(name, address)
            return page(request, None, "sign_in.html", status=403, problem=str(refused), name=name)
        attempts.succeeded(name)
        sessions.end(request.cookies.get(COOKIE))
        token, _ = sessions.begin(reviewer.name, reviewer.full_name, reviewer.role)
        answer = RedirectResponse("/", 303)
        answer.set_cookie(
            COOKIE, token, httponly=True, samesite="strict", secure=bool(app.state.secure), path="/"
        )
        return answer

    @app.post("/sign-out")
    def sign_out(request: Request, session: Reader) -> Response:
        del session
        sessions.end(request.cookies.get(COOKIE))
        answer = RedirectResponse("/sign-in", 303)
        answer.delete_cookie(COOKIE, path="/")
        return answer


def _add_pages(app: FastAPI, site: Site) -> None:
    @app.get("/", response_class=HTMLResponse)
    def night(request: Request, session: Reader) -> Response:
        with published(site) as connection:
            return page(request, session, "night.html", night=the_night(connection))

    @app.get("/plate/{analysis_id}", response_class=HTMLResponse)
    def plate(
        request: Request,
        session: Reader,
        analysis_id: str,
        well: str | None = None,
        show: Annotated[str, Query(pattern=f"^({'|'.join(SHOWN)})$")] = SHOWN[0],
    ) -> Response:
        with published(site) as connection:
            shown = the_plate(connection, site, analysis_id, show)
            first = next((each.row.well for each in shown.wells if each.row.standing == "held"), None)
            selected = well or first
            found = None if selected is None else series_page.the_well(connection, analysis_id, selected)
        return page(request, session, "plate.html", plate=shown, well=found, shown_ways=SHOWN)

    @app.get("/plate/{analysis_id}/well/{well}", response_class=HTMLResponse)
    def well(request: Request, session: Reader, analysis_id: str, well: str) -> Response:
        with published(site) as connection:
            head = plate_head(connection, analysis_id)
            found = series_page.the_well(connection, analysis_id, well)
        return page(request, session, "well.html", head=head, well=found)

    @app.get("/series/{series_id}", response_class=HTMLResponse)
    def series(
        request: Request,
        session: Reader,
        series_id: str,
        wells: Wells = "clear",
        log: bool = False,
        linear: Annotated[str | None, Query(pattern="^(reciprocal|hanes|eadie)$")] = None,
    ) -> Response:
        with published(site) as connection:
            found = series_page.the_series(connection, series_id)
        return page(
            request,
            session,
            "series.html",
            series=found,
            wells_fitted=wells,
            log=log,
            linear=linear,
            linear_plots=drawings.LINEAR_PLOTS,
        )

    @app.get("/lot/{assay}/{lot:path}", response_class=HTMLResponse)
    def lot(request: Request, session: Reader, assay: str, lot: str) -> Response:
        with published(site) as connection:
            return page(request, session, "lot.html", lot=the_lot(connection, assay, lot))

    @app.get("/quarantine", response_class=HTMLResponse)
    def quarantine(request: Request, session: Reader) -> Response:
        with published(site) as connection:
            return page(request, session, "quarantine.html", files=quarantined_files(connection))

    @app.get("/quarantine/{file_id}", response_class=HTMLResponse)
    def quarantine_file(
        request: Request, session: Reader, file_id: str, profile: str | None = None
    ) -> Response:
        profiles = load_configuration(site.config).profiles
        if profile is not None and profile not in profiles:
            raise NotFound(f"there is no profile '{profile}'")
        with published(site) as connection:
            found = quarantined_file(
                connection, site, file_id, None if profile is None else profiles[profile]
            )
        return page(request, session, "quarantined.html", file=found, profiles=list(profiles), tried=profile)


def _add_figures(app: FastAPI, site: Site) -> None:
    drawn = Drawn()

    @app.get("/figure/progress/{analysis_id}/{well}.svg")
    def progress(session: Reader, analysis_id: str, well: str, theme: Theme = "light") -> Response:
        def draw() -> bytes:
            with published(site) as connection:
                head = plate_head(connection, analysis_id)
                row = series_page.the_well(connection, analysis_id, well).row
                time_s, product_um = curves_of(connection, site, head).of(well)
            if not time_s.size:
                raise NotFound(f"well {well} was not read")
            return drawings.progress_svg(time_s, product_um, row, theme)

        del session
        return _svg(drawn.once(("progress", analysis_id, well, theme), draw))

    @app.get("/figure/series/{series_id}.svg")
    def series(
        session: Reader, series_id: str, theme: Theme = "light", wells: Wells = "clear", log: bool = False
    ) -> Response:
        def draw() -> bytes:
            with published(site) as connection:
                points = series_page.fitted_points(connection, series_id, wells)
                shown = series_page.the_series(connection, series_id)
            fitted = {point.well for point in points}
            others = [well for well in shown.wells if well.well not in fitted]
            return drawings.series_svg(points, others, theme, logarithmic=log)

        del session
        return _svg(drawn.once(("series", series_id, wells, theme, log), draw))

    @app.get("/figure/profile/{series_id}/{constant}.svg")
    def profile(session: Reader, series_id: str, constant: str, theme: Theme = "light") -> Response:
        def draw() -> bytes:
            with published(site) as connection:
                points = series_page.fitted_points(connection, series_id, "clear")
            profile = drawings.profile_svg(points, constant, theme)
            if profile is None:
                raise NotFound(f"there is no profile of {constant} here")
            return profile

        del session
        return _svg(drawn.once(("profile", series_id, constant, theme), draw))

    @app.get("/figure/linear/{series_id}/{kind}.svg")
    def linear(session: Reader, series_id: str, kind: str, theme: Theme = "light") -> Response:
        def draw() -> bytes:
            with published(site) as connection:
                return drawings.linear_svg(
                    series_page.fitted_points(connection, series_id, "clear"), kind, theme
                )

        del session
        return _svg(drawn.once(("linear", series_id, kind, theme), draw))


class Drawn:
    """Figures drawn lately. What they show is named by its content, so a kept one is never out of date."""

    MOST = 512

    def __init__(self) -> None:
        self._kept: dict[Hashable, bytes] = {}
        self._lock = threading.Lock()

    def once(self, key: Hashable, draw: Callable[[], bytes]) -> bytes:
        """The figure of this key, drawn if it is not kept."""
        with self._lock:
            kept = self._kept.get(key)
        if kept is None:
            kept = draw()
            with self._lock:
                self._kept[key] = kept
                while len(self._kept) > self.MOST:
                    del self._kept[next(iter(self._kept))]
        return kept


def _svg(content: bytes) -> Response:
    # Results are named by their content: what an address shows never changes.
    return Response(content, media_type="image/svg+xml", headers={"cache-control": "private, max-age=3600"})


def _add_answers_to_errors(app: FastAPI) -> None:
    def answer(status: int) -> Callable[[Request, Exception], Response]:
        def plain(request: Request, error: Exception) -> Response:
            what = (
                error.detail
                if isinstance(error, HTTPException)
                else str(error.args[0] if error.args else error)
            )
            code = error.status_code if isinstance(error, HTTPException) else status
            session = cast(Sessions, app.state.sessions).find(request.cookies.get(COOKIE))
            if request.url.path.startswith("/api/"):
                return JSONResponse({"error": str(what)}, code)
            return page(request, session, "problem.html", status=code, problem=str(what))

        return plain

    def sign_in_first(request: Request, error: Exception) -> Response:
        del error
        if request.url.path.startswith("/api/"):
            return JSONResponse({"error": "sign in first"}, 401)
        if request.method != "GET" or request.url.path.startswith("/figure/"):
            return HTMLResponse("sign in first", 401)
        return RedirectResponse("/sign-in", 303)

    app.add_exception_handler(NotSignedIn, sign_in_first)
    app.add_exception_handler(NotAllowed, answer(403))
    app.add_exception_handler(NotFound, answer(404))
    app.add_exception_handler(HalfsatError, answer(409))
    app.add_exception_handler(HTTPException, answer(500))
