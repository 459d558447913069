"""What the page's views share: the frame, the question in the address, the form, the policy."""

import secrets
from functools import lru_cache
from importlib.metadata import version
from typing import Any

from flask import Flask, g, render_template
from werkzeug.datastructures import MultiDict

from pinlight.arrays.files import Array
from pinlight.faces.service import from_query, service
from pinlight.ranking.html import budget_strip
from pinlight.sky.time import format_utc
from pinlight.version import __version__

__all__ = [
    "address_question",
    "bokeh_version",
    "form_context",
    "page_policy",
    "prepare_templates",
    "render_page",
    "with_defaults",
]


def page_policy() -> str:
    """The content-security policy of a page: scripts of this server only, styles too.

    Bokeh styles its plots by <style> elements of its own; they carry this answer's nonce.
    """
    nonce = g.get("nonce")
    styles = f"'self' 'nonce-{nonce}'" if nonce else "'self'"
    return (
        f"default-src 'none'; script-src 'self'; style-src {styles}; img-src 'self' data:; connect-src 'self'; "
        "form-action 'self'; base-uri 'none'; frame-ancestors 'none'"
    )


def render_page(template: str, **context: Any) -> str:
    """A page in its frame."""
    g.nonce = secrets.token_urlsafe(16)
    return render_template(template, nonce=g.nonce, version=__version__, bokeh=bokeh_version(), **context)


@lru_cache(maxsize=1)
def bokeh_version() -> str:
    """Of the installed package."""
    return version("bokeh")


def prepare_templates(app: Flask) -> None:
    """The filters that the templates use."""
    app.jinja_env.filters |= {
        "clock": lambda mjd_tai: format_utc(mjd_tai)[11:16],
        "utc": lambda mjd_tai: format_utc(mjd_tai)[:16].replace("T", " "),
        "thousands": lambda number: f"{number:,}".replace(",", "\N{NARROW NO-BREAK SPACE}"),
        "words": lambda text: text.replace("_", " "),
        "strip": budget_strip,
        "kind": _kind,
    }
    app.jinja_env.trim_blocks = app.jinja_env.lstrip_blocks = True


def _kind(schema: dict[str, Any]) -> str:
    """What a field of the API may hold, in words."""
    options = schema.get("anyOf") or schema.get("oneOf") or [schema]
    kinds = []
    for option in options:
        if option.get("type") == "array":
            kinds.append(f"list of {_kind(option['items'])}")
        elif option.get("type") != "null":
            kinds.append(option.get("$ref", "").split("/")[-1] or option.get("type", "anything"))
    return " or ".join(dict.fromkeys(kinds))


def address_question(values: MultiDict[str, str]) -> dict[str, str]:
    """The question in the address; stations may be given one by one, as a form gives them."""
    together = MultiDict((name, value.strip()) for name, value in values.items(multi=True))
    if stations := values.getlist("stations"):
        together["stations"] = ",".join(stations)
    return from_query(together)


def form_context(asked: dict[str, str]) -> dict[str, Any]:
    """The arrays, and the stations and modes of the chosen one."""
    arrays = service().arrays
    wanted = asked.get("array", next(iter(arrays))).casefold()
    key = next((key for key, array in arrays.items() if wanted in (key.casefold(), array.name.casefold())), "")
    array: Array = arrays.get(key) or next(iter(arrays.values()))
    names = [name.strip() for name in asked.get("stations", "").split(",") if name.strip()]
    return {
        "arrays": arrays,
        "array_key": key,
        "array": array,
        "stations": [(station.name, not names or station.name in names) for station in array.station],
    }


def with_defaults(asked: dict[str, str]) -> dict[str, str]:
    """The question with the first array and its first mode where none is named."""
    arrays = service().arrays
    if not {"baseline_m", "wavelength_um"} & asked.keys():
        asked = {"array": next(iter(arrays))} | asked
        if asked["array"] in arrays:
            asked = {"mode": arrays[asked["array"]].mode[0].name} | asked
    return asked
