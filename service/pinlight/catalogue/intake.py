"""Taking in tables of stars: batch by batch, each in one transaction, to go on where it stopped."""

import csv
import hashlib
import io
import json
import os
from collections.abc import Callable, Mapping
from contextlib import closing
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from sqlalchemy import Connection, insert, select, update

from pinlight.catalogue.changes import Changing
from pinlight.catalogue.database import bulk_insert, many_rows, rows_in
from pinlight.catalogue.mapping import ColumnMap, Rows, check_zero_points, find_columns, read_rows
from pinlight.catalogue.matching import MATCH_ARCSEC, Match, Matcher, known_keys, move_each
from pinlight.catalogue.names import name_key, short_keys
from pinlight.catalogue.predicting import (
    NEIGHBOUR_ARCSEC,
    UNUSABLE,
    first_diameters,
    or_none,
    preferred,
    renew_diameters,
)
from pinlight.catalogue.tablefile import TableFile, open_table
from pinlight.catalogue.tables import Change, Companion, Identifier, Intake, Magnitude, Reject, Source, Star
from pinlight.diameters.prediction import StarPhotometry
from pinlight.diameters.spectral import parse_spectral_type
from pinlight.errors import InputError
from pinlight.photometry.bands import default_errors
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.ranking.columns import FLAGS
from pinlight.sky.cells import cells_of
from pinlight.sky.positions import galactic_latitude_deg, unit_vectors

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue

__all__ = ["BATCH_ROWS", "IntakeOptions", "IntakeReport", "preview_file", "rejected_rows", "take_in"]

BATCH_ROWS = 20_000
# Two magnitudes in a band this far apart are hardly of one star, if only its place says so. (ours)
_SAME_STAR_MAG = 1.5
_EPOCH = 2000.0
# Filled in where the catalogue knows nothing; what it knows already stays.
_FILLED = ("pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas", "radial_velocity_km_s")


@dataclass(frozen=True)
class IntakeOptions:
    """How a table is taken in.

    source, reference, licence : of its values; the title names the source in the catalogue
    columns : canonical name -> column, before what is found
    epoch_yr : of the positions, where no column has it
    zero_points_jy : band -> flux of magnitude 0, for columns in Jy
    match_arcsec : how near a row lies to the star that it is
    """

    source: str
    reference: str
    licence: str = ""
    columns: Mapping[str, str] = field(default_factory=dict)
    epoch_yr: float = _EPOCH
    zero_points_jy: Mapping[str, float] = field(default_factory=dict)
    match_arcsec: float = MATCH_ARCSEC


@dataclass
class IntakeReport:
    """What came of it: rows in all, stars added, rows that were stars already, rows refused."""

    intake_id: int
    source: str
    rows: int
    added: int
    matched: int
    rejected: int
    resumed_at: int
    already: bool = False

    def to_dict(self) -> dict[str, Any]:
        """Ready for JSON."""
        return dict(self.__dict__)


def _plan(path: Path, options: IntakeOptions) -> tuple[TableFile, ColumnMap]:
    for name in ("source", "reference"):
        if not getattr(options, name).strip():
            raise InputError(f"{name} is empty; say where the values come from")
    if not 0 < options.match_arcsec <= 60:
        raise InputError(f"match_arcsec is {options.match_arcsec:g}; it must lie above 0 and not above 60")
    check_zero_points(options.zero_points_jy)
    table = open_table(path)
    mapping = find_columns(table.columns, options.columns, options.epoch_yr, options.zero_points_jy)
    if (
        not any(band in mapping.columns for band in CATALOGUE_BANDS)
        and "separation_arcsec" not in mapping.columns
    ):
        bands = ", ".join(CATALOGUE_BANDS)
        raise InputError(f"no column is a magnitude ({bands}) or a separation; say --map {bands[0]}=COLUMN")
    return table, mapping


def preview_file(path: Path, options: IntakeOptions, most: int = 10) -> dict[str, Any]:
    """What each column would be taken for, and the first rows as they would be; nothing is written.

    Raises
    ------
    InputError
        As `take_in`.
    """
    table, mapping = _plan(path, options)
    with closing(table):
        return _preview(table, mapping, most)


def _preview(table: TableFile, mapping: ColumnMap, most: int) -> dict[str, Any]:
    shown: list[dict[str, Any]] = []
    for chunk in table.chunks(most):
        rows = read_rows(chunk, mapping)
        for index in range(len(rows)):
            numbers = {
                key: values[index] for key, values in rows.numbers.items() if values[index] == values[index]
            }
            texts = {key: values[index] for key, values in rows.texts.items() if values[index]}
            shown.append(
                {
                    "line": rows.lines[index],
                    "reason": rows.reasons.get(index),
                    "values": texts
                    | {key: round(float(value), 7) for key, value in numbers.items() if value == value},
                }
            )
        break
    unused = [one.name for one in table.columns if one.name not in {m.column for m in mapping.columns.values()}]
    return {
        "file": str(table.path),
        "format": table.kind,
        "mapping": mapping.to_dict(),
        "unused": unused,
        "rows": shown,
    }


def take_in(
    catalogue: "Catalogue",
    path: Path,
    options: IntakeOptions,
    *,
    rejects: Path | None = None,
    progress: Callable[[int, int | None], object] | None = None,
    batch_rows: int = BATCH_ROWS,
) -> IntakeReport:
    """Take a table's stars into the catalogue.

    Each batch of rows is one transaction, and the catalogue knows how far it came: an intake
    that was interrupted goes on from there, and one that is complete changes nothing more.

    Parameters
    ----------
    catalogue : Catalogue
    path : Path
        CSV, ECSV, VOTable, FITS or Parquet.
    options : IntakeOptions
    rejects : Path, optional
        Where rows that were refused are written, with line and reason.
    progress : callable
        Told how many rows are done, and of how many where that is known.

    Returns
    -------
    IntakeReport

    Raises
    ------
    InputError
        If the file cannot be read, its columns not be told, or another process takes it in too.
    TokenError, NotAllowedError
        If the one who acts is not an editor.
    """
    table, mapping = _plan(path, options)
    hashed: dict[str, Any] = {"content": table.content_hash(), "mapping": mapping.to_dict()}
    hashed["source"] = options.source.strip()
    hashed["match_arcsec"] = options.match_arcsec
    key = hashlib.sha256(json.dumps(hashed, sort_keys=True).encode()).hexdigest()
    intake = _begin(catalogue, key, path, mapping, options)
    report = IntakeReport(
        intake["id"], options.source, intake["rows_done"], intake["added"], intake["matched"],
        intake["rejected"], intake["rows_done"], intake["finished_utc"] is not None,
    )  # fmt: skip
    with closing(table):
        if not report.already:
            _take_batches(catalogue, intake, table, mapping, options, report, batch_rows, progress)
    if rejects is not None:
        _write_rejects(catalogue, intake["id"], rejects)
    return report


def _take_batches(
    catalogue: "Catalogue",
    intake: dict[str, Any],
    table: TableFile,
    mapping: ColumnMap,
    options: IntakeOptions,
    report: IntakeReport,
    batch_rows: int,
    progress: Callable[[int, int | None], object] | None,
) -> None:
    matcher = Matcher(options.epoch_yr, options.match_arcsec)
    for chunk in table.chunks(batch_rows, intake["rows_done"]):
        _Batch(catalogue, intake, matcher, mapping).write(read_rows(chunk, mapping), report)
        if progress is not None:
            progress(report.rows, table.row_count)
    with catalogue.changing("intake", "editor", "take in a table", {"intake": intake["id"]}) as change:
        finished = update(Intake).where(Intake.id == intake["id"]).values(finished_utc=_now())
        change.connection.execute(finished)


def _now() -> str:
    return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def _begin(
    catalogue: "Catalogue", key: str, path: Path, mapping: ColumnMap, options: IntakeOptions
) -> dict[str, Any]:
    """The intake's record, made now if this is its beginning."""
    with catalogue.changing("intake", "editor", "take in a table", {"file": path.name}) as change:
        connection = change.connection
        known = connection.execute(select(Intake.__table__).where(Intake.key == key)).mappings().first()
        if known:
            return dict(known)
        source_id = _source(connection, options)
        row = {"key": key, "file": path.name, "mapping": json.dumps(mapping.to_dict()), "source_id": source_id}
        row |= {"rows_done": 0, "added": 0, "matched": 0, "rejected": 0, "started_utc": _now()}
        change.write()
        connection.execute(insert(Intake).values(row))
        return dict(connection.execute(select(Intake.__table__).where(Intake.key == key)).mappings().one())


def _source(connection: Connection, options: IntakeOptions) -> int:
    title = options.source.strip()
    known = connection.execute(select(Source.__table__).where(Source.title == title)).first()
    if known is not None:
        if known.reference != options.reference.strip():
            raise InputError(f"source {title!r} has the reference {known.reference!r}; name this one otherwise")
        return int(known.id)
    newest = connection.execute(select(Source.id).order_by(Source.id.desc()).limit(1)).scalar() or 0
    connection.execute(
        insert(Source).values(
            id=newest + 1,
            title=title,
            reference=options.reference.strip(),
            licence=options.licence.strip(),
            retrieved=datetime.now(UTC).strftime("%Y-%m-%d"),
        )
    )
    return newest + 1


class _Batch:
    """One batch of rows on its way into the catalogue, in one transaction."""

    def __init__(
        self, catalogue: "Catalogue", intake: dict[str, Any], matcher: Matcher, mapping: ColumnMap
    ) -> None:
        self.catalogue, self.intake, self.matcher, self.mapping = catalogue, intake, matcher, mapping
        self.source_id: int = intake["source_id"]

    def write(self, rows: Rows, report: IntakeReport) -> None:
        first = report.rows
        detail = {"intake": self.intake["id"], "file": self.intake["file"], "rows": [first, first + len(rows)]}
        changing = self.catalogue.changing("intake", "editor", "take in a table", detail)
        with many_rows(), changing as change:
            connection = change.connection
            state = connection.execute(select(Intake.__table__).where(Intake.id == self.intake["id"])).one()
            if state.rows_done != first:
                raise InputError(f"another process is taking in {self.intake['file']}; wait until it is done")
            self.matcher.refresh(connection)
            epochs = self._epochs(rows)
            match = self.matcher.match(connection, rows, epochs)
            rows.reasons |= match.reasons
            self._refuse_conflicts(connection, rows, match)
            new = self._new_stars(change, rows, match, epochs)
            kept = [index for index in range(len(rows)) if index not in rows.reasons]
            self._fill(change, rows, match, [index for index in kept if not new[index]])
            self._names(change, rows, match, new)
            touched = self._magnitudes(change, rows, match, new)
            self._companions(change, rows, match)
            self._neighbours(change, match.star_ids[new])
            self._first_diameters(change, rows, match, new)
            renew_diameters(change, {int(match.star_ids[i]) for i in touched if not new[i]})
            self._rejects(connection, rows)
            added, refused = int(new.sum()), len(rows.reasons)
            connection.execute(
                update(Intake)
                .where(Intake.id == self.intake["id"])
                .values(
                    rows_done=first + len(rows),
                    added=state.added + added,
                    matched=state.matched + len(kept) - added,
                    rejected=state.rejected + refused,
                )
            )
        report.rows += len(rows)
        report.added += added
        report.matched += len(kept) - added
        report.rejected += refused

    def _epochs(self, rows: Rows) -> Any:
        epochs = rows.numbers.get("epoch_yr")
        if epochs is None:
            return np.full(len(rows), self.mapping.epoch_yr)
        return np.where(np.isnan(epochs), self.mapping.epoch_yr, epochs)

    def _refuse_conflicts(self, connection: Connection, rows: Rows, match: Match) -> None:
        """Rows that name a star of an earlier row, or lie at a star's place but shine otherwise."""
        first: dict[Any, int] = {}
        for index in range(len(rows)):
            if index in rows.reasons:
                continue
            star = int(match.star_ids[index])
            for mark in [("star", star)] if star else [("name", key) for key in rows.keyed[index]]:
                if (earlier := first.setdefault(mark, index)) != index:
                    rows.reasons[index] = f"it is the same star as line {rows.lines[earlier]}"
        self._refuse_near_twins(rows, match)
        self._refuse_second_rows(connection, rows, match)
        at_place = {int(match.star_ids[i]): int(i) for i in np.flatnonzero(match.by_place)}
        query = select(Magnitude.__table__)
        for row in rows_in(connection, query, Magnitude.star_id, sorted(at_place)):
            index = at_place[row.star_id]
            value = rows.numbers[row.band][index] if row.band in rows.numbers else np.nan
            if abs(value - row.value) > _SAME_STAR_MAG:
                told = f"its {row.band} is {value:g}, not {row.value:g}; give it a name"
                rows.reasons.setdefault(index, f"it lies at the place of star {row.star_id}, but {told}")

    def _refuse_second_rows(self, connection: Connection, rows: Rows, match: Match) -> None:
        """Rows of a star that an earlier batch of this intake had already."""
        begins = f'{{"intake": {self.intake["id"]},%'
        query = select(Change.id).where(Change.action == "intake", Change.detail.like(begins))
        own = set(connection.execute(query).scalars())
        by_star = {int(match.star_ids[i]): i for i in range(len(rows)) if match.star_ids[i]}
        taken = select(Magnitude.star_id, Magnitude.change_id).where(Magnitude.source_id == self.source_id)
        for star_id, change_id in rows_in(connection, taken, Magnitude.star_id, sorted(by_star)):
            if change_id in own:
                rows.reasons.setdefault(by_star[star_id], "it is the same star as an earlier row")

    def _refuse_near_twins(self, rows: Rows, match: Match) -> None:
        """New stars nearer to each other than two stars can be told apart: the later is refused."""
        from scipy.spatial import cKDTree

        fresh = np.array(
            [i for i in range(len(rows)) if i not in rows.reasons and not match.star_ids[i]], dtype=np.int64
        )
        if len(fresh) < 2:
            return
        vectors = unit_vectors(rows.numbers["ra_deg"][fresh], rows.numbers["dec_deg"][fresh])
        reach = 2 * np.sin(np.radians(self.matcher.match_arcsec / 3600) / 2)
        for one, other in sorted(cKDTree(vectors).query_pairs(reach)):
            earlier, later = int(fresh[one]), int(fresh[other])
            if earlier not in rows.reasons:
                rows.reasons.setdefault(later, f"it is the same star as line {rows.lines[earlier]}")

    def _new_stars(self, change: Changing, rows: Rows, match: Match, epochs: Any) -> Any:
        """Rows that are no star of the catalogue become stars; their ids go into `match`."""
        new = np.array([index not in rows.reasons and not match.star_ids[index] for index in range(len(rows))])
        which = np.flatnonzero(new)
        if not len(which):
            return new
        newest = change.connection.execute(select(Star.id).order_by(Star.id.desc()).limit(1)).scalar() or 0
        match.star_ids[which] = np.arange(newest + 1, newest + 1 + len(which))
        motion = [rows.number(key)[which] for key in _FILLED]
        ra, dec = rows.numbers["ra_deg"][which], rows.numbers["dec_deg"][which]
        moved = epochs[which] != _EPOCH
        if moved.any():
            there = move_each(
                ra[moved], dec[moved], [values[moved] for values in motion], epochs[which][moved], _EPOCH
            )
            ra, dec = ra.copy(), dec.copy()
            ra[moved], dec[moved] = (values.round(9) for values in there)
        optional = [or_none(values.round(6)) for values in motion]
        cells, ras, decs = cells_of(ra, dec).tolist(), (ra % 360).tolist(), dec.tolist()
        types, flags = rows.texts.get("spectral_type"), rows.texts.get("flags")
        bulk_insert(
            change.connection,
            Star,
            (
                {
                    "id": int(match.star_ids[index]),
                    "name": rows.names[index][0] if rows.names[index] else _place_name(ras[at], decs[at]),
                    "ra_deg": ras[at],
                    "dec_deg": decs[at],
                    **{key: optional[column][at] for column, key in enumerate(_FILLED)},
                    "spectral_type": types[index] if types else "",
                    "object_type": "",
                    "flags": _flags(types[index] if types else "", flags[index] if flags else ""),
                    "cell": cells[at],
                    "source_id": self.source_id,
                    "change_id": change.id,
                }
                for at, index in enumerate(which.tolist())
            ),
        )
        return new

    def _fill(self, change: Changing, rows: Rows, match: Match, matched: list[int]) -> None:
        """What the catalogue did not know of its stars."""
        if not matched or not ({*_FILLED, "spectral_type"} & self.mapping.columns.keys()):
            return
        query = select(Star.__table__)
        known = {
            row.id: row._mapping
            for row in rows_in(change.connection, query, Star.id, match.star_ids[matched].tolist())
        }
        pairs = []
        for index in matched:
            star = known[int(match.star_ids[index])]
            fresh: dict[str, Any] = {
                key: round(float(rows.numbers[key][index]), 6)
                for key in _FILLED
                if key in rows.numbers
                and star[key] is None
                and rows.numbers[key][index] == rows.numbers[key][index]
            }
            if not star["spectral_type"] and (text := rows.texts.get("spectral_type", [""] * len(rows))[index]):
                fresh["spectral_type"] = text
                fresh["flags"] = _flags(text, star["flags"])
            if fresh:
                pairs.append((star, fresh))
        change.overwrite(Star, pairs)

    def _names(self, change: Changing, rows: Rows, match: Match, new: Any) -> None:
        kept = [index for index in range(len(rows)) if index not in rows.reasons]
        old = sorted({key for index in kept if not new[index] for key in rows.keyed[index]})
        known = known_keys(change.connection, old) if old else {}
        change_id, source_id = change.id, self.source_id

        def lines() -> Any:
            for index in kept:
                star_id = int(match.star_ids[index])
                names = rows.keyed[index]
                if new[index]:
                    names = names or {name_key(place := _place_name(*self._place(rows, index))): place}
                else:
                    names = {key: name for key, name in names.items() if star_id not in known.get(key, ())}
                every = {key: (name, False) for key, name in names.items()}
                for name in names.values():
                    for short in short_keys(name):
                        every.setdefault(short, (name, True))
                for key, (name, short_) in every.items():
                    yield {
                        "star_id": star_id, "name": name, "key": key, "short": short_,
                        "source_id": source_id, "change_id": change_id,
                    }  # fmt: skip

        bulk_insert(change.connection, Identifier, lines())

    @staticmethod
    def _place(rows: Rows, index: int) -> tuple[float, float]:
        return float(rows.numbers["ra_deg"][index]), float(rows.numbers["dec_deg"][index])

    def _magnitudes(self, change: Changing, rows: Rows, match: Match, new: Any) -> set[int]:
        """Magnitudes of this source; returns the rows whose stars got new or other ones."""
        by_star = {int(match.star_ids[i]): i for i in range(len(rows)) if i not in rows.reasons}
        old = sorted(star_id for star_id, index in by_star.items() if not new[index])
        query = select(Magnitude.__table__).where(Magnitude.source_id == self.source_id)
        known = {
            (row.star_id, row.band): row._mapping
            for row in rows_in(change.connection, query, Magnitude.star_id, old)
        }
        change_id, source_id = change.id, self.source_id
        fresh, pairs, touched = [], [], set()
        for band in CATALOGUE_BANDS:
            if band not in rows.numbers:
                continue
            values, errors, assumed, letters = (list(part) for part in self._band(rows, band))
            for star_id, index in by_star.items():
                value = values[index]
                if value != value:
                    continue
                row = {
                    "value": value,
                    "error": errors[index],
                    "error_assumed": assumed[index],
                    "quality": letters[index],
                }
                before = known.get((star_id, band)) if known else None
                if before is None:
                    row |= {"star_id": star_id, "band": band, "source_id": source_id}
                    row |= {"chosen": False, "change_id": change_id}
                    fresh.append(row)
                    touched.add(index)
                elif any(before[name] != row[name] for name in row):
                    pairs.append((before, row))
                    touched.add(index)
        bulk_insert(change.connection, Magnitude, fresh)
        change.overwrite(Magnitude, pairs)
        return touched

    @staticmethod
    def _band(rows: Rows, band: str) -> tuple[list[float], list[float], list[bool], list[str]]:
        """Magnitudes of a band, their errors, whether these are assumed, and quality letters."""
        values, given = rows.numbers[band], rows.number(f"{band}_error")
        assumed = ~(given > 0)
        errors = np.where(assumed, default_errors(band, values), given)
        letters = rows.texts.get(f"{band}_quality") or [""] * len(rows)
        return values.round(6).tolist(), errors.round(6).tolist(), assumed.tolist(), letters

    def _first_diameters(self, change: Changing, rows: Rows, match: Match, new: Any) -> None:
        """Diameters of stars that came with these rows: their only photometry is at hand."""
        which = np.flatnonzero(new)
        if not len(which):
            return
        magnitudes = np.full((len(which), len(CATALOGUE_BANDS)), np.nan)
        errors = magnitudes.copy()
        for column, band in enumerate(CATALOGUE_BANDS):
            if band in rows.numbers:
                values, stated, assumed, letters = (np.asarray(part)[which] for part in self._band(rows, band))
                usable = [letter[:1].upper() not in UNUSABLE for letter in letters]
                magnitudes[:, column] = np.where(usable, values, np.nan)
                errors[:, column] = np.where(assumed, np.nan, stated)
        ra, dec = rows.numbers["ra_deg"][which], rows.numbers["dec_deg"][which]
        types = rows.texts.get("spectral_type")
        photometry = StarPhotometry.of(
            CATALOGUE_BANDS,
            magnitudes,
            errors,
            [types[index] for index in which.tolist()] if types else [""] * len(which),
            rows.number("parallax_mas")[which].round(6),
            galactic_latitude_deg(ra, dec),
        )
        first_diameters(change, match.star_ids[which].tolist(), photometry)

    def _companions(self, change: Changing, rows: Rows, match: Match) -> None:
        if "separation_arcsec" not in rows.numbers:
            return
        with_one = np.flatnonzero(~np.isnan(rows.numbers["separation_arcsec"]))
        by_star = {int(match.star_ids[i]): int(i) for i in with_one if int(i) not in rows.reasons}
        query = select(Companion.__table__).where(Companion.source_id == self.source_id)
        known = {
            (row.star_id, row.separation_arcsec)
            for row in rows_in(change.connection, query, Companion.star_id, sorted(by_star))
        }
        fresh = []
        for star_id, index in by_star.items():
            separation, delta_v, delta_ks = (
                or_none(rows.number(key)[[index]].round(3))[0]
                for key in ("separation_arcsec", "delta_v_mag", "delta_ks_mag")
            )
            if (star_id, separation) not in known:
                fresh.append(
                    {
                        "star_id": star_id, "neighbour_id": None, "separation_arcsec": separation,
                        "delta_v_mag": delta_v, "delta_ks_mag": delta_ks, "source_id": self.source_id,
                        "change_id": change.id,
                    }
                )  # fmt: skip
        bulk_insert(change.connection, Companion, fresh)

    def _neighbours(self, change: Changing, fresh: Any) -> None:
        """New stars near any other are neighbours of each other, whoever listed them."""
        self.matcher.refresh(change.connection)
        pairs = self.matcher.neighbours(fresh, NEIGHBOUR_ARCSEC) if len(fresh) else []
        added = set(fresh.tolist())
        # Each pair once from either side; a pair of two new ones was found from both.
        both = {(one, other, apart) for one, other, apart in pairs}
        both |= {(other, one, apart) for one, other, apart in pairs if other not in added}
        ids = sorted({star for one, other, _ in both for star in (one, other)})
        found = preferred(rows_in(change.connection, select(Magnitude.__table__), Magnitude.star_id, ids))

        def delta(one: int, other: int, band: str) -> float | None:
            here, there = found.get((one, band)), found.get((other, band))
            return round(there.value - here.value, 3) if here and there else None

        bulk_insert(
            change.connection,
            Companion,
            (
                {
                    "star_id": one, "neighbour_id": other, "separation_arcsec": apart,
                    "delta_v_mag": delta(one, other, "V"), "delta_ks_mag": delta(one, other, "Ks"),
                    "source_id": self.source_id, "change_id": change.id,
                }
                for one, other, apart in sorted(both)
            ),
        )  # fmt: skip

    def _rejects(self, connection: Connection, rows: Rows) -> None:
        lines = [
            {
                "intake_id": self.intake["id"],
                "line": int(rows.lines[index]),
                "reason": reason,
                "content": " | ".join(rows.names[index])[:500],
            }
            for index, reason in sorted(rows.reasons.items())
        ]
        bulk_insert(connection, Reject, lines)


def _flags(spectral_type: str, given: str) -> str:
    """The flag words of a star, given ones and those that its spectral type tells."""
    words = set(given.split())
    spectral = parse_spectral_type(spectral_type)
    told = {
        "composite_spectrum": spectral.composite,
        "fast_rotator": spectral.broad_lined,
        "emission_line": spectral.emission,
        "peculiar": spectral.peculiar,
        "white_dwarf": spectral.degenerate,
    }
    words |= {word for word, holds in told.items() if holds}
    return " ".join(word for word in FLAGS if word in words)


def _place_name(ra_deg: float, dec_deg: float) -> str:
    """What a star without a name is called: its place, as the IAU recommends (truncated, not rounded).

    >>> _place_name(187.70593, -5.2)
    'J123049.42-051200.0'
    """
    centiseconds = int(ra_deg / 15 * 360_000 + 1e-6)
    tenths = int(abs(dec_deg) * 36_000 + 1e-6)
    hours, minutes, seconds = centiseconds // 360_000, centiseconds // 6000 % 60, centiseconds % 6000 / 100
    degrees, arcmin, arcsec = tenths // 36_000, tenths // 600 % 60, tenths % 600 / 10
    sign = "-" if dec_deg < 0 else "+"
    return f"J{hours:02d}{minutes:02d}{seconds:05.2f}{sign}{degrees:02d}{arcmin:02d}{arcsec:04.1f}"


def rejected_rows(catalogue: "Catalogue", intake_id: int) -> list[dict[str, Any]]:
    """The rows that an intake refused: line, reason and names."""
    query = select(Reject.line, Reject.reason, Reject.content).where(Reject.intake_id == intake_id)
    with catalogue.reading() as connection:
        rows = sorted(tuple(row) for row in connection.execute(query))
    return [{"line": line, "reason": reason, "names": names} for line, reason, names in rows]


def _write_rejects(catalogue: "Catalogue", intake_id: int, path: Path) -> None:
    """The refused rows of an intake as CSV, whole or not at all."""
    text = io.StringIO()
    writer = csv.DictWriter(text, ["line", "reason", "names"], lineterminator="\n")
    writer.writeheader()
    writer.writerows(rejected_rows(catalogue, intake_id))
    aside = path.with_name(f".{path.name}.unfinished")
    try:
        aside.write_text(text.getvalue(), encoding="utf-8")
        os.replace(aside, path)
    except OSError as error:
        aside.unlink(missing_ok=True)
        raise InputError(f"cannot write rejects {path}: {error.strerror}") from error
