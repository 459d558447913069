"""The change log: writing to it, and reading from it who changed what, and what held when."""

import json
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import Connection, Table, bindparam, func, insert, select

from pinlight.catalogue.tables import (
    Change,
    ChangeValue,
    Companion,
    Diameter,
    Identifier,
    Magnitude,
    Source,
    Standing,
    Star,
)
from pinlight.errors import InputError, NotFoundError

__all__ = ["Changing", "latest_change", "now_utc", "recent_changes", "star_changes", "star_then", "utc_text"]

_TABLES: tuple[type[Any], ...] = (Star, Identifier, Magnitude, Companion, Diameter, Standing)


def utc_text(moment: datetime) -> str:
    """A time as the catalogue writes it: texts sort as times do.

    >>> utc_text(datetime(2026, 12, 1, 10, tzinfo=UTC))
    '2026-12-01T10:00:00.000000Z'
    """
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def now_utc() -> str:
    """The present."""
    return utc_text(datetime.now(UTC))


def latest_change(connection: Connection) -> int:
    """The id of the newest change, 0 where there is none."""
    return int(connection.execute(select(func.coalesce(func.max(Change.id), 0))).scalar_one())


def _row_key(table: Table, row: Mapping[str, Any]) -> str:
    """The primary key of a row as text: ``12``, or ``12/V/3``."""
    return "/".join(str(row[column.name]) for column in table.primary_key)


class Changing:
    """One change being made, in the transaction of `connection`.

    Its line in the log is written when its `id` is first asked for: a change that turns out to
    change nothing leaves none. Times in the log never run backwards, whatever a clock says.
    """

    def __init__(self, connection: Connection, made_by: str, action: str, detail: dict[str, Any]) -> None:
        self.connection = connection
        self.made_by, self.action, self.detail = made_by, action, detail
        self._id: int | None = None
        self._made_utc: str | None = None

    @property
    def id(self) -> int:
        """What rows that this change adds have for `change_id`."""
        self.write()
        assert self._id is not None
        return self._id

    def write(self) -> None:
        """Write the change's line in the log, once."""
        if self._id is None:
            last = self.connection.execute(
                select(Change.id, Change.made_utc).order_by(Change.id.desc()).limit(1)
            ).first()
            self._made_utc = max(now_utc(), last.made_utc) if last else now_utc()
            self._id = last.id + 1 if last else 1
            self.connection.execute(
                insert(Change).values(
                    id=self._id,
                    made_utc=self._made_utc,
                    made_by=self.made_by,
                    action=self.action,
                    detail=json.dumps(self.detail, ensure_ascii=False),
                )
            )

    @property
    def made_utc(self) -> str:
        """When, as the log has it."""
        self.write()
        return str(self._made_utc)

    def overwrite(self, table: type[Any], rows: Iterable[tuple[Mapping[str, Any], Mapping[str, Any]]]) -> int:
        """Change rows of a table and log what stood there.

        Parameters
        ----------
        table : mapped class
            Star, Identifier, Magnitude, Companion or Diameter.
        rows : pairs of mappings
            A row as it is, with its primary key and at least the columns to change; and the
            columns to change with their new values. Values that stay the same are left alone.

        Returns
        -------
        count : int
            How many rows changed.
        """
        target: Table = table.__table__
        lines: list[dict[str, Any]] = []
        groups: dict[tuple[str, ...], list[dict[str, Any]]] = {}
        for row, wanted in rows:
            after = {name: value for name, value in wanted.items() if row[name] != value}
            if not after:
                continue
            before = {name: row[name] for name in after}
            star_id = row["id"] if table is Star else row.get("star_id")
            lines.append(
                {
                    "change_id": self.id,
                    "star_id": star_id,
                    "table_name": target.name,
                    "row_key": _row_key(target, row),
                    "before": json.dumps(before, ensure_ascii=False),
                    "after": json.dumps(after, ensure_ascii=False),
                }
            )
            key = {f"key_{column.name}": row[column.name] for column in target.primary_key}
            groups.setdefault(tuple(sorted(after)), []).append(key | after)
        for values in groups.values():
            update = target.update()
            for column in target.primary_key:
                update = update.where(column == bindparam(f"key_{column.name}"))
            self.connection.execute(update, values)
        if lines:
            self.connection.execute(insert(ChangeValue), lines)
        return len(lines)


def _plain(change: Any) -> dict[str, Any]:
    return {
        "change_id": change.id,
        "made_utc": change.made_utc,
        "made_by": change.made_by,
        "action": change.action,
        "detail": json.loads(change.detail),
    }


def recent_changes(connection: Connection, most: int = 50) -> list[dict[str, Any]]:
    """The newest changes of the whole catalogue, newest first."""
    rows = connection.execute(select(Change.__table__).order_by(Change.id.desc()).limit(most))
    return [_plain(row) for row in rows]


def _changes(connection: Connection, ids: Iterable[int]) -> dict[int, dict[str, Any]]:
    wanted = select(Change.__table__).where(Change.id.in_(sorted(set(ids))))
    return {row.id: _plain(row) for row in connection.execute(wanted)}


def _rows_of(connection: Connection, table: Table, star_id: int) -> list[dict[str, Any]]:
    key = table.c.id if table.name == "star" else table.c.star_id
    return [dict(row) for row in connection.execute(select(table).where(key == star_id)).mappings()]


def star_changes(connection: Connection, star_id: int) -> list[dict[str, Any]]:
    """Everything that was ever changed of one star, oldest first.

    Returns
    -------
    changes : list of dict
        Each a change (who, when, what) with `added`, the rows that it added by table, and
        `overwritten`, pairs of values before and after.
    """
    added: dict[int, dict[str, int]] = {}
    for mapped in _TABLES:
        table: Table = mapped.__table__
        for row in _rows_of(connection, table, star_id):
            counts = added.setdefault(row["change_id"], {})
            counts[table.name] = counts.get(table.name, 0) + 1
    overwritten: dict[int, list[dict[str, Any]]] = {}
    lines = select(ChangeValue.__table__).where(ChangeValue.star_id == star_id).order_by(ChangeValue.id)
    for line in connection.execute(lines):
        overwritten.setdefault(line.change_id, []).append(
            {
                "table": line.table_name,
                "row": line.row_key,
                "before": json.loads(line.before),
                "after": json.loads(line.after),
            }
        )
    changes = _changes(connection, {*added, *overwritten})
    return [
        change | {"added": added.get(key, {}), "overwritten": overwritten.get(key, [])}
        for key, change in sorted(changes.items())
    ]


def _moved_away(connection: Connection, table: Table, lines: list[Any], last: int) -> list[dict[str, Any]]:
    """Rows that were the star's after the change `last`, and are another's since."""
    found = []
    for line in lines:
        after = json.loads(line.after)
        if line.table_name == table.name and line.change_id > last and "star_id" in after:
            key = dict(zip([column.name for column in table.primary_key], line.row_key.split("/"), strict=True))
            key |= {name: value for name, value in after.items() if name in key}
            typed = {name: value if name == "band" else int(value) for name, value in key.items()}
            query = select(table).where(*(table.c[name] == value for name, value in typed.items()))
            found += [dict(row) for row in connection.execute(query).mappings()]
    return found


def star_then(connection: Connection, star_id: int, at_utc: str) -> dict[str, Any]:
    """A star's rows as they stood at a past time, each value with who set it and when.

    Parameters
    ----------
    at_utc : str
        ISO 8601, UTC.

    Returns
    -------
    record : dict
        `star_id`, `at_utc`, and `rows` by table; a row is a mapping of column to `value`,
        `made_by` and `made_utc`.

    Raises
    ------
    InputError
        If the time cannot be read.
    NotFoundError
        If the star was not there then.
    """
    try:
        moment = datetime.fromisoformat(at_utc.strip())
    except ValueError as error:
        raise InputError(f"at is {at_utc!r}; write a time such as 2026-12-01T20:00:00Z") from error
    at = utc_text(moment if moment.tzinfo else moment.replace(tzinfo=UTC))
    last = connection.execute(select(func.max(Change.id)).where(Change.made_utc <= at)).scalar() or 0
    lines = list(
        connection.execute(
            select(ChangeValue.__table__).where(ChangeValue.star_id == star_id).order_by(ChangeValue.id)
        )
    )
    sources = {row.id: row.title for row in connection.execute(select(Source.id, Source.title))}
    found: dict[str, list[dict[str, tuple[Any, int]]]] = {}
    used: set[int] = set()
    for mapped in _TABLES:
        table: Table = mapped.__table__
        for row in [*_rows_of(connection, table, star_id), *_moved_away(connection, table, lines, last)]:
            added_by = row["change_id"]
            if added_by > last:
                continue
            setter = dict.fromkeys(row, added_by)
            keys = {_row_key(table, row), _row_key(table, row | {"star_id": star_id})}
            own = [line for line in lines if line.table_name == table.name and line.row_key in keys]
            for line in own:
                if line.change_id <= last:
                    setter |= dict.fromkeys(json.loads(line.after), line.change_id)
            for line in reversed(own):
                if line.change_id > last:
                    row |= json.loads(line.before)
            if "source_id" in row:
                row["source"], setter["source"] = sources[row["source_id"]], setter["source_id"]
            hidden = {"change_id", "star_id", "id", "source_id"}
            shown = {name: (value, setter[name]) for name, value in row.items() if name not in hidden}
            used.update(setter.values())
            found.setdefault(table.name, []).append(shown)
    if "star" not in found:
        raise NotFoundError(f"star_id is {star_id}; there was no such star at {at}")
    changes = _changes(connection, used)
    return {
        "star_id": star_id,
        "at_utc": at,
        "rows": {
            name: [
                {
                    column: {
                        "value": value,
                        "made_by": changes[key]["made_by"],
                        "made_utc": changes[key]["made_utc"],
                        "action": changes[key]["action"],
                    }
                    for column, (value, key) in row.items()
                }
                for row in rows
            ]
            for name, rows in found.items()
        },
    }
