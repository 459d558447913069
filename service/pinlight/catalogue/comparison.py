"""Whether an edition is what its hash says, and what differs between two."""

import json
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.catalogue.editions import MANIFEST, content_hash
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.ranking.columns import StarColumns, flag_words

__all__ = ["check_edition", "compare_editions"]


def check_edition(folder: Path, name: str) -> dict[str, Any]:
    """Whether an edition's files hold what its name, the beginning of their hash, says.

    Returns
    -------
    verdict : dict
        `name`, `sound`, `hash` as computed now (None where files are missing) and `problem`.
    """
    place = folder / name
    verdict: dict[str, Any] = {"name": name, "sound": False, "hash": None, "problem": None}
    try:
        manifest = json.loads((place / MANIFEST).read_text(encoding="utf-8"))
        columns = {path.stem: np.load(path, mmap_mode="r") for path in sorted(place.glob("*.npy"))}
        facts = {key: manifest[key] for key in ("relations", "relation_sets", "stars")}
    except (OSError, KeyError, ValueError) as error:
        return verdict | {"problem": f"its files are missing or damaged ({error})"}
    found = content_hash(columns, facts)
    if found != manifest["hash"] or not found.startswith(name):
        return verdict | {"hash": found, "problem": f"its files have the hash {found[:12]}"}
    return verdict | {"hash": found, "sound": True}


def compare_editions(
    one: StarColumns,
    other: StarColumns,
    standings: tuple[dict[int, str], dict[int, str]],
    names: dict[int, str],
    most: int = 20,
) -> dict[str, Any]:
    """What differs between two editions.

    Parameters
    ----------
    one, other : StarColumns
    standings : two mappings
        Star id -> the standing that counted when each edition was frozen.
    names : mapping
        Of the stars in `standings`.
    most : int
        How many stars to name of each kind.

    Returns
    -------
    differences : dict
        For `added`, `removed`, `changed` (any catalogued value), `diameters` and `standings` a
        `count` and `stars`, the first of them with their `values`, before and after.
    """
    common, at_one, at_other = np.intersect1d(one.ids, other.ids, return_indices=True)

    def named(ids: NDArray[Any], columns: StarColumns) -> dict[str, Any]:
        rows = np.flatnonzero(np.isin(columns.ids, ids))
        stars = [{"star_id": int(columns.ids[row]), "name": columns.names[row].decode()} for row in rows[:most]]
        return {"count": len(rows), "stars": stars}

    def differing(pairs: dict[str, tuple[NDArray[Any], NDArray[Any]]]) -> dict[str, Any]:
        unequal = {}
        for name, (before, after) in pairs.items():
            old, new = np.asarray(before)[at_one], np.asarray(after)[at_other]
            both_nan = (old != old) & (new != new)
            unequal[name] = (old, new, (old != new) & ~both_nan)
        rows = np.flatnonzero(np.any([which for _, _, which in unequal.values()], axis=0))
        return {
            "count": len(rows),
            "stars": [
                {
                    "star_id": int(common[row]),
                    "name": other.names[at_other[row]].decode(),
                    "values": {
                        name: [_readable(old[row]), _readable(new[row])]
                        for name, (old, new, which) in unequal.items()
                        if which[row]
                    },
                }
                for row in rows[:most]
            ],
        }

    plain = (
        "names", "ra_deg", "dec_deg", "pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas", "radial_velocity_km_s",
        "spectral_types", "flags",
    )  # fmt: skip
    catalogued = {name: (getattr(one, name), getattr(other, name)) for name in plain}
    for band in CATALOGUE_BANDS:
        catalogued[band] = (one.magnitudes[band], other.magnitudes[band])
        catalogued[f"{band}_error"] = (one.magnitude_errors[band], other.magnitude_errors[band])
    diameters = ("diameter_mas", "own_error_mas", "shared_error_mas")
    before, after = standings
    judged = sorted(star for star in {*before, *after} if before.get(star) != after.get(star))
    return {
        "one": one.edition,
        "other": other.edition,
        "added": named(np.setdiff1d(other.ids, one.ids), other),
        "removed": named(np.setdiff1d(one.ids, other.ids), one),
        "changed": differing(catalogued),
        "diameters": differing({name: (getattr(one, name), getattr(other, name)) for name in diameters}),
        "standings": {
            "count": len(judged),
            "stars": [
                {
                    "star_id": star,
                    "name": names[star],
                    "values": {"standing": [before.get(star), after.get(star)]},
                }
                for star in judged[:most]
            ],
        },
    }


def _readable(value: Any) -> Any:
    """A column's value for JSON: text, a number, flag words, or None where unknown."""
    if isinstance(value, bytes):
        return value.decode()
    if isinstance(value, np.unsignedinteger):
        return " ".join(flag_words(int(value)))
    return None if value != value else round(float(value), 6)
