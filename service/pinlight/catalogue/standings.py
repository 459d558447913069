"""Standings: what members think of stars, of a band or mode or altogether."""

import json
import uuid
from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, func, insert, or_, select

from pinlight.catalogue.tables import Standing, Star
from pinlight.errors import InputError, NotFoundError
from pinlight.photometry.bands import band as known_band

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue

__all__ = [
    "STANDINGS",
    "Evidence",
    "check_standing",
    "must_exist",
    "public_standing",
    "set_standing",
    "standing_rows",
    "standings_for",
]

STANDINGS = ("vouched", "unproven", "doubted", "barred")
_LONGEST_REASON = 2_000
_LONGEST_EVIDENCE = 20_000
_LARGEST_ID = 2**63

Evidence = str | dict[str, Any]


def check_standing(
    standing: str, reason: str, band: str | None, mode: str | None, evidence: Iterable[Evidence]
) -> dict[str, Any]:
    """The columns of a standing, checked.

    Raises
    ------
    InputError
        If one of them is impossible.
    """
    if standing not in STANDINGS:
        raise InputError(f"standing is {standing!r}; it may be one of {', '.join(STANDINGS)}")
    reason = " ".join(reason.replace("\0", " ").split())
    if not reason:
        raise InputError("reason is empty; say why")
    if len(reason) > _LONGEST_REASON:
        raise InputError(f"reason has {len(reason)} letters; {_LONGEST_REASON} are the most")
    if band is not None:
        known_band(band)
    if mode is not None and (not mode.strip() or len(mode) > 100):
        raise InputError("mode is empty or too long; write MODE or ARRAY/MODE")
    try:
        written = json.dumps(list(evidence), ensure_ascii=False, allow_nan=False, sort_keys=True)
    except (TypeError, ValueError) as error:
        raise InputError(f"evidence cannot be written as JSON: {error}") from error
    if len(written) > _LONGEST_EVIDENCE:
        raise InputError(f"evidence has {len(written)} letters; {_LONGEST_EVIDENCE} are the most")
    return {
        "standing": standing,
        "reason": reason,
        "band": band,
        "mode": None if mode is None else mode.strip(),
        "evidence": written,
    }


def must_exist(connection: Connection, star_id: int) -> None:
    """Raise NotFoundError where there is no star of that id."""
    known = 0 < star_id < _LARGEST_ID and connection.execute(select(Star.id).where(Star.id == star_id)).first()
    if not known:
        raise NotFoundError(f"star_id is {star_id}; there is no such star")


def set_standing(
    catalogue: "Catalogue",
    star_id: int,
    standing: str,
    reason: str,
    *,
    band: str | None = None,
    mode: str | None = None,
    evidence: Iterable[Evidence] = (),
) -> dict[str, Any]:
    """Add a judgement of a star; earlier ones stay on record.

    Parameters
    ----------
    star_id : int
    standing : str
        ``vouched``, ``unproven``, ``doubted`` or ``barred``.
    reason : str
    band, mode : str, optional
        Where the judgement holds; everywhere by default. A mode is written ``MODE`` or ``ARRAY/MODE``.
    evidence : texts or mappings
        References, links, notes, or the numbers of an assessment.

    Returns
    -------
    standing : dict
        As it was recorded.

    Raises
    ------
    InputError
        If the standing, band or mode is unknown or the reason empty.
    NotFoundError
        If there is no such star.
    TokenError, NotAllowedError
        If the one who judges is not an editor.
    """
    evidence = list(evidence)
    values = check_standing(standing, reason, band, mode, evidence)
    detail = {"star_id": star_id, "standing": standing}
    with catalogue.changing("standing", "editor", "set a standing", detail) as change:
        must_exist(change.connection, star_id)
        row = values | {
            "uid": uuid.uuid4().hex,
            "star_id": star_id,
            "made_by": change.made_by,
            "made_utc": change.made_utc,
            "change_id": change.id,
        }
        change.connection.execute(insert(Standing).values(row))
    return public_standing(row | {"evidence": list(evidence)})


def public_standing(row: dict[str, Any]) -> dict[str, Any]:
    """What a standing says, without where it is kept."""
    names = ("standing", "band", "mode", "reason", "evidence", "made_by", "made_utc", "uid")
    return {name: row[name] for name in names}


def standing_rows(connection: Connection, star_id: int | None = None) -> list[dict[str, Any]]:
    """All standings, or those of one star, in the order in which they were made.

    Those of an entry that another stands for are the other's.
    """
    query = select(Standing.__table__, func.coalesce(Star.merged_into, Star.id).label("counts_for"))
    query = query.join(Star, Star.id == Standing.star_id)
    if star_id is not None:
        query = query.where(or_(Star.id == star_id, Star.merged_into == star_id))
    rows = connection.execute(query).mappings().all()
    # Not by id: a standing that came late from another site takes its place by when it was made.
    ordered = sorted(rows, key=lambda row: (row["made_utc"], row["uid"]))
    return [
        dict(row) | {"evidence": json.loads(row["evidence"]), "star_id": row["counts_for"]} for row in ordered
    ]


def standings_for(
    rows: Iterable[dict[str, Any]], band: str | None = None, mode: str | None = None, array: str | None = None
) -> dict[int, str]:
    """The standing that counts of every star that has one, where a ranking uses `band` and `mode`.

    Of each scope (a band, a mode, both, or neither) the newest counts. Among the scopes that apply
    a general bar beats all; else the narrowest counts, a mode being narrower than a band.

    Parameters
    ----------
    rows : list of dict
        As `standing_rows` gives them.
    band, mode, array : str, optional
        Those of the ranking; without them only general standings apply.
    """
    modes = {mode, f"{array}/{mode}"} if mode is not None else set()
    newest: dict[int, dict[int, str]] = {}
    for row in rows:
        if row["band"] not in (None, band) or (row["mode"] is not None and row["mode"] not in modes):
            continue
        width = 2 * (row["mode"] is not None) + (row["band"] is not None)
        newest.setdefault(row["star_id"], {})[width] = row["standing"]
    return {
        star_id: "barred" if scopes.get(0) == "barred" else scopes[max(scopes)]
        for star_id, scopes in newest.items()
    }
