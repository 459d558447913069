"""The team's records over HTTP: standings, the change log, editions."""

import tempfile
from pathlib import Path
from typing import Any

from flask import Blueprint, Response, request

from pinlight.catalogue.curating import merge_stars, prefer_magnitude, split_star, undo_change
from pinlight.catalogue.intake import IntakeOptions, preview_file, rejected_rows, take_in
from pinlight.errors import InputError, NotFoundError
from pinlight.faces.access import acting_catalogue
from pinlight.faces.models import (
    ChangesQuestion,
    ComparisonQuestion,
    IntakeQuestion,
    MergerQuestion,
    PreferenceQuestion,
    SplitQuestion,
    StandingQuestion,
)
from pinlight.faces.service import as_asked, from_query, posted_json, read_question, service
from pinlight.faces.tables import table_of

__all__ = ["records"]

records = Blueprint("records", __name__, url_prefix="/api/v1")
_MOST_ID = 2**63


@records.get("/stars/<int:star_id>/standings")
def star_standings(star_id: int) -> dict[str, Any] | Response:
    answer = service().catalogue.star_standings(star_id)
    return as_asked(answer, "standings", lambda: table_of(answer["standings"]))


@records.post("/stars/<int:star_id>/standings")
def set_standing(star_id: int) -> tuple[dict[str, Any], int]:
    catalogue = acting_catalogue()
    catalogue.person().require("editor", "set a standing")
    asked = read_question(StandingQuestion, posted_json())
    return catalogue.set_standing(star_id, **asked.model_dump()), 201


@records.get("/changes")
def changes() -> dict[str, Any] | Response:
    asked = read_question(ChangesQuestion, from_query(request.args))
    found = service().catalogue.changes(most=asked.most)
    return as_asked({"changes": found}, "changes", lambda: table_of(found))


@records.get("/stars/<int:star_id>/changes")
def star_changes(star_id: int) -> dict[str, Any]:
    asked = read_question(ChangesQuestion, from_query(request.args))
    found = service().catalogue.changes(star_id, asked.at)
    return {"star_id": star_id, "changes": found} if asked.at is None else {"star_id": star_id, "then": found}


@records.post("/stars/<int:star_id>/preferences")
def prefer(star_id: int) -> tuple[dict[str, Any], int]:
    catalogue = acting_catalogue()
    catalogue.person().require("keeper", "prefer a magnitude")
    asked = read_question(PreferenceQuestion, posted_json())
    change_id = prefer_magnitude(catalogue, star_id, asked.band, asked.source)
    return {"change_id": change_id}, 201 if change_id else 200


@records.post("/stars/<int:star_id>/mergers")
def merge(star_id: int) -> tuple[dict[str, Any], int]:
    catalogue = acting_catalogue()
    catalogue.person().require("keeper", "merge stars")
    asked = read_question(MergerQuestion, posted_json())
    return {"change_id": merge_stars(catalogue, star_id, asked.into_id)}, 201


@records.post("/stars/<int:star_id>/splits")
def split(star_id: int) -> tuple[dict[str, Any], int]:
    catalogue = acting_catalogue()
    catalogue.person().require("keeper", "split a star")
    asked = read_question(SplitQuestion, posted_json())
    if (asked.ra_deg is None) != (asked.dec_deg is None):
        raise InputError("ra_deg and dec_deg go together; give both or neither")
    place = None if asked.ra_deg is None or asked.dec_deg is None else (asked.ra_deg, asked.dec_deg)
    return split_star(catalogue, star_id, asked.source, asked.name, place), 201


@records.post("/changes/<int:change_id>/undo")
def undo(change_id: int) -> tuple[dict[str, Any], int]:
    if change_id >= _MOST_ID:
        raise NotFoundError(f"change is {change_id}; there is no such change")
    return {"change_id": undo_change(acting_catalogue(), change_id)}, 201


@records.post("/intakes")
def take_in_table() -> tuple[dict[str, Any], int]:
    catalogue = acting_catalogue()
    catalogue.person().require("editor", "take in a table")
    asked = read_question(IntakeQuestion, posted_json())
    options = IntakeOptions(
        asked.source,
        asked.reference,
        asked.licence,
        columns=asked.map,
        epoch_yr=asked.epoch,
        zero_points_jy=asked.zero_points_jy,
        match_arcsec=asked.match_arcsec,
    )
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / f"posted.{'vot' if asked.format == 'votable' else asked.format}"
        path.write_text(asked.table, encoding="utf-8")
        if asked.dry_run:
            preview = preview_file(path, options) | {"file": "posted"}
            return {"rows": len(preview["rows"]), "preview": preview}, 200
        report = take_in(catalogue, path, options)
    answer = report.to_dict()
    del answer["source"], answer["resumed_at"]
    return answer | {"rejects": rejected_rows(catalogue, report.intake_id)}, 200 if report.already else 201


@records.get("/editions")
def editions() -> dict[str, Any] | Response:
    found = service().catalogue.editions()
    return as_asked({"editions": found}, "editions", lambda: table_of(found))


@records.post("/editions")
def freeze() -> tuple[dict[str, Any], int]:
    catalogue = acting_catalogue()
    before = {row["name"] for row in catalogue.editions()}
    name = catalogue.freeze()
    row = next(row for row in catalogue.editions() if row["name"] == name)
    return row, 200 if name in before else 201


@records.get("/editions/<name>")
def edition(name: str) -> dict[str, Any]:
    return service().catalogue.check(name)


@records.get("/editions/<name>/comparison")
def comparison(name: str) -> dict[str, Any]:
    asked = read_question(ComparisonQuestion, from_query(request.args))
    return service().catalogue.compare(name, asked.other, asked.most)
