"""A keeper's corrections: which magnitude counts, which entries are one star, which one is two; and undoing."""

import json
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, insert, select

from pinlight.catalogue.changes import Changing
from pinlight.catalogue.names import name_key, short_keys
from pinlight.catalogue.predicting import renew_diameters
from pinlight.catalogue.standings import must_exist
from pinlight.catalogue.tables import Base, Change, ChangeValue, Companion, Identifier, Magnitude, Source, Star
from pinlight.errors import InputError, NotFoundError
from pinlight.photometry.bands import band as known_band
from pinlight.sky.cells import cells_of
from pinlight.sky.positions import check_position

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue

__all__ = ["merge_stars", "prefer_magnitude", "split_star", "undo_change"]

_UNDOABLE = ("preference", "merge", "split")


def _star(connection: Connection, star_id: int) -> Any:
    must_exist(connection, star_id)
    return connection.execute(select(Star.__table__).where(Star.id == star_id)).mappings().one()


def _group(connection: Connection, star_id: int) -> list[int]:
    merged = connection.execute(select(Star.id).where(Star.merged_into == star_id))
    return [star_id, *sorted(merged.scalars())]


def prefer_magnitude(catalogue: "Catalogue", star_id: int, band: str, source: str | None) -> int:
    """Let one source's magnitude count in a band, or with None what the rules say.

    Returns
    -------
    change_id : int
        0 where it was so already.

    Raises
    ------
    InputError, NotFoundError
        If there is no such band, star, or magnitude of that source.
    TokenError, NotAllowedError
        If the one who acts is not a keeper.
    """
    known_band(band)
    detail = {"star_id": star_id, "band": band, "source": source}
    with catalogue.changing("preference", "keeper", "prefer a magnitude", detail) as change:
        must_exist(change.connection, star_id)
        ids = _group(change.connection, star_id)
        query = select(Magnitude.__table__, Source.title).join(Source, Source.id == Magnitude.source_id)
        query = query.where(Magnitude.star_id.in_(ids), Magnitude.band == band)
        rows = change.connection.execute(query).mappings().all()
        titles = sorted({row["title"] for row in rows})
        if source is not None and source not in titles:
            raise NotFoundError(
                f"source is {source!r}; star {star_id} has {band} of {', '.join(titles) or 'nobody'}"
            )
        changed = change.overwrite(Magnitude, [(dict(row), {"chosen": row["title"] == source}) for row in rows])
        if not changed:
            return 0
        renew_diameters(change, [star_id])
        return change.id


def merge_stars(catalogue: "Catalogue", star_id: int, into_id: int) -> int:
    """Say that two entries are one star: from now on the second stands for both.

    Nothing is moved: names, magnitudes and standings of the first are read as the second's.

    Returns
    -------
    change_id : int
        By which `undo_change` takes it back.

    Raises
    ------
    InputError
        If it is the same entry, or either is part of another merger that stands in the way.
    NotFoundError
        If there is no such star.
    TokenError, NotAllowedError
        If the one who acts is not a keeper.
    """
    if star_id == into_id:
        raise InputError(f"both are star {star_id}; name two entries")
    detail = {"star_id": star_id, "into_id": into_id}
    with catalogue.changing("merge", "keeper", "merge stars", detail) as change:
        star, into = (_star(change.connection, key) for key in (star_id, into_id))
        for one in (star, into):
            if one["merged_into"] is not None:
                raise InputError(
                    f"star {one['id']} is part of star {one['merged_into']} already; name that one"
                )
        if len(_group(change.connection, star_id)) > 1:
            raise InputError(f"star {star_id} stands for others; merge {into_id} into it instead")
        change.overwrite(Star, [(star, {"merged_into": into_id})])
        renew_diameters(change, [into_id])
        return change.id


def split_star(
    catalogue: "Catalogue",
    star_id: int,
    source: str,
    name: str,
    position_deg: tuple[float, float] | None = None,
) -> dict[str, int]:
    """Say that what one source brought to an entry is of another star, which becomes an entry of its own.

    Parameters
    ----------
    star_id : int
    source : str
        Its magnitudes, names and companions go to the new entry.
    name : str
        Of the new entry.
    position_deg : tuple, optional
        ICRS, epoch 2000; that of the old entry by default.

    Returns
    -------
    ids : dict
        `change_id`, by which `undo_change` takes it back, and the new `star_id`.

    Raises
    ------
    InputError, NotFoundError
        If the source brought nothing to the star, or the entry itself; or the name is taken.
    TokenError, NotAllowedError
        If the one who acts is not a keeper.
    """
    if not name_key(name):
        raise InputError(f"name is {name!r}; write a star's name")
    detail = {"star_id": star_id, "source": source, "name": name}
    with catalogue.changing("split", "keeper", "split a star", detail) as change:
        connection = change.connection
        star = _star(connection, star_id)
        source_id = connection.execute(select(Source.id).where(Source.title == source)).scalar()
        if source_id is None:
            raise NotFoundError(f"source is {source!r}; the catalogue has no such source")
        if star["source_id"] == source_id:
            raise InputError(f"star {star_id} itself came with {source!r}; split off another source")
        moved = {
            table: connection.execute(
                select(table.__table__).where(table.star_id == star_id, table.source_id == source_id)
            ).mappings().all()
            for table in (Magnitude, Identifier, Companion)
        }  # fmt: skip
        if not any(moved.values()):
            raise NotFoundError(f"source is {source!r}, which brought nothing to star {star_id}")
        query = select(Identifier.star_id).where(Identifier.key == name_key(name), ~Identifier.short)
        taken = set(connection.execute(query).scalars()) - ({star_id} if moved[Identifier] else set())
        if taken:
            raise InputError(f"name is {name!r}, which star {min(taken)} bears")
        ra, dec = check_position(*(position_deg or (star["ra_deg"], star["dec_deg"])))
        new_id = int(connection.execute(select(Star.id).order_by(Star.id.desc()).limit(1)).scalar_one()) + 1
        detail["new_id"] = new_id
        row = {
            **star,
            "id": new_id,
            "name": name,
            "ra_deg": ra,
            "dec_deg": dec,
            "spectral_type": "",
            "flags": "",
            "merged_into": None,
        }
        row |= {"cell": int(cells_of(ra, dec)), "source_id": source_id, "change_id": change.id}
        connection.execute(insert(Star).values(row))
        for table, rows in moved.items():
            change.overwrite(table, [(dict(one), {"star_id": new_id}) for one in rows])
        keys = {name_key(name): False} | dict.fromkeys(short_keys(name), True)
        here = {one["key"] for one in moved[Identifier]}
        names = [
            {"star_id": new_id, "name": name, "key": key, "short": short, "source_id": source_id}
            for key, short in keys.items()
            if key not in here
        ]
        if names:
            connection.execute(insert(Identifier), [one | {"change_id": change.id} for one in names])
        renew_diameters(change, [star_id, new_id])
        return {"change_id": change.id, "star_id": new_id}


def undo_change(catalogue: "Catalogue", change_id: int) -> int:
    """Take back a preference, a merger or a split; the log keeps both.

    The entry that a split made is merged into the one that it came from: nothing is removed.

    Returns
    -------
    change_id : int
        Of the undoing.

    Raises
    ------
    NotFoundError
        If there is no such change.
    InputError
        If it cannot be undone, or what it changed was changed again since.
    TokenError, NotAllowedError
        If the one who acts is not a keeper.
    """
    with catalogue.changing("undo", "keeper", "undo a change", {"undone": change_id}) as change:
        connection = change.connection
        done = connection.execute(select(Change.__table__).where(Change.id == change_id)).first()
        if done is None:
            raise NotFoundError(f"change is {change_id}; there is no such change")
        if done.action not in _UNDOABLE:
            raise InputError(
                f"change {change_id} is of the kind {done.action}; only {', '.join(_UNDOABLE)} can be undone"
            )
        query = select(ChangeValue.__table__).where(ChangeValue.change_id == change_id).order_by(ChangeValue.id)
        stars: set[int] = set()
        for line in reversed(connection.execute(query).all()):
            if line.table_name == "diameter":
                continue  # follows from the rest
            stars |= _put_back(change, line)
        detail = json.loads(done.detail)
        if done.action == "split":
            new = connection.execute(
                select(Star.__table__).where(Star.change_id == change_id)
            ).mappings().one()  # fmt: skip
            change.overwrite(Star, [(dict(new), {"merged_into": detail["star_id"]})])
        stars |= {detail[key] for key in ("star_id", "into_id") if detail.get(key)}
        merged = connection.execute(select(Star.id).where(Star.id.in_(stars), Star.merged_into.is_not(None)))
        renew_diameters(change, stars - set(merged.scalars()))
        return change.id


def _put_back(change: Changing, line: Any) -> set[int]:
    table = Base.metadata.tables[line.table_name]
    before, after = json.loads(line.before), json.loads(line.after)
    keys = [column.name for column in table.primary_key]
    own = dict(zip(keys, line.row_key.split("/"), strict=True)) | {
        key: after[key] for key in keys if key in after
    }
    typed = {key: value if key == "band" else int(value) for key, value in own.items()}
    query = select(table).where(*(table.c[key] == value for key, value in typed.items()))
    row = change.connection.execute(query).mappings().first()
    if row is None or any(row[name] != value for name, value in after.items()):
        raise InputError(f"{line.table_name} {line.row_key} was changed again since; undo that first")
    mapped = next(one.class_ for one in Base.registry.mappers if one.local_table is table)
    change.overwrite(mapped, [(dict(row), before)])
    return {row["star_id"], before.get("star_id", row["star_id"])} if "star_id" in row else {row["id"]}
