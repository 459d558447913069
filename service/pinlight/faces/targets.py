"""Targets from what people write: names, coordinates, CSV files."""

import csv
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from pinlight.catalogue.store import Catalogue
from pinlight.errors import InputError
from pinlight.photometry.bands import BANDS
from pinlight.planning.night import Request
from pinlight.ranking.target import Target
from pinlight.sky.positions import looks_like_coordinates, parse_coordinates
from pinlight.sky.time import parse_utc

__all__ = ["read_requests", "read_targets", "resolve_target"]

_TARGET_COLUMNS = (
    "name", "ra_deg", "dec_deg", "diameter_mas", *BANDS, "priority", "repeats", "required_error_percent",
    "from", "to",
)  # fmt: skip


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
    )


def _motion(star: dict[str, Any]) -> tuple[float, float, float, float]:
    """As `Target` has it; what the catalogue does not know is NaN."""
    pm_ra, pm_dec, parallax, velocity = (
        float("nan") if star[key] is None else float(star[key])
        for key in ("pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas", "radial_velocity_km_s")
    )
    return pm_ra, pm_dec, parallax, velocity


def read_targets(path: Path) -> list[Target]:
    """Targets from a CSV file with columns name, ra_deg, dec_deg and, if known, diameter_mas and bands.

    Other columns are left to whoever needs them.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names the line.
    """
    return [request.target for request in read_requests(path)]


def read_requests(path: Path) -> list[Request]:
    """Targets with what a plan wants of each: columns priority, repeats, required_error_percent, from, to.

    All of these may be missing or blank: priority 1, one block, any error, any time of the night.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names the line.
    """
    requests = []
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            columns = _targets_columns(path, next(reader, []))
            for cells in reader:
                if not any(cell.strip() for cell in cells):
                    continue
                row = {column: cell.strip() for column, cell in zip(columns, cells, strict=False)}
                try:
                    requests.append(_request(row))
                except InputError as error:
                    raise InputError(f"{path} line {reader.line_num}: {error}") from error
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        reason = error.strerror if isinstance(error, OSError) else error
        raise InputError(f"cannot read targets file {path}: {reason}") from error
    if not requests:
        raise InputError(f"targets file {path} has no rows; it needs columns name, ra_deg, dec_deg")
    return requests


def _targets_columns(path: Path, header: list[str]) -> list[str]:
    """The columns of a targets file, as this project spells them, whatever their case."""
    spelled = {name.casefold(): name for name in _TARGET_COLUMNS}
    columns = [spelled.get(cell.strip().casefold(), cell.strip()) for cell in header]
    missing = [name for name in ("name", "ra_deg", "dec_deg") if name not in columns]
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


def _request(written: dict[str, str]) -> Request:
    for column in ("name", "ra_deg", "dec_deg"):
        if not written.get(column):
            raise InputError(f"{column} is missing")
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
    target = Target(
        values["ra_deg"],
        values["dec_deg"],
        name=written["name"],
        magnitudes={band: values[band] for band in BANDS if band in values},
        diameter_mas=values.get("diameter_mas"),
    )
    return Request(
        target,
        priority=values.get("priority", 1.0),
        repeats=int(repeats),
        required_error=None if required is None else required / 100,
        earliest=parse_utc(written["from"], "from") if written.get("from") else None,
        latest=parse_utc(written["to"], "to") if written.get("to") else None,
    )
