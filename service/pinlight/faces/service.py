"""What the HTTP interface and the page share: the service they ask, and how questions are read."""

import json
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple, TypeVar

from flask import Response, current_app, request
from pydantic import BaseModel, ValidationError
from werkzeug.datastructures import MultiDict
from werkzeug.exceptions import BadRequest, ServiceUnavailable

from pinlight.arrays.files import Array, describe
from pinlight.catalogue.store import Catalogue
from pinlight.errors import InputError
from pinlight.faces.library import plan_night, rank
from pinlight.faces.models import PlanQuestion, RankingQuestion, TargetQuestion
from pinlight.faces.setups import named_array
from pinlight.faces.tables import CONTENT_TYPES, FORMATS, write_table
from pinlight.faces.targets import placed_target
from pinlight.planning.night import NightPlan, Request
from pinlight.ranking.result import Ranking
from pinlight.ranking.target import Target
from pinlight.sky.time import parse_utc

if TYPE_CHECKING:
    from astropy.table import Table

__all__ = [
    "Service",
    "answer_plan",
    "answer_ranking",
    "as_asked",
    "from_query",
    "planning",
    "posted_json",
    "read_question",
    "service",
]

_PLANS_AT_ONCE = threading.BoundedSemaphore(2)
_WAIT_S = 20.0

Question = TypeVar("Question", bound=BaseModel)


class Service(NamedTuple):
    """What the requests work on."""

    catalogue: Catalogue
    arrays: dict[str, Array]
    arrays_folder: Path | None
    open_reading: bool = True


def service() -> Service:
    """The service of the running application."""
    found: Service = current_app.extensions["pinlight"]
    return found


def read_question(model: type[Question], values: Any) -> Question:
    """The question in `values`, or an error that names what is wrong with it."""
    try:
        json.dumps(values, ensure_ascii=False).encode()
    except UnicodeEncodeError as error:
        raise InputError("the question holds half a character (a lone surrogate)") from error
    try:
        return model.model_validate(values)
    except ValidationError as error:
        raise InputError(describe(error)) from error


def from_query(values: MultiDict[str, str]) -> dict[str, str]:
    """A query's parameters but `format`; one given twice is refused, an empty one counts as not given."""
    for name in values:
        if len(values.getlist(name)) > 1:
            raise InputError(f"{name} is given {len(values.getlist(name))} times; give it once")
    return {name: value for name, value in values.items() if value and name != "format"}


def as_asked(answer: dict[str, Any], name: str, make: "Callable[[], Table]") -> dict[str, Any] | Response:
    """An answer as JSON or, by ``?format=``, its list as a table for other tools."""
    kind = request.args.get("format") or "json"
    if kind == "json":
        return answer
    if kind not in FORMATS:
        raise InputError(f"format is {kind!r}; it may be one of {', '.join(FORMATS)}")
    response = Response(write_table(make(), kind, name), content_type=CONTENT_TYPES[kind])
    ending = {"votable": "vot"}.get(kind, kind)
    response.headers["Content-Disposition"] = f"inline; filename={name}.{ending}"
    return response


def posted_json() -> Any:
    """The request's body, or an error that says what is wrong with it."""
    try:
        return request.get_json()
    except BadRequest as error:
        raise InputError("the body is not JSON") from error
    except RecursionError as error:
        raise InputError("the body is nested too deeply") from error


@contextmanager
def planning() -> Iterator[None]:
    """A turn at planning a night, which keeps a processor busy for seconds: a few at once, the rest wait.

    Raises
    ------
    ServiceUnavailable
        If no turn comes in time.
    """
    if not _PLANS_AT_ONCE.acquire(timeout=_WAIT_S):
        raise ServiceUnavailable("other nights are being planned; ask again in a little while", retry_after=10)
    try:
        yield
    finally:
        _PLANS_AT_ONCE.release()


def answer_plan(question: PlanQuestion) -> NightPlan:
    """The night plan that a question asks for."""
    known = service()
    requests = []
    for one in question.targets:
        target = placed_target(known.catalogue, **one.model_dump(include=set(TargetQuestion.model_fields)))
        required = one.required_error_percent
        requests.append(
            Request(
                target,
                one.priority,
                one.repeats,
                None if required is None else required / 100,
                parse_utc(one.from_, f"from of {target.name}") if one.from_ else None,
                parse_utc(one.to, f"to of {target.name}") if one.to else None,
            )
        )
    with planning():
        return plan_night(
            known.catalogue,
            requests,
            array=named_array(question.array, known.arrays),
            **question.model_dump(exclude={"targets", "array"}),
        )


def answer_ranking(question: RankingQuestion) -> Ranking:
    """The ranking that a question asks for; its array is one the server knows, never a path."""
    known, asked = service(), question.target
    return rank(
        known.catalogue,
        Target(**asked.model_dump()) if isinstance(asked, TargetQuestion) else asked,
        array=None if question.array is None else named_array(question.array, known.arrays),
        **question.model_dump(exclude={"target", "array"}),
    )
