"""The HTTP interface, a Flask application; every error is a problem detail."""

import threading
from collections.abc import Iterable
from itertools import repeat
from pathlib import Path
from typing import Any

import numpy as np
from flask import Blueprint, Flask, Response, current_app, json, request
from werkzeug.exceptions import HTTPException, NotFound, ServiceUnavailable

from pinlight.arrays.geometry import baselines
from pinlight.catalogue.store import Catalogue
from pinlight.errors import (
    CatalogueError,
    InputError,
    NotAllowedError,
    NotFoundError,
    PinlightError,
    TokenError,
)
from pinlight.faces.access import challenge, check_access
from pinlight.faces.frame import prepare_templates, render_page
from pinlight.faces.models import PlanQuestion, RankingQuestion, StarsQuestion
from pinlight.faces.night import night
from pinlight.faces.openapi import describe_api
from pinlight.faces.page import page
from pinlight.faces.papers import plan_rows
from pinlight.faces.records import records
from pinlight.faces.service import (
    Service,
    answer_plan,
    answer_ranking,
    as_asked,
    from_query,
    posted_json,
    read_question,
    service,
)
from pinlight.faces.serving import prepare_answers
from pinlight.faces.setups import known_arrays
from pinlight.faces.tables import stars_table, table_of
from pinlight.faces.vo import vo
from pinlight.ranking.columns import StarColumns, flag_words
from pinlight.sky.positions import check_position
from pinlight.version import __version__

__all__ = ["create_app"]

STATUS = {InputError: 400, TokenError: 401, NotAllowedError: 403, NotFoundError: 404, CatalogueError: 503}
_LARGEST_BODY = 1_000_000
api = Blueprint("api", __name__, url_prefix="/api/v1")


def create_app(catalogue: Catalogue, arrays_folder: Path | None = None, *, open_reading: bool = True) -> Flask:
    """The application over an open catalogue; with `open_reading` off even reading needs a token.

    Raises
    ------
    InputError
        If the folder of arrays holds none, or a wrong file.
    """
    app = Flask(__name__)
    app.config["MAX_CONTENT_LENGTH"] = _LARGEST_BODY
    app.json.sort_keys = False  # type: ignore[attr-defined]
    arrays = known_arrays(arrays_folder)
    if not arrays:
        raise InputError(f"arrays is {arrays_folder}, a folder without .toml files")
    app.extensions["pinlight"] = Service(catalogue, arrays, arrays_folder, open_reading)
    app.before_request(check_access)
    app.register_blueprint(api)
    app.register_blueprint(records)
    app.register_blueprint(page)
    app.register_blueprint(night)
    app.register_blueprint(vo)
    prepare_templates(app)
    app.register_error_handler(PinlightError, _library_problem)
    app.register_error_handler(HTTPException, _http_problem)
    app.register_error_handler(Exception, _unforeseen_problem)
    app.extensions["pinlight_stopping"] = threading.Event()
    prepare_answers(app)
    return app


def _problem(status: int, title: str, detail: str) -> Response:
    """Problem details, RFC 9457; the page gets its own view of them."""
    if not request.path.startswith("/api/"):
        page_text = render_page("problem.html", title=f"{title} · Pinlight", heading=title, detail=detail)
        return Response(page_text, status, content_type="text/html; charset=utf-8")
    body = {"type": "about:blank", "title": title, "status": status, "detail": detail}
    return Response(json.dumps(body), status, content_type="application/problem+json")


def _library_problem(error: PinlightError) -> Response:
    status = next((code for kind, code in STATUS.items() if isinstance(error, kind)), 500)
    titles = {400: "Impossible", 401: "No token", 403: "Not allowed", 404: "Not known", 503: "No catalogue"}
    response = _problem(status, titles.get(status, "Error"), str(error))
    if isinstance(error, TokenError):
        response.headers["WWW-Authenticate"] = challenge()
    return response


def _http_problem(error: HTTPException) -> Response:
    response = _problem(error.code or 500, error.name, error.description or error.name)
    told = ("Allow", "Retry-After")
    response.headers.extend((key, value) for key, value in error.get_headers() if key in told)
    return response


def _unforeseen_problem(error: Exception) -> Response:
    current_app.logger.error("unforeseen error", exc_info=error)
    return _problem(500, "Error", "an error of Pinlight's own; the server's log has it")


@api.get("/rankings")
def rankings() -> dict[str, Any] | Response:
    ranking = answer_ranking(read_question(RankingQuestion, from_query(request.args)))
    return as_asked(ranking.to_dict(), "calibrators", ranking.table)


@api.post("/rankings")
def rankings_posted() -> dict[str, Any] | Response:
    ranking = answer_ranking(read_question(RankingQuestion, posted_json()))
    return as_asked(ranking.to_dict(), "calibrators", ranking.table)


@api.post("/plans")
def plans() -> dict[str, Any] | Response:
    plan = answer_plan(read_question(PlanQuestion, posted_json()))
    return as_asked(plan.to_dict(), "looks", lambda: table_of(plan_rows(plan), {"edition": plan.edition}))


@api.get("/stars")
def stars() -> dict[str, Any] | Response:
    question = read_question(StarsQuestion, from_query(request.args))
    columns = service().catalogue.columns()
    if question.name is not None:
        if question.ra_deg is not None or question.dec_deg is not None:
            raise InputError("name and a position are both given; give one of them")
        rows = np.flatnonzero(columns.ids == service().catalogue.find(question.name))
        answer = {"edition": columns.edition, "count": len(rows), "stars": _briefs(columns, rows)}
        return as_asked(answer, "stars", lambda: stars_table(columns, rows))
    if question.ra_deg is None or question.dec_deg is None:
        missing = "name is" if question.ra_deg is question.dec_deg else (
            "dec_deg is" if question.dec_deg is None else "ra_deg is"
        )  # fmt: skip
        raise InputError(f"{missing} missing; give a name, or ra_deg and dec_deg")
    place = check_position(question.ra_deg, question.dec_deg)
    rows, apart = columns.cone(*place, question.radius_deg)
    nearest = np.argsort(apart, kind="stable")[: question.limit]
    answer = {
        "edition": columns.edition,
        "count": len(rows),
        "stars": _briefs(columns, rows[nearest], apart[nearest].tolist()),
    }
    return as_asked(answer, "stars", lambda: stars_table(columns, rows[nearest], apart[nearest]))


def _briefs(
    columns: StarColumns, rows: Any, apart: Iterable[float | None] = repeat(None)
) -> list[dict[str, Any]]:
    def number(values: Any, row: int, digits: int) -> float | None:
        return round(float(values[row]), digits) if np.isfinite(values[row]) else None

    total = np.hypot(columns.own_error_mas[rows], columns.shared_error_mas[rows])
    return [
        {
            "star_id": int(columns.ids[row]),
            "name": columns.names[row].decode(),
            "ra_deg": float(columns.ra_deg[row]),
            "dec_deg": float(columns.dec_deg[row]),
            "separation_deg": None if separation is None else round(separation, 6),
            "spectral_type": columns.spectral_types[row].decode(),
            "flags": flag_words(int(columns.flags[row])),
            "magnitudes": {
                band: {
                    "value": round(float(values[row]), 3),
                    "error": round(float(columns.magnitude_errors[band][row]), 3),
                }
                for band, values in columns.magnitudes.items()
                if np.isfinite(values[row])
            },
            "limb_darkened_mas": number(columns.diameter_mas, row, 5),
            "error_mas": number(total, index, 5),
        }
        for index, (row, separation) in enumerate(zip(rows, apart, strict=False))
    ]


@api.get("/stars/<int:star_id>")
def star(star_id: int) -> dict[str, Any]:
    if star_id >= 2**63:
        raise NotFound(f"star_id is {star_id}; there is no such star")
    return service().catalogue.star(star_id)


@api.get("/arrays")
def arrays() -> dict[str, Any] | Response:
    listed = [
        {
            "key": key,
            "name": array.name,
            "latitude_deg": array.latitude_deg,
            "longitude_deg": array.longitude_deg,
            "height_m": array.height_m,
            "stations": [station.name for station in array.station],
            "longest_baseline_m": round(baselines(array.station)[0].length_m, 3),
            "modes": [mode.model_dump() for mode in array.mode],
            "limits": array.limits.model_dump(),
            "drift": array.drift.model_dump(),
        }
        for key, array in service().arrays.items()
    ]
    return as_asked({"arrays": listed}, "arrays", lambda: table_of(listed))


@api.get("/health")
def health() -> dict[str, Any]:
    """Ready: the catalogue can be read, and the server is not about to stop."""
    if current_app.extensions["pinlight_stopping"].is_set():
        raise ServiceUnavailable("the server is stopping; ask another, or later", retry_after=5)
    columns = service().catalogue.columns()
    return {"status": "ok", "pinlight": __version__, "edition": columns.edition, "stars": len(columns)}


@api.get("/health/live")
def alive() -> dict[str, Any]:
    """Alive: the process answers, whatever the catalogue does."""
    return {"status": "alive", "pinlight": __version__}


@api.get("/openapi.json")
def openapi() -> dict[str, Any]:
    return describe_api()
