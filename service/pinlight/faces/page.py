"""The page: one target, its ranked calibrators and where each one's error comes from; and a star."""

import json
import shlex
from functools import lru_cache
from importlib.resources import files
from typing import Any
from urllib.parse import urlencode

from flask import Blueprint, Response, render_template, request, url_for

from pinlight.catalogue.standings import STANDINGS
from pinlight.errors import InputError, NotFoundError
from pinlight.faces.frame import address_question, bokeh_version, form_context, render_page, with_defaults
from pinlight.faces.models import RankingQuestion
from pinlight.faces.openapi import describe_api
from pinlight.faces.service import answer_ranking, read_question, service
from pinlight.ranking.budget import TERMS
from pinlight.ranking.figure import DARK, LIGHT, NO_DATA, plot_data, plots
from pinlight.ranking.gates import REASONS, REMARKS

__all__ = ["page"]

page = Blueprint("page", __name__)

_PALETTES = {"light": LIGHT, "dark": DARK}
# Fields that stand in the form's second part, opened when one of them is used.
_FURTHER = ("separation_max_deg", "magnitude_max", "v2_min", "judge", "from", "to", "at", "with", "edition")


@page.get("/")
def first_page() -> tuple[str, int]:
    """The ranking of one target; every state has its address."""
    context, status = _ranking_view()
    return render_page("rank.html", **context), status


@page.get("/view")
def view() -> tuple[dict[str, Any], int]:
    """The parts of the ranking's page that change with the question, for the page's own script."""
    context, status = _ranking_view()
    parts = {name: render_template(f"_{name}.html", **context) for name in ("head", "list", "sets", "more")}
    parts["form"] = render_template("_form.html", **context)
    return {
        "state": context["state"],
        "title": context["title"],
        "night": context["night"],
        "parts": parts,
        "plots": context["plots"],
    }, status


def _ranking_view() -> tuple[dict[str, Any], int]:
    """What the templates show, and the status."""
    ranking, problem, status = None, None, 200
    asked: dict[str, str] = {}
    try:
        asked = address_question(request.args)
        if "target" in asked:
            asked = with_defaults(asked)
            ranking = answer_ranking(read_question(RankingQuestion, asked))
    except (InputError, NotFoundError) as error:
        problem = str(error)
        status = 404 if isinstance(error, NotFoundError) else 400
    data = None
    if ranking and ranking.calibrators:
        data = plot_data(ranking) | {"night": ranking.span is not None}
    name = (ranking.target.name or asked["target"]) if ranking else ""
    context = {
        **form_context(asked),
        "asked": asked,
        "further_used": any(key in asked for key in _FURTHER),
        "ranking": ranking,
        "problem": problem,
        "state": "problem" if problem else "nothing" if not ranking else "ranking" if data else "empty",
        "title": f"{name} · Pinlight" if ranking else "Pinlight",
        "name": name,
        "night": bool(data and data["night"]),
        "plots": data,
        "terms": TERMS,
        "reasons": REASONS,
        "remarks": REMARKS,
        "elsewhere": _elsewhere(asked) if ranking else None,
        "widest": max((star.calibration_error for star in ranking.calibrators), default=1.0)
        if ranking
        else 1.0,
    }
    return context, status


def _elsewhere(asked: dict[str, str]) -> dict[str, str]:
    """The same question as a command, as Python, and over HTTP."""
    fields = RankingQuestion.model_fields
    order = [field.alias or name for name, field in fields.items()]
    question = dict(sorted(asked.items(), key=lambda item: order.index(item[0])))
    if service().arrays_folder and "array" in question:
        question["array"] = f"{question['array']}.toml"
    target = question.pop("target")
    options = " ".join(f"--{key.replace('_', '-')} {shlex.quote(value)}" for key, value in question.items())
    numbers = {
        name for name, field in fields.items() if "float" in str(field.annotation) or field.annotation is int
    }
    arguments = ", ".join(
        f"{key + '_' if key in ('from', 'with') else key}="
        + (value if key in numbers else repr(_listed(key, value)))
        for key, value in question.items()
    )
    address = url_for("api.rankings", _external=True) + "?" + urlencode(asked)
    return {
        "Command": f"pinlight rank {shlex.quote(target)} {options}",
        "Python": (
            "import pinlight as pl\n\n"
            f"ranking = pl.rank(pl.open_catalogue(), {target!r}, {arguments})\nprint(ranking.table())"
        ),
        "curl": f"curl {shlex.quote(address)}",
    }


def _listed(key: str, value: str) -> str | list[str]:
    return [name.strip() for name in value.split(",")] if key in ("stations", "with") else value


@page.get("/suggest")
def suggest() -> dict[str, Any]:
    """Names that begin as the reader writes."""
    return {"stars": service().catalogue.suggest(request.args.get("q", "")[:200])}


@page.get("/plots/<scheme>.json")
def plots_json(scheme: str) -> Response:
    """The empty plots in light or dark; the page's script fills their sources."""
    if scheme not in _PALETTES:
        raise NotFoundError(f"scheme is {scheme!r}; it may be light or dark")
    return _lasting(Response(_plots_json(scheme), content_type="application/json"))


@lru_cache(maxsize=2)
def _plots_json(scheme: str) -> str:
    from bokeh.embed import json_item

    drawn = plots(_PALETTES[scheme], NO_DATA)
    for plot in drawn.values():
        plot.sizing_mode = "stretch_width"
    drawn["sky"].sizing_mode = "scale_width"
    drawn["sky"].aspect_ratio = 1
    return json.dumps({name: json_item(drawn[name]) for name in ("sky", "visibility", "night")})


@page.get("/bokeh/<release>/bokeh.min.js")
def bokeh_script(release: str) -> Response:
    """Bokeh's own script, from the installed package."""
    if release != bokeh_version():
        raise NotFoundError(f"release is {release!r}; it may be {bokeh_version()}")
    return _lasting(Response(_bokeh_script(), content_type="text/javascript; charset=utf-8"))


@lru_cache(maxsize=1)
def _bokeh_script() -> bytes:
    return files("bokeh").joinpath("server/static/js/bokeh.min.js").read_bytes()


def _lasting(response: Response) -> Response:
    """An answer whose address changes when it does."""
    response.headers["Cache-Control"] = "public, max-age=31536000, immutable"
    return response


@page.get("/star/<int:star_id>")
def star_view(star_id: int) -> str:
    """Everything known of one star, and how its diameter came about."""
    if star_id >= 2**63:
        raise NotFoundError(f"star_id is {star_id}; there is no such star")
    star = service().catalogue.star(star_id)
    return render_page(
        "star.html",
        standings=STANDINGS,
        arrays=service().arrays,
        star=star,
        title=f"{star['name']} · Pinlight",
        spread=_spread(star["diameter"]),
    )


def _spread(diameter: dict[str, Any] | None) -> dict[str, Any] | None:
    """Each relation's diameter on an axis of per cent of the width, with the adopted one as a band."""
    if diameter is None:
        return None
    theta, error = diameter["limb_darkened_mas"], diameter["error_mas"]
    values = [part["diameter_mas"] for part in diameter["relations"]]
    low, high = min([*values, theta - 1.5 * error]), max([*values, theta + 1.5 * error])
    margin = 0.05 * (high - low)
    low, high = low - margin, high + margin

    def place(value: float) -> float:
        return round(100 * (value - low) / (high - low), 2)

    return {
        "band": (place(theta - error), round(place(theta + error) - place(theta - error), 2)),
        "middle": place(theta),
        "dots": [place(value) for value in values],
        "low": low,
        "high": high,
    }


@page.get("/api")
def api_view() -> str:
    """The HTTP interface, described from its OpenAPI file."""
    return render_page("api.html", api=describe_api(), title="HTTP interface · Pinlight")
