"""Finding the star that a row of another table is: by its names, and by its place at a common epoch."""

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, select

from pinlight.catalogue.mapping import Rows
from pinlight.catalogue.predicting import merged_stars
from pinlight.catalogue.tables import Star
from pinlight.sky.positions import move_to_epoch, separation_deg, unit_vectors

__all__ = ["MATCH_ARCSEC", "NAME_ARCSEC", "Match", "Matcher", "known_keys", "move_each"]

Floats = NDArray[np.float64]

# Two places this near are one star: several times the errors of good positions, and well within the
# separation that makes two entries of a double star in most tables. (ours)
MATCH_ARCSEC = 1.5
# A name is believed within this distance: places of old tables may be this wrong. (ours)
NAME_ARCSEC = 60.0
_NEIGHBOURS = 4
_EPOCH = 2000.0


@dataclass
class Match:
    """For each row the star that it is (0: a new one), whether only by its place, and why it can be none."""

    star_ids: NDArray[np.int64]
    by_place: NDArray[np.bool_]
    reasons: dict[int, str]


def move_each(ra_deg: Floats, dec_deg: Floats, motion: Any, from_yr: Any, to_yr: Any) -> tuple[Floats, Floats]:
    """Positions at other times, one time a star; `motion` as `move_to_epoch` takes it."""
    pm_ra, pm_dec, parallax, velocity = motion
    return move_to_epoch(ra_deg, dec_deg, pm_ra, pm_dec, parallax, velocity, from_yr, to_yr)


class _Tree:
    """Positions of some stars at one epoch, to be searched."""

    def __init__(self, rows: NDArray[np.int64], vectors: Floats) -> None:
        from scipy.spatial import cKDTree

        self.rows, self.tree = rows, cKDTree(vectors)


class Matcher:
    """All stars of a catalogue, kept up with it from batch to batch.

    Parameters
    ----------
    epoch_yr : float
        Of the rows that will be asked for, or near it.
    match_arcsec : float
    """

    def __init__(self, epoch_yr: float = _EPOCH, match_arcsec: float = MATCH_ARCSEC) -> None:
        self.epoch_yr, self.match_arcsec = epoch_yr, match_arcsec
        self.ids = np.empty(0, dtype=np.int64)
        self._place = np.empty((0, 6))
        self._trees: list[_Tree] = []
        self._merged: dict[int, int] = {}

    def refresh(self, connection: Connection) -> None:
        """Take in the stars that were added since, whoever added them."""
        self._merged = merged_stars(connection)
        newest = int(self.ids[-1]) if len(self.ids) else 0
        columns = (
            Star.id, Star.ra_deg, Star.dec_deg, Star.pm_ra_mas_yr, Star.pm_dec_mas_yr, Star.parallax_mas,
            Star.radial_velocity_km_s,
        )  # fmt: skip
        found = connection.execute(select(*columns).where(Star.id > newest).order_by(Star.id)).all()
        if not found:
            return
        start = len(self.ids)
        self.ids = np.concatenate([self.ids, np.array([row[0] for row in found], dtype=np.int64)])
        self._place = np.concatenate([self._place, np.array([row[1:] for row in found], dtype=float)])
        rows = np.arange(start, len(self.ids))
        # Small trees are melted into the one before, so that there are never more than a few.
        while self._trees and len(self._trees[-1].rows) <= 2 * len(rows):
            rows = np.concatenate([self._trees.pop().rows, rows])
        self._trees.append(_Tree(rows, unit_vectors(*self._at(rows, np.full(len(rows), self.epoch_yr)))))

    def _at(self, rows: NDArray[np.int64], epochs_yr: Floats) -> tuple[Floats, Floats]:
        """Where some stars are at given times; those without proper motion stay where they are."""
        ra, dec, *motion = self._place[rows].T
        if not len(rows):
            return ra, dec
        return move_each(ra, dec, motion, _EPOCH, epochs_yr)

    def match(self, connection: Connection, rows: Rows, epochs_yr: Floats) -> Match:
        """Which star each row is; rows with a reason already are left out.

        A name that the catalogue knows decides, if the star lies within `NAME_ARCSEC`; else the
        one star within `match_arcsec` at the row's epoch. Rows whose names belong to several
        stars, or that several stars are near to, are none.
        """
        reasons: dict[int, str] = {}
        star_ids = np.zeros(len(rows), dtype=np.int64)
        by_place = np.zeros(len(rows), dtype=bool)
        good = np.array([index for index in range(len(rows)) if index not in rows.reasons], dtype=np.int64)
        if not len(good):
            return Match(star_ids, by_place, reasons)
        for index, star_id in self._by_name(connection, rows, good, reasons).items():
            star_ids[index] = star_id
        named = np.flatnonzero(star_ids)
        there = self._at(np.searchsorted(self.ids, star_ids[named]), epochs_yr[named])
        ra, dec = rows.numbers["ra_deg"][named], rows.numbers["dec_deg"][named]
        away = 3600 * separation_deg(there[0], there[1], ra, dec)
        for at in np.flatnonzero(away > NAME_ARCSEC):
            index = int(named[at])
            reasons[index] = f"it bears a name of star {star_ids[index]}, which is {away[at]:.0f} arcsec away"
        near, apart = self._near(rows, good, epochs_yr)
        hits = apart <= self.match_arcsec
        for position in np.flatnonzero(hits.any(axis=1)):
            index = int(good[position])
            if index in reasons or star_ids[index]:
                continue
            stars = {self._root(star) for star in self.ids[near[position, hits[position]]].tolist()}
            if len(stars) > 1:
                ids = ", ".join(map(str, sorted(stars)))
                reasons[index] = f"stars {ids} are all within {self.match_arcsec:g} arcsec; give it a name"
            else:
                star_ids[index], by_place[index] = stars.pop(), True
        return Match(star_ids, by_place, reasons)

    def _root(self, star_id: int) -> int:
        """The entry that stands for a star."""
        return self._merged.get(star_id, star_id)

    def neighbours(self, star_ids: NDArray[np.int64], within_arcsec: float) -> list[tuple[int, int, float]]:
        """Pairs of some stars with any others near them at epoch 2000: ids and separation. [arcsec]"""
        rows = np.searchsorted(self.ids, star_ids)
        vectors = unit_vectors(*self._at(rows, np.full(len(rows), self.epoch_yr)))
        years = abs(self.epoch_yr - _EPOCH)
        reach = 2 * np.sin(np.radians((within_arcsec + 2 * years) / 3600) / 2)
        pairs = [
            (int(row), int(tree.rows[other]))
            for tree in self._trees
            for row, others in zip(rows, tree.tree.query_ball_point(vectors, reach), strict=True)
            for other in others
            if tree.rows[other] != row
        ]
        if not pairs:
            return []
        one, other = np.array(pairs).T
        here, there = self._place[one], self._place[other]
        apart = 3600 * separation_deg(here[:, 0], here[:, 1], there[:, 0], there[:, 1])
        return [
            (int(self.ids[a]), int(self.ids[b]), round(float(away), 3))
            for a, b, away in zip(one, other, apart, strict=True)
            if away <= within_arcsec
        ]

    def _by_name(
        self, connection: Connection, rows: Rows, good: NDArray[np.int64], reasons: dict[int, str]
    ) -> dict[int, int]:
        keys = {index: rows.keyed[index] for index in good.tolist()}
        bearers = known_keys(connection, sorted({key for found in keys.values() for key in found}))
        found: dict[int, int] = {}
        for index, own in keys.items():
            stars = {self._root(star) for key in own for star in bearers.get(key, ())}
            if len(stars) == 1:
                found[index] = stars.pop()
            elif stars:
                reasons[index] = f"its names belong to stars {', '.join(map(str, sorted(stars)))}"
        return found

    def _near(self, rows: Rows, good: NDArray[np.int64], epochs_yr: Floats) -> tuple[NDArray[np.int64], Floats]:
        """The nearest stars of each row, and their distances at its epoch; infinite where none. [arcsec]"""
        ra, dec = rows.numbers["ra_deg"][good], rows.numbers["dec_deg"][good]
        found = np.zeros((len(good), 0), dtype=np.int64)
        vectors, limit_deg = unit_vectors(ra, dec), self.match_arcsec / 3600
        years = np.abs(epochs_yr[good] - self.epoch_yr).max(initial=0.0)
        reach = 2 * np.sin(np.radians(limit_deg + years * 10.4 / 3600) / 2)  # 10.4 arcsec a year: the fastest
        for tree in self._trees:
            _, nearest = tree.tree.query(vectors, k=_NEIGHBOURS, distance_upper_bound=reach)
            missing = nearest == len(tree.rows)
            stars = np.where(missing, -1, tree.rows[np.where(missing, 0, nearest)])
            found = np.concatenate([found, stars], axis=1)
        apart = np.full(found.shape, np.inf)
        which, column = np.nonzero(found >= 0)
        if len(which):
            stars = found[which, column]
            there = self._at(stars, epochs_yr[good][which])
            apart[which, column] = 3600 * separation_deg(there[0], there[1], ra[which], dec[which])
            # A star whose motion the catalogue does not know: bring the row back to the star's epoch.
            still = np.isnan(self._place[stars, 2])
            if still.any() and "pm_ra_mas_yr" in rows.numbers:
                back = good[which[still]]
                nothing = np.full(len(back), np.nan)
                motion = [
                    rows.number("pm_ra_mas_yr")[back],
                    rows.number("pm_dec_mas_yr")[back],
                    nothing,
                    nothing,
                ]
                moved = move_each(ra[which[still]], dec[which[still]], motion, epochs_yr[back], _EPOCH)
                place = self._place[stars[still]]
                own = 3600 * separation_deg(place[:, 0], place[:, 1], moved[0], moved[1])
                apart[which[still], column[still]] = np.minimum(apart[which[still], column[still]], own)
        return found, apart


def known_keys(connection: Connection, keys: Sequence[str]) -> dict[str, set[int]]:
    """Which stars bear names of these keys; short keys, which say less than a name, do not count."""
    found: dict[str, set[int]] = {}
    if connection.dialect.name == "postgresql":
        statement: str = "SELECT key, star_id FROM identifier WHERE NOT short AND key = ANY(%s)"
        given: Any = (list(keys),)
    else:
        statement = (
            "SELECT key, star_id FROM identifier WHERE NOT short AND key IN (SELECT value FROM json_each(?))"
        )
        given = (json.dumps(list(keys)),)
    for key, star_id in connection.exec_driver_sql(statement, given):
        found.setdefault(key, set()).add(star_id)
    return found
