"""The open catalogue: its editions, its stars and what is known of them."""

import re
from collections.abc import Iterable, Iterator, Sequence
from contextlib import AbstractContextManager, contextmanager
from copy import copy
from functools import cached_property
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, func, or_, select
from sqlalchemy.orm import aliased

from pinlight.catalogue.changes import Changing, latest_change, recent_changes, star_changes, star_then
from pinlight.catalogue.database import (
    Place,
    database_errors,
    engine_of,
    place_of,
    reading,
    refuse_newer,
    schema_of,
    snapshot,
    writing,
)
from pinlight.catalogue.diameters import explain_diameter
from pinlight.catalogue.editions import open_edition, record_edition
from pinlight.catalogue.members import Person, person_of
from pinlight.catalogue.names import key_beginnings, name_key
from pinlight.catalogue.predicting import merged_stars, preferred, root_of
from pinlight.catalogue.standings import (
    STANDINGS,
    must_exist,
    public_standing,
    set_standing,
    standing_rows,
    standings_for,
)
from pinlight.catalogue.tables import (
    SCHEMA,
    Change,
    Companion,
    Diameter,
    Edition,
    Identifier,
    Magnitude,
    Source,
    Star,
)
from pinlight.errors import CatalogueError, InputError, NotFoundError
from pinlight.ranking.columns import StarColumns

__all__ = ["STANDINGS", "Catalogue", "open_catalogue"]

_MOST_CHOICES = 8
_LONGEST_NAME = 200
_MOST_IDS = 10_000


def open_catalogue(url: str | None = None, *, token: str | None = None) -> "Catalogue":
    """Open an existing catalogue.

    Raises
    ------
    InputError
        If the URL is none that this version can keep a catalogue at.
    CatalogueError
        If there is no catalogue, or one of another schema.
    """
    place = place_of(url)
    if place.path is not None:
        with database_errors(place, "open"):
            found = place.path.is_file()
        if not found:
            raise CatalogueError(f"there is no catalogue at {place}; run 'pinlight init' to make one")
    engine = engine_of(place)
    try:
        with database_errors(place, "open"), engine.connect() as connection:
            _check_schema(schema_of(connection), place)
    except BaseException:
        engine.dispose()
        raise
    return Catalogue(place, engine, token)


def _check_schema(schema: str | None, place: Place) -> None:
    if schema is None:
        raise CatalogueError(f"{place} is no Pinlight catalogue; run 'pinlight init --db URL' to make one")
    refuse_newer(schema, place)
    if schema < SCHEMA:
        raise CatalogueError(f"catalogue {place} has schema {schema}; run 'pinlight init' to renew it")


class Catalogue:
    """An open catalogue: rankings read its columns, people ask it for stars."""

    def __init__(self, place: Place, engine: Engine, token: str | None = None) -> None:
        self.place = place
        self.token = token
        self._engine = engine
        self._open_editions: dict[str, StarColumns] = {}

    def close(self) -> None:
        """Let go of the database."""
        self._engine.dispose()

    @cached_property
    def editions_folder(self) -> Path:
        """Where the edition files are."""
        return self.place.editions_folder

    def acting(self, token: str | None) -> "Catalogue":
        """The same catalogue, in the hands of whoever has that token."""
        other = copy(self)
        other.token = token
        return other

    def person(self) -> Person:
        """Who acts.

        Raises
        ------
        TokenError
            If the token is missing, unknown or revoked.
        """
        with self.reading() as connection:
            return person_of(connection, self.token)

    @contextmanager
    def changing(self, action: str, role: str, doing: str, detail: dict[str, Any]) -> Iterator[Changing]:
        """A change by whoever acts, in a transaction of its own, if their role suffices.

        Parameters
        ----------
        action : str
            One word for the log.
        role : str
            The least that it takes.
        doing : str
            What the message says that it takes that role for.
        detail : dict
            What the log says of it.

        Raises
        ------
        TokenError, NotAllowedError
            If the one who acts may not.
        """
        with writing(self._engine, self.place) as connection:
            person = person_of(connection, self.token)
            person.require(role, doing)
            yield Changing(connection, person.name, action, detail)

    def reading(self) -> AbstractContextManager[Connection]:
        """A connection to read by."""
        return reading(self._engine, self.place)

    def freeze(self) -> str:
        """Write the present content as an edition and return its name."""
        from pinlight.catalogue.editions import write_edition

        self.person().require("keeper", "freeze an edition")
        with snapshot(self._engine, self.place) as connection:
            after = latest_change(connection)
            name, facts = write_edition(connection, self.editions_folder)
        with self.changing("edition", "keeper", "freeze an edition", {"edition": name}) as change:
            record_edition(change, name, facts, after)
        return name

    def editions(self) -> list[dict[str, Any]]:
        """All editions, newest first."""
        query = select(Edition.__table__)
        with self.reading() as connection:
            rows = connection.execute(query.order_by(Edition.made_utc.desc(), Edition.name)).mappings().all()
        return [dict(row) for row in rows]

    def revision(self) -> str:
        """A text that differs whenever an answer about the catalogue may: newest edition and change."""
        query = select(
            select(Edition.name).order_by(Edition.made_utc.desc(), Edition.name).limit(1).scalar_subquery(),
            select(func.max(Change.id)).scalar_subquery(),
        )
        with self.reading() as connection:
            edition, change = connection.execute(query).one()
        return f"{edition}.{change}"

    def columns(self, edition: str | None = None) -> StarColumns:
        """The columns of an edition, by default the newest.

        Raises
        ------
        NotFoundError
            If there is no such edition.
        """
        name = self._known_edition(edition)["name"]
        if name not in self._open_editions:
            self._open_editions[name] = open_edition(self.editions_folder, name)
        return self._open_editions[name]

    def _known_edition(self, name: str | None) -> dict[str, Any]:
        """The edition of that name, by default the newest."""
        rows = self.editions()
        if not rows:
            raise CatalogueError(f"catalogue {self.place} has no edition yet; add stars and freeze one")
        for row in rows:
            if name in (None, row["name"]):
                return row
        known = ", ".join(row["name"] for row in rows[:_MOST_CHOICES])
        raise NotFoundError(f"edition is {name!r}; the catalogue has {known}")

    def find(self, name: str) -> int:
        """The id of the star of that name; case, blanks, dots and ways of writing Greek do not matter.

        Raises
        ------
        InputError
            If several stars bear the name; the message lists them.
        NotFoundError
            If none does; the message suggests near misses.
        """
        if len(name) > _LONGEST_NAME:
            raise InputError(f"name has {len(name)} letters; {_LONGEST_NAME} are the most")
        key = name_key(name)
        if not key or not key.isprintable():  # half a character (a lone surrogate) is not printable
            raise InputError(f"name is {name!a}; write a star's name, such as 'HD 10700' or 'tau Cet'")
        rows = self._bearers(key)
        if not rows and (without := re.fullmatch(r"(.*[^a-d])[a-d]{1,2}", key)):
            rows = self._bearers(without[1])  # "alpha Cen A": the component letter is not in every list
        exact = [row for row in rows if not row.short] or rows
        written = name.strip()
        for same in (
            [row for row in exact if written == row.name],
            [row for row in exact if written == row.identifier],
        ):
            if len(same) == 1:  # case and spelling may tell apart what the key does not
                return int(same[0].id)
        chosen = exact
        if len(chosen) == 1:
            return int(chosen[0].id)
        if chosen:
            shown = ", ".join(self._plain_name(row.id, row.name) for row in chosen[:_MOST_CHOICES])
            more = ", …" if len(chosen) > _MOST_CHOICES else ""
            raise InputError(f"name {written!r} may be any of {shown}{more}; give one of them")
        near = self._near_misses(key)
        hint = f"did you mean {' or '.join(near)}?" if near else "give its coordinates instead"
        raise NotFoundError(f"no star is named {written!r}; {hint}")

    def suggest(self, written: str, most: int = 8) -> list[dict[str, Any]]:
        """Names that begin as `written` does, the shortest first: name, the star's own name and type."""
        usable = written.isprintable() and len(written) <= _LONGEST_NAME
        beginnings = key_beginnings(written) if usable else []
        if not beginnings:
            return []
        key = Identifier.key.collate("C" if self._engine.dialect.name == "postgresql" else "BINARY")
        begins = [key.between(begin, f"{begin}\U0010ffff") for begin in beginnings]
        query = (
            select(Identifier.name, Star.name.label("star"), Star.id, Star.spectral_type)
            .join(Star, Identifier.star_id == Star.id)
            .where(or_(*begins), ~Identifier.short)
            .order_by(func.length(key), key)
            .limit(most)
        )
        with self.reading() as connection:
            rows = connection.execute(query).all()
        return [
            {"name": row.name, "star_id": row.id, "star": row.star, "spectral_type": row.spectral_type}
            for row in rows
        ]

    def _bearers(self, key: str) -> Sequence[Any]:
        """The stars that bear a key, each once; an entry that another stands for is the other."""
        entry = aliased(Star)
        query = (
            select(Star.id, Star.name, Identifier.name.label("identifier"), Identifier.short)
            .join(entry, Star.id == func.coalesce(entry.merged_into, entry.id))
            .join(Identifier, Identifier.star_id == entry.id)
            .where(Identifier.key == key)
        )
        with self.reading() as connection:
            rows = sorted(
                connection.execute(query), key=lambda row: (row.name, row.id, row.short, row.identifier)
            )
        return list({row.id: row for row in reversed(rows)}.values())[::-1]

    def _plain_name(self, star_id: int, name: str) -> str:
        """A star's name, with a catalogue number beside it where case alone tells it from another's."""
        if len({row.id for row in self._bearers(name_key(name)) if not row.short}) < 2:
            return name
        query = select(Identifier.name).where(Identifier.star_id == star_id, ~Identifier.short)
        with self.reading() as connection:
            others = sorted(other for (other,) in connection.execute(query) if re.match(r"H(D|IP|R) ", other))
        return f"{name} ({others[0]})" if others else name

    @cached_property
    def _all_names(self) -> dict[str, str]:
        """Every key and a name it stands for."""
        query = select(Identifier.key, Identifier.name).where(~Identifier.short)
        with self.reading() as connection:
            return {row.key: row.name for row in connection.execute(query)}

    def _near_misses(self, key: str, most: int = 3) -> list[str]:
        from rapidfuzz import fuzz, process

        near = process.extract(key, self._all_names.keys(), scorer=fuzz.ratio, limit=most, score_cutoff=75)
        return [self._all_names[found] for found, _, _ in near]

    def standings(
        self, band: str | None = None, mode: str | None = None, array: str | None = None
    ) -> dict[int, str]:
        """The standing that counts of every star that has one; see `standings.standings_for`."""
        with self.reading() as connection:
            found = standings_for(standing_rows(connection), band, mode, array)
            # An older edition may still have an entry of its own for a star that is part of another now.
            merged = merged_stars(connection) if found else {}
        return found | {entry: found[star] for entry, star in merged.items() if star in found}

    def set_standing(self, star_id: int, standing: str, reason: str, **options: Any) -> dict[str, Any]:
        """Add a judgement of a star; see `standings.set_standing`."""
        return set_standing(self, star_id, standing, reason, **options)

    def star_standings(self, star_id: int) -> dict[str, Any]:
        """All judgements of a star, oldest first, and the general one that counts.

        Raises
        ------
        NotFoundError
            If there is no such star.
        """
        with self.reading() as connection:
            star_id = root_of(connection, star_id)
            rows = standing_rows(connection, star_id)
        return {
            "star_id": star_id,
            "standing": standings_for(rows).get(star_id),
            "standings": [public_standing(row) for row in rows],
        }

    def changes(self, star_id: int | None = None, at_utc: str | None = None, most: int = 50) -> Any:
        """The change log: of a star, or the newest of all; with `at_utc` the star as it stood then.

        See `changes.star_changes`, `changes.star_then` and `changes.recent_changes`.
        """
        with self.reading() as connection:
            if star_id is None:
                if at_utc is not None:
                    raise InputError("at is given without a star; give the star too")
                return recent_changes(connection, most)
            must_exist(connection, star_id)
            return (
                star_changes(connection, star_id) if at_utc is None else star_then(connection, star_id, at_utc)
            )

    def names(self, star_ids: Iterable[int]) -> dict[int, str]:
        """The names of some stars by their ids."""
        wanted = sorted(star_ids)
        found: dict[int, str] = {}
        with self.reading() as connection:
            for start in range(0, len(wanted), _MOST_IDS):
                query = select(Star.id, Star.name).where(Star.id.in_(wanted[start : start + _MOST_IDS]))
                found |= {row.id: row.name for row in connection.execute(query)}
        return found

    def check(self, name: str) -> dict[str, Any]:
        """Whether an edition's files are what its hash says; see `comparison.check_edition`."""
        from pinlight.catalogue.comparison import check_edition

        return check_edition(self.editions_folder, self._known_edition(name)["name"])

    def compare(self, one: str, other: str | None = None, most: int = 20) -> dict[str, Any]:
        """What differs between two editions; see `comparison.compare_editions`.

        Standings are those that counted when each was frozen.
        """
        from pinlight.catalogue.comparison import compare_editions

        rows = [self._known_edition(one), self._known_edition(other)]
        with self.reading() as connection:
            judged = standing_rows(connection)
        before, after = (
            standings_for(line for line in judged if line["change_id"] <= row["change_id"]) for row in rows
        )
        one_columns, other_columns = (self.columns(row["name"]) for row in rows)
        names = self.names({*before, *after})
        return compare_editions(one_columns, other_columns, (before, after), names, most)

    def star(self, star_id: int) -> dict[str, Any]:
        """All that is known of one star, ready for JSON.

        Raises
        ------
        NotFoundError
            If there is no such star.
        """
        with self.reading() as connection:

            def rows(*columns: Any, table: Any, order: Any = None) -> list[dict[str, Any]]:
                query = select(*columns).where(table.star_id.in_(group)).order_by(order)
                return [dict(row) for row in connection.execute(query).mappings()]

            star_id = root_of(connection, star_id)
            star = connection.execute(select(Star.__table__).where(Star.id == star_id)).mappings().one()
            entries = connection.execute(select(Star.id, Star.name).where(Star.merged_into == star_id)).all()
            group = [star_id, *(row.id for row in entries)]
            sources = {row.id: row for row in connection.execute(select(Source.__table__))}
            names = rows(Identifier.name, Identifier.short, table=Identifier, order=Identifier.id)
            query = select(Magnitude.__table__).where(Magnitude.star_id.in_(group))
            magnitudes = connection.execute(query.order_by(Magnitude.source_id)).all()
            companions = rows(
                Companion.neighbour_id, Companion.separation_arcsec, Companion.delta_v_mag,
                Companion.delta_ks_mag, table=Companion, order=Companion.separation_arcsec,
            )  # fmt: skip
            companions = [row for row in companions if row["neighbour_id"] not in group]
            diameter = [row for row in rows(Diameter.__table__, table=Diameter) if row["star_id"] == star_id]
            standings = standing_rows(connection, star_id)
            neighbours = [row["neighbour_id"] for row in companions]
            named = connection.execute(select(Star.id, Star.name).where(Star.id.in_(neighbours)))
            neighbour_names = {row.id: row.name for row in named}
        identifiers = dict.fromkeys(row["name"] for row in names if not row["short"])
        counting = {
            band: row for (_, band), row in preferred(magnitudes, dict.fromkeys(group, star_id)).items()
        }

        def shown(row: Any) -> dict[str, Any]:
            return {
                **{key: getattr(row, key) for key in ("value", "error", "error_assumed", "quality", "chosen")},
                "source": sources[row.source_id].title,
            }

        def others(band: str, best: Any) -> list[dict[str, Any]]:
            return [shown(row) for row in magnitudes if row.band == band and row is not best]

        return {
            "star_id": star["id"],
            "name": star["name"],
            "identifiers": sorted(identifiers, key=lambda name: name != star["name"]),
            **{
                key: star[key]
                for key in (
                    "ra_deg", "dec_deg", "pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas",
                    "radial_velocity_km_s", "spectral_type",
                )
            },
            "flags": star["flags"].split(),
            "magnitudes": {
                band: shown(row) | {"others": others(band, row)}
                for band, row in sorted(counting.items(), key=lambda pair: "BVRIJHKs".find(pair[0]))
            },
            "companions": [
                {**row, "name": neighbour_names.get(row["neighbour_id"])} for row in companions
            ],
            "diameter": explain_diameter(
                diameter[0],
                star["spectral_type"],
                star["parallax_mas"],
                {band: row.value for band, row in counting.items()},
            ) if diameter else None,
            "standing": standings_for(standings).get(star_id),
            "standings": [public_standing(row) for row in standings],
            "merged": [{"star_id": row.id, "name": row.name} for row in entries],
            "source": sources[star["source_id"]].title,
        }  # fmt: skip
