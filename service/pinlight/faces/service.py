"""What the HTTP interface and the page share: the service they ask, and how questions are read."""

from typing import Any, NamedTuple, TypeVar

from flask import current_app
from pydantic import BaseModel, ValidationError
from werkzeug.datastructures import MultiDict

from pinlight.arrays.files import Array, describe
from pinlight.catalogue.store import Catalogue
from pinlight.errors import InputError
from pinlight.faces.library import named_array, rank
from pinlight.faces.models import RankingQuestion, TargetQuestion
from pinlight.ranking.result import Ranking
from pinlight.ranking.target import Target

__all__ = ["Service", "answer_ranking", "from_query", "read_question", "service"]

Question = TypeVar("Question", bound=BaseModel)


class Service(NamedTuple):
    """What the requests work on."""

    catalogue: Catalogue
    arrays: dict[str, Array]


def service() -> Service:
    """The service of the running application."""
    found: Service = current_app.extensions["pinlight"]
    return found


def read_question(model: type[Question], values: Any) -> Question:
    """The question in `values`, or an error that names what is wrong with it."""
    try:
        return model.model_validate(values)
    except ValidationError as error:
        raise InputError(describe(error)) from error


def from_query(values: MultiDict[str, str]) -> dict[str, str]:
    """A query's parameters; one given twice is refused, an empty one counts as not given."""
    for name in values:
        if len(values.getlist(name)) > 1:
            raise InputError(f"{name} is given {len(values.getlist(name))} times; give it once")
    return {name: value for name, value in values.items() if value.strip()}


def answer_ranking(question: RankingQuestion) -> Ranking:
    """The ranking that a question asks for; its array is one the server knows, never a path."""
    known, asked = service(), question.target
    return rank(
        known.catalogue,
        Target(**asked.model_dump()) if isinstance(asked, TargetQuestion) else asked,
        array=None if question.array is None else named_array(question.array, known.arrays),
        **question.model_dump(exclude={"target", "array"}),
    )
