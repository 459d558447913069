"""Which magnitude of several counts, and the diameters that follow from them."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, select

from pinlight.catalogue.changes import Changing
from pinlight.catalogue.database import bulk_insert, rows_in
from pinlight.catalogue.diameters import diameter_rows
from pinlight.catalogue.standings import must_exist
from pinlight.catalogue.tables import Diameter, Magnitude, Star
from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import RelationSet, load_relations
from pinlight.photometry.bands import BANDS
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.sky.positions import galactic_latitude_deg

__all__ = [
    "NEIGHBOUR_ARCSEC",
    "UNUSABLE",
    "first_diameters",
    "merged_stars",
    "or_none",
    "preferred",
    "renew_diameters",
    "root_of",
]

Floats = NDArray[np.float64]

# Stars this near to each other are listed as neighbours; the widest fields of cameras are smaller. (ours)
NEIGHBOUR_ARCSEC = 60.0
# Quality letters of magnitudes that are no measurements: of 2MASS (Skrutskie et al. 2006, AJ 131, 1163) and
# AllWISE (Cutri et al. 2013), from memory: upper limits, failed fits, and no detection.
UNUSABLE = frozenset("EFUXZ")


def or_none(values: Floats) -> list[float | None]:
    """An array as a list with None for NaN."""
    return [None if value != value else value for value in values.tolist()]  # NaN is not itself


def merged_stars(connection: Connection) -> dict[int, int]:
    """Entries that another stands for, and which."""
    rows = connection.execute(select(Star.id, Star.merged_into).where(Star.merged_into.is_not(None)))
    return {row.id: row.merged_into for row in rows}


def root_of(connection: Connection, star_id: int) -> int:
    """The entry that stands for a star: itself, unless it is part of another.

    Raises
    ------
    NotFoundError
        If there is no such star.
    """
    must_exist(connection, star_id)
    merged = connection.execute(select(Star.merged_into).where(Star.id == star_id)).scalar()
    return star_id if merged is None else int(merged)


def preferred(rows: Iterable[Any], merged: Mapping[int, int] | None = None) -> dict[tuple[int, str], Any]:
    """Of each star's magnitudes in a band the one that counts.

    A keeper's choice comes first. Else letters that say it is no measurement leave it out;
    a magnitude that is not saturated goes before one that is (brighter than the band's limit,
    its error assumed), then a better letter, then the smaller error, then the older source.

    Parameters
    ----------
    rows : records with star_id, band, value, error, error_assumed, quality, chosen, source_id
    merged : mapping, optional
        Of `merged_stars`: magnitudes of an entry count for the one that stands for it.

    Returns
    -------
    best : dict
        (star id, band) -> row.
    """
    best: dict[tuple[int, str], Any] = {}
    rank: dict[tuple[int, str], Any] = {}
    for row in rows:
        quality = row.quality[:1].upper()
        if quality in UNUSABLE and not row.chosen:
            continue
        key = (merged.get(row.star_id, row.star_id) if merged else row.star_id, row.band)
        if key not in best:
            best[key] = row
            continue
        if key not in rank:
            rank[key] = _rank(best[key])
        mine = _rank(row)
        if mine < rank[key]:
            best[key], rank[key] = row, mine
    return best


def _rank(row: Any) -> tuple[Any, ...]:
    steps = BANDS[row.band].saturation if row.band in BANDS else ()
    saturated = bool(steps) and row.error_assumed and row.value < steps[-1][0]
    return (
        not row.chosen,
        saturated,
        row.quality[:1].upper() or "A",
        row.error,
        row.error_assumed,
        row.source_id,
    )


def _photometry(connection: Connection, star_ids: Sequence[int]) -> StarPhotometry:
    """What a prediction needs of some stars, in the order of their ids."""
    place = {star_id: index for index, star_id in enumerate(star_ids)}
    columns = (Star.id, Star.ra_deg, Star.dec_deg, Star.parallax_mas, Star.spectral_type)
    found = {row.id: row for row in rows_in(connection, select(*columns), Star.id, star_ids)}
    stars = [found[star_id] for star_id in star_ids]
    magnitudes = np.full((len(star_ids), len(CATALOGUE_BANDS)), np.nan)
    errors = magnitudes.copy()
    merged = {child: star_id for child, star_id in merged_stars(connection).items() if star_id in place}
    query, every = select(Magnitude.__table__), [*star_ids, *merged]
    for (star_id, band), row in preferred(rows_in(connection, query, Magnitude.star_id, every), merged).items():
        if band in CATALOGUE_BANDS:
            at = place[star_id], CATALOGUE_BANDS.index(band)
            # An error that was assumed is left to the prediction, which knows more of its making.
            magnitudes[at], errors[at] = row.value, np.nan if row.error_assumed else row.error
    ra, dec = (np.array([getattr(star, name) for star in stars], dtype=float) for name in ("ra_deg", "dec_deg"))
    return StarPhotometry.of(
        CATALOGUE_BANDS,
        magnitudes,
        errors,
        [star.spectral_type for star in stars],
        np.array([star.parallax_mas for star in stars], dtype=float),
        galactic_latitude_deg(ra, dec),
    )


def first_diameters(change: Changing, star_ids: Sequence[int], photometry: StarPhotometry) -> None:
    """Predict the diameters of stars that have none yet."""
    rows = diameter_rows(predict_diameters(photometry, load_relations()), star_ids)
    change_id = change.id
    bulk_insert(change.connection, Diameter, (row | {"change_id": change_id} for row in rows))


def renew_diameters(change: Changing, star_ids: Iterable[int], relation_set: RelationSet | None = None) -> int:
    """Predict the diameters of some stars anew from the magnitudes that count.

    Diameters that they had and that change are kept in the log. Without a relation set the shipped
    one is used.

    Returns
    -------
    count : int
        How many rows were added or changed.
    """
    ids = sorted(set(star_ids))
    if not ids:
        return 0
    photometry = _photometry(change.connection, ids)
    diameters = predict_diameters(photometry, relation_set or load_relations())
    rows = list(diameter_rows(diameters, ids))
    query = select(Diameter.__table__)
    known = {row.star_id: row._mapping for row in rows_in(change.connection, query, Diameter.star_id, ids)}
    fresh = [row | {"change_id": change.id} for row in rows if row["star_id"] not in known]
    bulk_insert(change.connection, Diameter, fresh)
    old = [(known[row["star_id"]], row) for row in rows if row["star_id"] in known]
    return len(fresh) + change.overwrite(Diameter, old)
