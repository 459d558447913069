"""Bundles: standings, and stars that were added, carried between sites as JSON Lines."""

import hashlib
import json
import re
from collections.abc import Iterable
from datetime import UTC, datetime, timedelta
from typing import TYPE_CHECKING, Any

import numpy as np
from sqlalchemy import Connection, insert, select

from pinlight.catalogue.changes import Changing, utc_text
from pinlight.catalogue.database import bulk_insert, rows_in
from pinlight.catalogue.mapping import Rows
from pinlight.catalogue.matching import Matcher
from pinlight.catalogue.names import name_key, short_keys
from pinlight.catalogue.predicting import renew_diameters
from pinlight.catalogue.standings import check_standing, standing_rows
from pinlight.catalogue.tables import Change, Identifier, Magnitude, Source, Standing, Star
from pinlight.errors import InputError
from pinlight.photometry.bands import check_magnitude
from pinlight.sky.cells import cells_of
from pinlight.sky.positions import check_position

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue

__all__ = ["export_bundle", "import_bundle"]

_FORMAT = 1
_MOST_LINES = 1_000_000
_MOTIONS = ("pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas", "radial_velocity_km_s")
_TIME = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}Z")
_UID = re.compile(r"[0-9a-f]{32}")
_SAID = ("standing", "band", "mode", "reason", "evidence", "made_by", "made_utc")


def _written(line: dict[str, Any]) -> str:
    return json.dumps(line, ensure_ascii=False, sort_keys=True, separators=(",", ":"), allow_nan=False)


def _sealed(lines: Iterable[str]) -> str:
    body = "".join(f"{line}\n" for line in lines)
    head = {"pinlight_bundle": _FORMAT, "sha256": hashlib.sha256(body.encode()).hexdigest()}
    return f"{_written(head)}\n{body}"


def export_bundle(catalogue: "Catalogue", *, all_stars: bool = False) -> str:
    """All standings, and the stars that they are of where these did not come with the seed.

    Parameters
    ----------
    catalogue : Catalogue
    all_stars : bool
        All stars that were added, judged or not.

    Returns
    -------
    bundle : str
        JSON Lines; the first holds the hash of the others. The same content gives the same bundle.
    """
    with catalogue.reading() as connection:
        judged = standing_rows(connection)
        added = select(Star.id).join(Change, Change.id == Star.change_id).where(Change.action != "seed")
        added_ids = set(connection.execute(added).scalars())
        wanted = added_ids if all_stars else added_ids & {row["star_id"] for row in judged}
        stars = _stars(connection, sorted(wanted | {row["star_id"] for row in judged}))
        lines = [_written({"kind": "star", **star}) for key, star in stars.items() if key in wanted]
    for row in judged:
        star = {key: stars[row["star_id"]][key] for key in ("name", "identifiers", "ra_deg", "dec_deg")}
        said = {key: row[key] for key in (*_SAID, "uid")}
        lines.append(_written({"kind": "standing", "star": star, **said}))
    return _sealed(sorted(lines))


def _stars(connection: Connection, star_ids: list[int]) -> dict[int, dict[str, Any]]:
    """Stars with their names, motions and magnitudes, as a bundle carries them."""
    sources = {row.id: row for row in connection.execute(select(Source.__table__))}

    def source(source_id: int) -> dict[str, str]:
        return {key: getattr(sources[source_id], key) for key in ("title", "reference", "licence", "retrieved")}

    stars: dict[int, dict[str, Any]] = {}
    for row in rows_in(connection, select(Star.__table__), Star.id, star_ids):
        keys = ("name", "ra_deg", "dec_deg", *_MOTIONS, "spectral_type", "flags")
        stars[row.id] = {key: getattr(row, key) for key in keys}
        stars[row.id] |= {"source": source(row.source_id), "identifiers": [], "magnitudes": []}
    names = select(Identifier.star_id, Identifier.name).where(~Identifier.short)
    for star_id, name in rows_in(connection, names, Identifier.star_id, star_ids):
        stars[star_id]["identifiers"].append(name)
    for row in rows_in(connection, select(Magnitude.__table__), Magnitude.star_id, star_ids):
        told = {key: getattr(row, key) for key in ("band", "value", "error", "error_assumed", "quality")}
        stars[row.star_id]["magnitudes"].append(told | {"source": source(row.source_id)})
    for star in stars.values():
        star["identifiers"] = sorted(set(star["identifiers"]))
        star["magnitudes"].sort(key=lambda one: (one["band"], one["source"]["title"]))
    return stars


def _read(text: str) -> list[dict[str, Any]]:
    """The lines of a bundle after its first, checked against its hash."""
    head, _, body = text.partition("\n")
    try:
        told = json.loads(head)
        version, sealed = told["pinlight_bundle"], told["sha256"]
    except (ValueError, TypeError, KeyError) as error:
        raise InputError("line 1 is no head of a bundle; it has pinlight_bundle and sha256") from error
    if version != _FORMAT:
        raise InputError(f"line 1: the bundle has format {version}; this Pinlight reads {_FORMAT}")
    if hashlib.sha256(body.encode()).hexdigest() != sealed:
        raise InputError("the bundle is not what its hash says: a line was changed or lost on the way")
    lines = body.splitlines()
    if len(lines) > _MOST_LINES:
        raise InputError(f"the bundle has {len(lines)} lines; {_MOST_LINES} are the most")
    found = []
    for number, line in enumerate(lines, start=2):
        try:
            found.append(_checked(json.loads(line)) | {"line": number})
        except InputError as error:
            raise InputError(f"line {number}: {error}") from error
        except (ValueError, TypeError, KeyError, AttributeError, RecursionError) as error:
            raise InputError(
                f"line {number} is no star and no standing: {type(error).__name__} {error}"
            ) from error
    return found


def _checked(line: dict[str, Any]) -> dict[str, Any]:
    if line["kind"] == "star":
        check_position(line["ra_deg"], line["dec_deg"])
        for one in line["magnitudes"]:
            check_magnitude(one["band"], one["value"])
            if not 0 <= one["error"] <= 10:
                raise InputError(f"error is {one['error']}; it must lie between 0 and 10")
            str(one["source"]["title"] + one["source"]["reference"] + one["quality"])
        str(line["source"]["title"] + line["spectral_type"] + line["flags"] + line["name"])
        if not all(line[key] is None or abs(line[key]) < 1e6 for key in _MOTIONS):
            raise InputError("a motion, parallax or velocity is out of bounds")
    elif line["kind"] == "standing":
        check_position(line["star"]["ra_deg"], line["star"]["dec_deg"])
        checked = check_standing(line["standing"], line["reason"], line["band"], line["mode"], line["evidence"])
        if not _UID.fullmatch(line["uid"]) or not _TIME.fullmatch(line["made_utc"]):
            raise InputError("uid or made_utc is not of its form")
        if line["made_utc"] > utc_text(datetime.now(UTC) + timedelta(days=1)):
            raise InputError(f"made_utc is {line['made_utc']}, which is yet to come")
        line["evidence_text"] = checked["evidence"]
        str(line["made_by"] + line["star"]["name"])
    else:
        raise InputError(f"kind is {line['kind']!r}; it may be star or standing")
    return line


def import_bundle(catalogue: "Catalogue", text: str) -> dict[str, Any]:
    """Take in a bundle, in one transaction.

    A standing that is here already is left alone, so that importing twice changes nothing; which
    of several counts is decided by when they were made, so that the order of bundles does not
    matter. Where the other site thinks otherwise of a star, both judgements are kept and shown.

    Returns
    -------
    report : dict
        Counts `standings_added`, `standings_known`, `stars_added`, `magnitudes_added`; lists
        `unknown` (standings of stars that are not here: import a bundle with its stars) and
        `conflicts` (our newest and theirs of the same star, band and mode).

    Raises
    ------
    InputError
        If the bundle is damaged or a line impossible; nothing is changed then.
    TokenError, NotAllowedError
        If the one who acts is not an editor.
    """
    lines = _read(text)
    stars = [line for line in lines if line["kind"] == "star"]
    judged = [line for line in lines if line["kind"] == "standing"]
    detail = {"bundle": hashlib.sha256(text.encode()).hexdigest()[:12], "lines": len(lines)}
    report: dict[str, Any] = dict.fromkeys(
        ("standings_added", "standings_known", "stars_added", "magnitudes_added"), 0
    )
    report |= {"unknown": [], "conflicts": []}
    with catalogue.changing("import", "editor", "import a bundle", detail) as change:
        matcher = Matcher()
        matcher.refresh(change.connection)
        _import_stars(change, matcher, stars, report)
        matcher.refresh(change.connection)
        _import_standings(change, matcher, judged, report)
    return report


def _match(
    connection: Connection, matcher: Matcher, stars: list[dict[str, Any]]
) -> list[tuple[int, str | None]]:
    """For each star its id here, 0 where it is not; and why it can be none."""
    names = [[star["name"], *star["identifiers"]] for star in stars]
    numbers = {key: np.array([star[key] for star in stars], dtype=float) for key in ("ra_deg", "dec_deg")}
    keyed = [{name_key(name): name for name in found if name_key(name)} for found in names]
    rows = Rows(range(len(stars)), names, keyed, numbers, {}, {})
    found = matcher.match(connection, rows, np.full(len(stars), 2000.0))
    return [(int(star_id), found.reasons.get(index)) for index, star_id in enumerate(found.star_ids)]


def _source_ids(change: Changing, wanted: list[dict[str, Any]]) -> dict[str, int]:
    known = {row.title: row.id for row in change.connection.execute(select(Source.id, Source.title))}
    for source in sorted(wanted, key=lambda one: str(one["title"])):
        if source["title"] not in known:
            known[source["title"]] = max(known.values(), default=0) + 1
            values = {key: str(source.get(key, "")) for key in ("title", "reference", "licence", "retrieved")}
            change.connection.execute(insert(Source).values(id=known[source["title"]], **values))
    return known


def _import_stars(
    change: Changing, matcher: Matcher, stars: list[dict[str, Any]], report: dict[str, Any]
) -> None:
    if not stars:
        return
    connection = change.connection
    places = _match(connection, matcher, stars)
    every = [star["source"] for star in stars] + [one["source"] for star in stars for one in star["magnitudes"]]
    sources = _source_ids(change, every)
    newest = connection.execute(select(Star.id).order_by(Star.id.desc()).limit(1)).scalar() or 0
    ids: dict[int, dict[str, Any]] = {}
    fresh: list[int] = []
    for star, (star_id, reason) in zip(stars, places, strict=True):
        if reason is not None:
            report["unknown"].append({"line": star["line"], "name": star["name"], "reason": reason})
            continue
        if not star_id:
            newest += 1
            star_id = newest
            fresh.append(star_id)
        ids[star_id] = star
    ra, dec = (np.array([ids[key][name] for key in fresh], dtype=float) for name in ("ra_deg", "dec_deg"))
    cells = cells_of(ra, dec)
    rows = [
        {
            "id": star_id, **{key: ids[star_id][key] for key in ("name", "ra_deg", "dec_deg", *_MOTIONS)},
            **{key: ids[star_id][key] for key in ("spectral_type", "flags")}, "object_type": "",
            "cell": int(cell), "source_id": sources[ids[star_id]["source"]["title"]], "change_id": change.id,
        }
        for star_id, cell in zip(fresh, cells, strict=True)
    ]  # fmt: skip
    bulk_insert(connection, Star, rows)
    names = []
    for star_id in fresh:
        star = ids[star_id]
        keys = {name_key(name): (name, False) for name in reversed([star["name"], *star["identifiers"]])}
        for name in [star["name"], *star["identifiers"]]:
            for short in short_keys(name):
                keys.setdefault(short, (name, True))
        common = {"source_id": sources[star["source"]["title"]], "change_id": change.id}
        names += [
            {"star_id": star_id, "name": name, "key": key, "short": short} | common
            for key, (name, short) in keys.items()
        ]
    bulk_insert(connection, Identifier, names)
    query = select(Magnitude.star_id, Magnitude.band, Magnitude.source_id)
    known = {tuple(row) for row in rows_in(connection, query, Magnitude.star_id, sorted(ids))}
    magnitudes = []
    for star_id, star in ids.items():
        for one in star["magnitudes"]:
            key = (star_id, one["band"], sources[one["source"]["title"]])
            if key not in known:
                known.add(key)
                row = dict(zip(("star_id", "band", "source_id"), key, strict=True))
                row |= {name: one[name] for name in ("value", "error", "error_assumed", "quality")}
                magnitudes.append(row | {"chosen": False, "change_id": change.id})
    bulk_insert(connection, Magnitude, magnitudes)
    renew_diameters(change, {row["star_id"] for row in magnitudes} | set(fresh))
    report["stars_added"], report["magnitudes_added"] = len(fresh), len(magnitudes)


def _import_standings(
    change: Changing, matcher: Matcher, judged: list[dict[str, Any]], report: dict[str, Any]
) -> None:
    connection = change.connection
    ours = standing_rows(connection)
    by_uid = {row["uid"]: row for row in ours}
    newest = {(row["star_id"], row["band"], row["mode"]): row for row in ours}
    theirs: dict[tuple[Any, ...], dict[str, Any]] = {}
    places = _match(connection, matcher, [line["star"] for line in judged]) if judged else []
    for line, (star_id, reason) in sorted(zip(judged, places, strict=True), key=lambda pair: _order(pair[0])):
        if (known := by_uid.get(line["uid"])) is not None:
            if any(known[key] != line[key] for key in _SAID):
                raise InputError(f"line {line['line']}: standing {line['uid']} says something else here")
            report["standings_known"] += 1
            continue
        if not star_id:
            why = reason or "there is no such star here; export its stars too"
            report["unknown"].append({"line": line["line"], "name": line["star"]["name"], "reason": why})
            continue
        row = {key: line[key] for key in ("uid", "standing", "band", "mode", "reason", "made_by", "made_utc")}
        row |= {"star_id": star_id, "evidence": line["evidence_text"], "change_id": change.id}
        connection.execute(insert(Standing).values(row))
        report["standings_added"] += 1
        theirs[star_id, line["band"], line["mode"]] = line
    for key, line in theirs.items():
        own = newest.get(key)
        if own is not None and own["standing"] != line["standing"]:
            counts = max((own, line), key=_order)
            report["conflicts"].append(
                {
                    "star_id": key[0],
                    "name": line["star"]["name"],
                    "band": key[1],
                    "mode": key[2],
                    "ours": {name: own[name] for name in _SAID},
                    "theirs": {name: line[name] for name in _SAID},
                    "counts": "ours" if counts is own else "theirs",
                }
            )


def _order(row: dict[str, Any]) -> tuple[str, str]:
    return row["made_utc"], row["uid"]
