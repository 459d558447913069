"""The OpenAPI description, made from the models."""

from typing import Any

from pydantic import BaseModel
from pydantic.json_schema import models_json_schema

from pinlight.faces.models import (
    AliveAnswer,
    ArraysAnswer,
    ChangesAnswer,
    ChangesQuestion,
    ComparisonAnswer,
    ComparisonQuestion,
    CorrectionAnswer,
    EditionAnswer,
    EditionCheck,
    EditionsAnswer,
    HealthAnswer,
    IntakeAnswer,
    IntakeQuestion,
    MergerQuestion,
    PlanAnswer,
    PlanQuestion,
    PreferenceQuestion,
    Problem,
    RankingAnswer,
    RankingQuestion,
    SplitQuestion,
    StandingQuestion,
    StandingRecord,
    StandingsAnswer,
    StarAnswer,
    StarChangesAnswer,
    StarsAnswer,
    StarsQuestion,
    TargetQuestion,
)
from pinlight.faces.tables import CONTENT_TYPES, FORMATS
from pinlight.version import __version__

__all__ = ["describe_api"]

_QUESTIONS = (
    RankingQuestion,
    PlanQuestion,
    StarsQuestion,
    TargetQuestion,
    StandingQuestion,
    IntakeQuestion,
    PreferenceQuestion,
    MergerQuestion,
    SplitQuestion,
)
_ANSWERS = (
    RankingAnswer,
    PlanAnswer,
    StarsAnswer,
    StarAnswer,
    StandingRecord,
    StandingsAnswer,
    ChangesAnswer,
    StarChangesAnswer,
    EditionAnswer,
    EditionsAnswer,
    EditionCheck,
    ComparisonAnswer,
    IntakeAnswer,
    CorrectionAnswer,
    ArraysAnswer,
    HealthAnswer,
    AliveAnswer,
    Problem,
)


def _schema(model: type[BaseModel]) -> dict[str, str]:
    return {"$ref": f"#/components/schemas/{model.__name__}"}


def _parameters(model: type[BaseModel]) -> list[dict[str, Any]]:
    """Query parameters from a question's fields; a list is written with commas."""
    schema = model.model_json_schema(by_alias=True)
    parameters = []
    for name, described in schema["properties"].items():
        options = [option for option in described.get("anyOf", [described]) if option.get("type") != "null"]
        chosen = {"type": "string"} if name in ("target", "stations", "with") else options[0]
        parameters.append(
            {
                "name": name,
                "in": "query",
                "allowEmptyValue": True,  # an empty one counts as not given
                "required": name in schema.get("required", []),
                "schema": {key: value for key, value in chosen.items() if key != "title"},
            }
        )
    return parameters


_FORMAT = {
    "name": "format",
    "in": "query",
    "allowEmptyValue": True,
    "required": False,
    "schema": {"type": "string", "enum": list(FORMATS), "default": "json"},
    "description": "The list as a table for other tools.",
}


def _listed(responses: dict[str, Any]) -> dict[str, Any]:
    """Responses of a list that also comes as a table."""
    for kind in CONTENT_TYPES.values():
        responses["200"]["content"][kind.split(";")[0]] = {"schema": {"type": "string"}}
    return responses


def _responses(model: type[BaseModel], *problems: int, done: str = "200") -> dict[str, Any]:
    meanings = {400: "Something asked for is impossible.", 404: "Not known.", 413: "The body is too large."}
    meanings |= {
        401: "A member's token is needed, or it is not known.",
        403: "The member's role does not suffice.",
    }
    meanings |= {415: "The body is not JSON.", 503: "The catalogue cannot be read."}
    described: dict[str, Any] = {
        done: {
            "description": (model.__doc__ or model.__name__).strip().splitlines()[0],
            "content": {"application/json": {"schema": _schema(model)}},
        }
    }
    for status in sorted({*problems, 401, 503}):
        described[str(status)] = {
            "description": meanings[status],
            "content": {"application/problem+json": {"schema": _schema(Problem)}},
        }
    return described


def describe_api() -> dict[str, Any]:
    """The whole description, OpenAPI 3.1."""
    kinds: list[tuple[type[BaseModel], Any]] = [(model, "validation") for model in _QUESTIONS]
    kinds += [(model, "serialization") for model in _ANSWERS]
    _, schemas = models_json_schema(kinds, ref_template="#/components/schemas/{model}")
    star_id = {"name": "star_id", "in": "path", "required": True, "schema": {"type": "integer", "minimum": 1}}
    name = {"name": "name", "in": "path", "required": True, "schema": {"type": "string"}}
    return {
        "openapi": "3.1.0",
        "info": {
            "title": "Pinlight",
            "version": __version__,
            "summary": "Calibrator stars ranked by the error that each would cost.",
            "license": {"name": "BSD-3-Clause", "identifier": "BSD-3-Clause"},
        },
        "paths": {
            "/api/v1/rankings": {
                "get": {
                    "operationId": "rank",
                    "summary": "Rank calibrators for a target",
                    "parameters": [*_parameters(RankingQuestion), _FORMAT],
                    "responses": _listed(_responses(RankingAnswer, 400, 404)),
                },
                "post": {
                    "operationId": "rankPosted",
                    "summary": "Rank calibrators for a target, which may be the caller's own",
                    "requestBody": {
                        "required": True,
                        "content": {"application/json": {"schema": _schema(RankingQuestion)}},
                    },
                    "parameters": [_FORMAT],
                    "responses": _listed(_responses(RankingAnswer, 400, 404, 413, 415)),
                },
            },
            "/api/v1/plans": {
                "post": {
                    "operationId": "plan",
                    "summary": "Plan a night for many targets",
                    "requestBody": {
                        "required": True,
                        "content": {"application/json": {"schema": _schema(PlanQuestion)}},
                    },
                    "parameters": [_FORMAT],
                    "responses": _listed(_responses(PlanAnswer, 400, 404, 413, 415)),
                }
            },
            "/api/v1/stars": {
                "get": {
                    "operationId": "findStars",
                    "summary": "Stars by name or around a place",
                    "parameters": [*_parameters(StarsQuestion), _FORMAT],
                    "responses": _listed(_responses(StarsAnswer, 400, 404)),
                }
            },
            "/api/v1/stars/{star_id}": {
                "get": {
                    "operationId": "getStar",
                    "summary": "Everything known of one star",
                    "parameters": [star_id],
                    "responses": _responses(StarAnswer, 404),
                }
            },
            "/api/v1/stars/{star_id}/standings": {
                "get": {
                    "operationId": "listStandings",
                    "summary": "All judgements of a star",
                    "parameters": [star_id, _FORMAT],
                    "responses": _listed(_responses(StandingsAnswer, 400, 404)),
                },
                "post": {
                    "operationId": "setStanding",
                    "summary": "Judge a star; takes an editor",
                    "parameters": [star_id],
                    "requestBody": {
                        "required": True,
                        "content": {"application/json": {"schema": _schema(StandingQuestion)}},
                    },
                    "responses": _responses(StandingRecord, 400, 403, 404, 413, 415, done="201"),
                },
            },
            "/api/v1/stars/{star_id}/changes": {
                "get": {
                    "operationId": "listChangesOfStar",
                    "summary": "Who changed what of a star, or how it stood at a past time",
                    "parameters": [star_id, *_parameters(ChangesQuestion)],
                    "responses": _responses(StarChangesAnswer, 400, 404),
                }
            },
            "/api/v1/changes": {
                "get": {
                    "operationId": "listChanges",
                    "summary": "The newest changes of the catalogue",
                    "parameters": [
                        *(one for one in _parameters(ChangesQuestion) if one["name"] == "most"),
                        _FORMAT,
                    ],
                    "responses": _listed(_responses(ChangesAnswer, 400)),
                }
            },
            "/api/v1/editions": {
                "get": {
                    "operationId": "listEditions",
                    "summary": "All editions",
                    "parameters": [_FORMAT],
                    "responses": _listed(_responses(EditionsAnswer, 400)),
                },
                "post": {
                    "operationId": "freezeEdition",
                    "summary": "Freeze the present state; takes a keeper; 200 where it was frozen already",
                    "responses": _responses(EditionAnswer, 403) | _responses(EditionAnswer, 403, done="201"),
                },
            },
            "/api/v1/editions/{name}": {
                "get": {
                    "operationId": "checkEdition",
                    "summary": "Whether an edition is what its hash says",
                    "parameters": [name],
                    "responses": _responses(EditionCheck, 404),
                }
            },
            "/api/v1/editions/{name}/comparison": {
                "get": {
                    "operationId": "compareEditions",
                    "summary": "What differs between two editions",
                    "parameters": [name, *_parameters(ComparisonQuestion)],
                    "responses": _responses(ComparisonAnswer, 400, 404),
                }
            },
            **{
                f"/api/v1/stars/{{star_id}}/{path}": {
                    "post": {
                        "operationId": operation,
                        "summary": f"{summary}; takes a keeper",
                        "parameters": [star_id],
                        "requestBody": {
                            "required": True,
                            "content": {"application/json": {"schema": _schema(question)}},
                        },
                        "responses": _responses(CorrectionAnswer, 400, 403, 404, 413, 415, done="201"),
                    }
                }
                for path, operation, summary, question in (
                    ("preferences", "preferMagnitude", "Choose whose magnitude counts", PreferenceQuestion),
                    ("mergers", "mergeStar", "Say that the star is part of another entry", MergerQuestion),
                    ("splits", "splitStar", "Make what one source brought a star of its own", SplitQuestion),
                )
            },
            "/api/v1/changes/{change_id}/undo": {
                "post": {
                    "operationId": "undoChange",
                    "summary": "Take back a preference, a merger or a split; takes a keeper",
                    "parameters": [
                        {"name": "change_id", "in": "path", "required": True, "schema": {"type": "integer"}}
                    ],
                    "responses": _responses(CorrectionAnswer, 400, 403, 404, done="201"),
                }
            },
            "/api/v1/intakes": {
                "post": {
                    "operationId": "takeIn",
                    "summary": "Take in a small table of stars; takes an editor",
                    "requestBody": {
                        "required": True,
                        "content": {"application/json": {"schema": _schema(IntakeQuestion)}},
                    },
                    "responses": _responses(IntakeAnswer, 400, 403, 413, 415, done="201"),
                }
            },
            "/api/v1/arrays": {
                "get": {
                    "operationId": "listArrays",
                    "summary": "The arrays that this server knows",
                    "parameters": [_FORMAT],
                    "responses": _listed(_responses(ArraysAnswer, 400)),
                }
            },
            "/api/v1/health/live": {
                "get": {
                    "operationId": "alive",
                    "summary": "Whether the process answers",
                    "responses": _responses(AliveAnswer),
                }
            },
            "/api/v1/health": {
                "get": {
                    "operationId": "health",
                    "summary": "Whether the server is ready: the catalogue can be read",
                    "responses": _responses(HealthAnswer),
                }
            },
        },
        "components": {
            "schemas": schemas["$defs"],
            "securitySchemes": {"token": {"type": "http", "scheme": "bearer"}},
        },
        "security": [{}, {"token": []}],
    }
