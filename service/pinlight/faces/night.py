"""The night on the page: targets a line each, the blocks of looks, and the night on paper."""

from typing import Any
from urllib.parse import urlencode

from flask import Blueprint, Response, request

from pinlight.errors import InputError, NotFoundError
from pinlight.faces.frame import address_question, form_context, render_page, with_defaults
from pinlight.faces.library import plan_night
from pinlight.faces.papers import plan_csv, plan_ics, plan_page, timeline
from pinlight.faces.service import planning, service
from pinlight.faces.setups import named_array
from pinlight.faces.targets import requests_from_text, resolve_target
from pinlight.planning.night import NightPlan, Request

__all__ = ["night"]

night = Blueprint("night", __name__)

_KEYS = ("targets", "array", "mode", "stations", "night", "from", "to", "edition")
_TIME_LIMIT_S = 3.0


@night.get("/plan")
def night_page() -> tuple[str, int]:
    """A night of blocks; every state has its address."""
    plan, problem, status = None, None, 200
    asked: dict[str, str] = {}
    try:
        asked = address_question(request.args)
        if "targets" in asked and asked.keys() & {"night", "from", "to"}:
            plan = _plan(asked)
    except (InputError, NotFoundError) as error:
        problem = str(error)
        status = 404 if isinstance(error, NotFoundError) else 400
    text = render_page(
        "night.html",
        **form_context(asked),
        asked=asked,
        plan=plan,
        problem=problem,
        title="Night · Pinlight",
        query=urlencode(asked),
        timeline=timeline(plan) if plan else None,
    )
    return text, status


def _plan(asked: dict[str, str]) -> NightPlan:
    asked = with_defaults(asked)
    for name in asked:
        if name not in _KEYS:
            raise InputError(f"{name} is not a known key; it may be one of {', '.join(_KEYS)}")
    return _plan_of(requests_from_text(asked.get("targets", ""), service().catalogue), asked)


def _plan_of(requests: list[Request], asked: dict[str, str]) -> NightPlan:
    arrays = service().arrays
    with planning():
        return plan_night(
            service().catalogue,
            requests,
            array=named_array(asked["array"], arrays),
            stations=asked.get("stations"),
            mode=asked.get("mode"),
            night=asked.get("night"),
            from_=asked.get("from"),
            to=asked.get("to"),
            edition=asked.get("edition"),
            time_limit_s=_TIME_LIMIT_S,
        )


@night.get("/plan.csv")
def night_csv() -> Response:
    """The night as CSV, one line a look."""
    return _paper(plan_csv(_plan(address_question(request.args))), "text/csv; charset=utf-8", "night.csv")


@night.get("/plan.ics")
def night_ics() -> Response:
    """The night as iCalendar, one event a block."""
    return _paper(plan_ics(_plan(address_question(request.args))), "text/calendar; charset=utf-8", "night.ics")


@night.get("/plan.html")
def night_report() -> Response:
    """The night as one file to keep and print."""
    return _paper(plan_page(_plan(address_question(request.args))), "text/html; charset=utf-8", "night.html")


def _paper(text: str, kind: str, name: str) -> Response:
    response = Response(text, content_type=kind)
    response.headers["Content-Disposition"] = f"attachment; filename={name}"
    return response


@night.get("/looks")
def looks() -> dict[str, Any]:
    """The looks that a night for this target alone would have, for the plot of a ranking's night."""
    asked = with_defaults(address_question(request.args))
    target = resolve_target(service().catalogue, asked.get("target", ""))
    plan = _plan_of([Request(target)], asked)
    blocks = [block.to_dict() for block in plan.blocks]
    return {"blocks": blocks, "reasons": [reason for _, reason in plan.unscheduled]}
