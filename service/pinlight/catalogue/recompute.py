"""Diameters of a whole catalogue predicted anew when the relation set changes."""

from collections.abc import Callable

from sqlalchemy import ColumnElement, func, or_, select

from pinlight.catalogue.predicting import renew_diameters
from pinlight.catalogue.store import Catalogue
from pinlight.catalogue.tables import Diameter, Star
from pinlight.diameters.relations import RelationSet

__all__ = ["recompute_diameters"]

_BATCH = 5_000


def recompute_diameters(
    catalogue: Catalogue,
    relation_set: RelationSet,
    progress: Callable[[int, int], object] | None = None,
    batch: int = _BATCH,
) -> int:
    """Predict anew the diameters of all stars that another relation set, or none, was used for.

    Goes through the catalogue in batches, each a transaction and a change of its own: stopped at any
    point, the next call goes on from there. What stood there before is kept in the change log. Editions
    stay as they are; freeze one for rankings to see the new diameters.

    Parameters
    ----------
    catalogue : Catalogue
    relation_set : RelationSet
    progress : function of done and total
    batch : int
        Stars in one transaction.

    Returns
    -------
    count : int
        How many stars were predicted anew.

    Raises
    ------
    TokenError, NotAllowedError
        If the one who acts is no keeper.
    """
    old: ColumnElement[bool] = or_(Diameter.star_id.is_(None), Diameter.relation_set != relation_set.hash)
    of_stars = Star.__table__.outerjoin(Diameter.__table__, Diameter.star_id == Star.id)
    catalogue.person().require("keeper", "re-compute diameters")
    with catalogue.reading() as connection:
        total = int(connection.execute(select(func.count()).select_from(of_stars).where(old)).scalar_one())
    done = after = 0
    tell = progress or (lambda *_: None)
    tell(done, total)
    query = select(Star.id).select_from(of_stars).where(old).order_by(Star.id).limit(batch)
    detail = {"relation_set": relation_set.hash, "relations_file": relation_set.file or None}
    while True:
        with catalogue.changing("recompute", "keeper", "re-compute diameters", detail) as change:
            ids = list(change.connection.execute(query.where(Star.id > after)).scalars())
            renew_diameters(change, ids, relation_set)
        if not ids:
            return done
        done, after = done + len(ids), ids[-1]
        tell(done, max(total, done))
