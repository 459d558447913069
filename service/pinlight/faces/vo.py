"""The catalogue as an IVOA Simple Cone Search 1.03, at ``/vo/cone``."""

import math
from typing import Any

import numpy as np
from flask import Blueprint, Response, request

from pinlight.errors import InputError, PinlightError
from pinlight.faces.service import service
from pinlight.faces.tables import as_votable, stars_table, votable_bytes
from pinlight.sky.positions import check_position

__all__ = ["LARGEST_ANSWER", "vo"]

vo = Blueprint("vo", __name__, url_prefix="/vo")

_CONTENT_TYPE = "application/x-votable+xml"
_MAXREC = 10_000
LARGEST_ANSWER = 100_000
_KNOWN = ("RA", "DEC", "SR", "VERB", "MAXREC", "RESPONSEFORMAT")
# Simple Cone Search 1.03, section 2.2: these three by the words of the first UCD vocabulary.
_UCDS = {"star_id": "ID_MAIN", "ra_deg": "POS_EQ_RA_MAIN", "dec_deg": "POS_EQ_DEC_MAIN"}


@vo.get("/cone")
def cone() -> Response:
    """Stars around a place as a VOTable; with SR=0 or MAXREC=0 the columns alone.

    An error is a VOTable too, as section 2.3 of the standard wants it.
    """
    from astropy.io.votable.tree import Info

    try:
        asked = _parameters()
        place = check_position(_number(asked, "RA"), _number(asked, "DEC"))
        radius_deg = _number(asked, "SR")
        if not 0 <= radius_deg <= 180:
            raise InputError(f"SR is {radius_deg:g}; it must lie between 0 and 180")
        verbosity = _whole(asked, "VERB", 2, 1, 3)
        most = _whole(asked, "MAXREC", _MAXREC, 0, LARGEST_ANSWER)
        columns = service().catalogue.columns()
    except PinlightError as error:
        return _error(str(error))
    if radius_deg > 0 and most > 0:
        rows, apart = columns.cone(*place, radius_deg)
    else:
        rows, apart = np.empty(0, dtype=np.int64), np.empty(0)
    nearest = np.argsort(apart, kind="stable")[:most]
    table = stars_table(columns, rows[nearest], apart[nearest], verbosity)
    votable = as_votable(table, "stars", ucds=_UCDS)
    if len(rows) > most:
        votable.resources[0].infos[0].value = "OVERFLOW"
        votable.resources[0].infos.append(Info(name="matches", value=str(len(rows))))
    return Response(votable_bytes(votable), content_type=_CONTENT_TYPE)


def _parameters() -> dict[str, str]:
    """The query's parameters, whose names may be written in either case."""
    asked: dict[str, str] = {}
    for name, value in request.args.items(multi=True):
        key = name.upper()
        if key in asked:
            raise InputError(f"{key} is given twice; give it once")
        asked[key] = value.strip()
    wanted = asked.get("RESPONSEFORMAT", "votable")
    if wanted not in ("votable", _CONTENT_TYPE, "text/xml"):
        raise InputError(f"RESPONSEFORMAT is {wanted!r}; it may be votable")
    return {key: value for key, value in asked.items() if key in _KNOWN}  # others are to be ignored


def _number(asked: dict[str, str], name: str) -> float:
    text = asked.get(name, "")
    if not text:
        raise InputError(f"{name} is missing; RA, DEC and SR are needed, in degrees")
    try:
        value = float(text)
    except ValueError as error:
        raise InputError(f"{name} is {text!r}; it must be a number of degrees") from error
    if not math.isfinite(value):
        raise InputError(f"{name} is {text!r}; it must be a number of degrees")
    return value


def _whole(asked: dict[str, str], name: str, default: int, low: int, high: int) -> int:
    text = asked.get(name, "")
    try:
        value = int(text) if text else default
    except ValueError as error:
        raise InputError(f"{name} is {text!r}; it must be a whole number") from error
    if value < low:
        raise InputError(f"{name} is {value}; it must lie between {low} and {high}")
    return min(value, high)


def _error(message: str) -> Response:
    from astropy.io.votable.tree import Info, Resource, VOTableFile

    votable = VOTableFile(version="1.4")
    resource = Resource(type="results")
    resource.infos.append(Info(ID="Error", name="Error", value=message))
    status: Any = Info(name="QUERY_STATUS", value="ERROR")
    status.content = message
    resource.infos.append(status)
    votable.resources.append(resource)
    return Response(votable_bytes(votable), content_type=_CONTENT_TYPE)
