"""Targets from what people write: names, coordinates, CSV files."""

import csv
from collections.abc import Iterable
from dataclasses import replace
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from pinlight.catalogue.store import Catalogue
from pinlight.errors import InputError, NotFoundError
from pinlight.photometry.bands import BANDS
from pinlight.planning.night import Request
from pinlight.ranking.target import Target
from pinlight.sky.positions import looks_like_coordinates, parse_coordinates
from pinlight.sky.time import parse_utc

__all__ = ["placed_target", "read_requests", "read_targets", "requests_from_text", "resolve_target"]

_TARGET_COLUMNS = (
    "name", "ra_deg", "dec_deg", "diameter_mas", *BANDS, "priority", "repeats", "required_error_percent",
    "from", "to",
)  # fmt: skip


_MOST_TARGETS = 200


def resolve_target(catalogue: Catalogue | None, target: str | Target) -> Target:
    """A target from what a person wrote: coordinates, or a name known to the catalogue.

    Raises
    ------
    InputError, NotFoundError
        If it is neither.
    """
    if isinstance(target, Target):
        return target
    if looks_like_coordinates(target):
        ra_deg, dec_deg = parse_coordinates(target)
        return Target(ra_deg, dec_deg, name=target.strip())
    if catalogue is None:
        raise InputError(f"target is {target!r}; without a catalogue give coordinates")
    star = catalogue.star(catalogue.find(target))
    return Target(
        star["ra_deg"],
        star["dec_deg"],
        name=star["name"],
        magnitudes={band: entry["value"] for band, entry in star["magnitudes"].items()},
        diameter_mas=star["diameter"]["limb_darkened_mas"] if star["diameter"] else None,
        star_id=star["star_id"],
        motion=_motion(star),
        diameter_error_mas=star["diameter"]["error_mas"] if star["diameter"] else None,
    )


def placed_target(
    catalogue: Catalogue | None,
    name: str,
    ra_deg: float | None,
    dec_deg: float | None,
    magnitudes: dict[str, float],
    diameter_mas: float | None,
    diameter_error_mas: float | None = None,
) -> Target:
    """A target at a place, or without one the star that the catalogue knows by its name.

    What is given of that star counts before what the catalogue has.

    Raises
    ------
    InputError, NotFoundError
        If one coordinate is missing, or the name is unknown.
    """
    if ra_deg is not None and dec_deg is not None:
        return Target(ra_deg, dec_deg, name, magnitudes, diameter_mas, diameter_error_mas=diameter_error_mas)
    if ra_deg is not None or dec_deg is not None:
        raise InputError(f"{'dec_deg' if dec_deg is None else 'ra_deg'} of {name or 'a target'} is missing")
    if not name.strip():
        raise InputError("name is missing; a target needs ra_deg and dec_deg, or a name the catalogue knows")
    known = resolve_target(catalogue, name)
    if diameter_mas is not None:
        known = replace(known, diameter_mas=diameter_mas, diameter_error_mas=diameter_error_mas)
    return replace(known, magnitudes={**known.magnitudes, **magnitudes})


def _motion(star: dict[str, Any]) -> tuple[float, float, float, float]:
    """As `Target` has it; what the catalogue does not know is NaN."""
    pm_ra, pm_dec, parallax, velocity = (
        float("nan") if star[key] is None else float(star[key])
        for key in ("pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas", "radial_velocity_km_s")
    )
    return pm_ra, pm_dec, parallax, velocity


def read_targets(path: Path, catalogue: Catalogue | None = None) -> list[Target]:
    """Targets from a CSV file with columns name, ra_deg, dec_deg and, if known, diameter_mas and bands.

    Without coordinates a row's name is looked up in the catalogue. Other columns are left to whoever
    needs them.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names the line.
    """
    return [request.target for request in read_requests(path, catalogue)]


def read_requests(path: Path, catalogue: Catalogue | None = None) -> list[Request]:
    """Targets with what a plan wants of each: columns priority, repeats, required_error_percent, from, to.

    All of these may be missing or blank: priority 1, one block, any error, any time of the night.
    Targets as `read_targets` takes them.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names the line.
    """
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            return _requests_of_csv(path, file, catalogue)
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        reason = error.strerror if isinstance(error, OSError) else error
        raise InputError(f"cannot read targets file {path}: {reason}") from error


def _requests_of_csv(path: Path | str, lines: Iterable[str], catalogue: Catalogue | None) -> list[Request]:
    requests = []
    reader = csv.reader(lines)
    columns = _targets_columns(path, next(reader, []))
    for cells in reader:
        if not any(cell.strip() for cell in cells):
            continue
        row = {column: cell.strip() for column, cell in zip(columns, cells, strict=False)}
        try:
            requests.append(_request(row, catalogue))
        except (InputError, NotFoundError) as error:
            raise InputError(f"{path} line {reader.line_num}: {error}") from error
    if not requests:
        raise InputError(f"targets file {path} has no rows; it needs a column name, and ra_deg, dec_deg")
    return requests


def requests_from_text(text: str, catalogue: Catalogue) -> list[Request]:
    """What a plan wants, from a text: a target a line by name or coordinates, or a targets file's content.

    Raises
    ------
    InputError, NotFoundError
        If a line is neither; the message names it.
    """
    lines = text.splitlines()
    if "name" in [cell.strip().casefold() for cell in (lines[0] if lines else "").split(",")]:
        return _requests_of_csv("of the form", lines, catalogue)
    requests = []
    for number, line in enumerate(lines, start=1):
        if line.strip():
            try:
                requests.append(Request(resolve_target(catalogue, line)))
            except (InputError, NotFoundError) as error:
                raise type(error)(f"line {number}: {error}") from error
    if not requests:
        raise InputError("targets is empty; write a target a line")
    if len(requests) > _MOST_TARGETS:
        raise InputError(f"targets has {len(requests)} lines; {_MOST_TARGETS} are the most")
    return requests


def _targets_columns(path: Path | str, header: list[str]) -> list[str]:
    """The columns of a targets file, as this project spells them, whatever their case."""
    spelled = {name.casefold(): name for name in _TARGET_COLUMNS}
    columns = [spelled.get(cell.strip().casefold(), cell.strip()) for cell in header]
    place = ("ra_deg", "dec_deg") if "ra_deg" in columns or "dec_deg" in columns else ()
    missing = [name for name in ("name", *place) if name not in columns]
    if missing:
        found = ", ".join(header)[:80] or "none"
        lacking = f"{', '.join(missing)} missing (commas part them)"
        raise InputError(f"targets file {path} has columns {found}; {lacking}")
    for name in columns:
        if name not in _TARGET_COLUMNS and (meant := get_close_matches(name, _TARGET_COLUMNS, 1, 0.8)):
            raise InputError(f"targets file {path} has the column {name}; is it {meant[0]}?")
        if name and columns.count(name) > 1:
            raise InputError(f"targets file {path} has the column {name} twice")
    return columns


def _request(written: dict[str, str], catalogue: Catalogue | None) -> Request:
    if not written.get("name"):
        raise InputError("name is missing")
    values: dict[str, float] = {}
    numbers = ("ra_deg", "dec_deg", "diameter_mas", *BANDS, "priority", "repeats", "required_error_percent")
    for column in numbers:
        if text := written.get(column):
            try:
                values[column] = float(text)
            except ValueError as error:
                raise InputError(f"{column} is {text!r}; it must be a number") from error
    repeats = values.get("repeats", 1.0)
    if not repeats.is_integer():
        raise InputError(f"repeats is {repeats:g}; it must be a whole number")
    required = values.get("required_error_percent")
    target = placed_target(
        catalogue,
        written["name"],
        values.get("ra_deg"),
        values.get("dec_deg"),
        {band: values[band] for band in BANDS if band in values},
        values.get("diameter_mas"),
    )
    return Request(
        target,
        priority=values.get("priority", 1.0),
        repeats=int(repeats),
        required_error=None if required is None else required / 100,
        earliest=parse_utc(written["from"], "from") if written.get("from") else None,
        latest=parse_utc(written["to"], "to") if written.get("to") else None,
    )
