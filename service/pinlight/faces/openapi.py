"""The OpenAPI description, made from the models."""

from typing import Any

from pydantic import BaseModel
from pydantic.json_schema import models_json_schema

from pinlight.faces.models import (
    ArraysAnswer,
    HealthAnswer,
    PlanAnswer,
    PlanQuestion,
    Problem,
    RankingAnswer,
    RankingQuestion,
    StarAnswer,
    StarsAnswer,
    StarsQuestion,
    TargetQuestion,
)
from pinlight.version import __version__

__all__ = ["describe_api"]

_QUESTIONS = (RankingQuestion, PlanQuestion, StarsQuestion, TargetQuestion)
_ANSWERS = (RankingAnswer, PlanAnswer, StarsAnswer, StarAnswer, ArraysAnswer, HealthAnswer, Problem)


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
                "required": name in schema.get("required", []),
                "schema": {key: value for key, value in chosen.items() if key != "title"},
            }
        )
    return parameters


def _responses(model: type[BaseModel], *problems: int) -> dict[str, Any]:
    meanings = {400: "Something asked for is impossible.", 404: "Not known.", 413: "The body is too large."}
    meanings |= {415: "The body is not JSON.", 503: "The catalogue cannot be read."}
    described: dict[str, Any] = {
        "200": {
            "description": (model.__doc__ or model.__name__).strip().splitlines()[0],
            "content": {"application/json": {"schema": _schema(model)}},
        }
    }
    for status in (*problems, 503):
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
                    "parameters": _parameters(RankingQuestion),
                    "responses": _responses(RankingAnswer, 400, 404),
                },
                "post": {
                    "operationId": "rankPosted",
                    "summary": "Rank calibrators for a target, which may be the caller's own",
                    "requestBody": {
                        "required": True,
                        "content": {"application/json": {"schema": _schema(RankingQuestion)}},
                    },
                    "responses": _responses(RankingAnswer, 400, 404, 413, 415),
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
                    "responses": _responses(PlanAnswer, 400, 404, 413, 415),
                }
            },
            "/api/v1/stars": {
                "get": {
                    "operationId": "findStars",
                    "summary": "Stars by name or around a place",
                    "parameters": _parameters(StarsQuestion),
                    "responses": _responses(StarsAnswer, 400, 404),
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
            "/api/v1/arrays": {
                "get": {
                    "operationId": "listArrays",
                    "summary": "The arrays that this server knows",
                    "responses": _responses(ArraysAnswer),
                }
            },
            "/api/v1/health": {
                "get": {
                    "operationId": "health",
                    "summary": "Whether the catalogue can be read",
                    "responses": _responses(HealthAnswer),
                }
            },
        },
        "components": {"schemas": schemas["$defs"]},
    }
