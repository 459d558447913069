"""Editions: the catalogue's columns as memory-mapped NumPy files with a manifest."""

import hashlib
import json
import os
import shutil
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, insert, select

from pinlight.catalogue.changes import Changing
from pinlight.catalogue.database import many_rows
from pinlight.catalogue.predicting import merged_stars, preferred
from pinlight.catalogue.tables import Companion, Diameter, Edition, Magnitude, Star
from pinlight.diameters.limb_darkening import coefficients
from pinlight.diameters.oblateness import oblateness_bound
from pinlight.errors import CatalogueError
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.ranking.columns import StarColumns, flag_bits
from pinlight.sky.cells import CELL_COUNT, cell_centres

__all__ = ["MANIFEST", "content_hash", "open_edition", "record_edition", "write_edition"]

MANIFEST = "manifest.json"
_FORMAT = 1


def _column(rows: list[Any], index: int, kind: str = "f8") -> NDArray[Any]:
    """One column of database rows; NULL becomes NaN."""
    return np.array([np.nan if row[index] is None else row[index] for row in rows], dtype=kind)


def _read_columns(connection: Connection) -> tuple[dict[str, NDArray[Any]], dict[str, Any]]:
    """All arrays of an edition, rows sorted by cell and Ks, and what the manifest says of them."""
    star = select(
        Star.id, Star.name, Star.ra_deg, Star.dec_deg, Star.spectral_type, Star.flags, Star.cell,
        Star.pm_ra_mas_yr, Star.pm_dec_mas_yr, Star.parallax_mas, Star.radial_velocity_km_s,
    ).where(Star.merged_into.is_(None)).order_by(Star.id)  # fmt: skip
    rows: list[Any] = list(connection.execute(star))
    ids = _column(rows, 0, "i8")
    place = {int(star_id): index for index, star_id in enumerate(ids)}
    count = len(ids)
    merged = merged_stars(connection)
    columns: dict[str, NDArray[Any]] = {
        "ids": ids,
        "names": np.array([row[1].encode() for row in rows], dtype="S"),
        "ra_deg": _column(rows, 2),
        "dec_deg": _column(rows, 3),
        "spectral_types": np.array([row[4].encode() for row in rows], dtype="S"),
        "pm_ra_mas_yr": _column(rows, 7, "f4"),
        "pm_dec_mas_yr": _column(rows, 8, "f4"),
        "parallax_mas": _column(rows, 9, "f4"),
        "radial_velocity_km_s": _column(rows, 10, "f4"),
    }
    flags = np.array([flag_bits(row[5]) for row in rows], dtype=np.uint64)
    cells = _column(rows, 6, "i8")

    for band in CATALOGUE_BANDS:
        columns[f"magnitude_{band}"] = np.full(count, np.nan, dtype=np.float32)
        columns[f"magnitude_error_{band}"] = np.full(count, np.nan, dtype=np.float32)
    for (star_id, band), row in preferred(connection.execute(select(Magnitude.__table__)), merged).items():
        if band in CATALOGUE_BANDS:
            columns[f"magnitude_{band}"][place[star_id]] = row.value
            columns[f"magnitude_error_{band}"][place[star_id]] = row.error

    diameter = select(
        Diameter.star_id, Diameter.limb_darkened_mas, Diameter.own_error_mas, Diameter.shared_error_mas,
        Diameter.teff_k, Diameter.logg, Diameter.spectral_code, Diameter.discordant, Diameter.parts,
        Diameter.relation_set,
    ).order_by(Diameter.star_id)  # fmt: skip
    rows = [row for row in connection.execute(diameter) if row[0] not in merged]
    at = np.array([place[row[0]] for row in rows], dtype=np.int64)

    def spread(values: NDArray[Any], kind: str) -> NDArray[Any]:
        full = np.full((count, *values.shape[1:]), np.nan if kind.startswith("f") else 0, dtype=kind)
        full[at] = values
        return full

    columns["diameter_mas"] = spread(_column(rows, 1), "f4")
    columns["own_error_mas"] = spread(_column(rows, 2), "f4")
    columns["shared_error_mas"] = spread(_column(rows, 3), "f4")
    columns["limb_darkening"] = spread(coefficients(_column(rows, 4), _column(rows, 5)).round(4), "f4")
    flags[at] |= np.where([row[7] for row in rows], np.uint64(flag_bits("discordant")), np.uint64(0))
    columns["flags"] = flags
    fast = (flags & np.uint64(flag_bits("fast_rotator"))) != 0
    code = spread(_column(rows, 6), "f8")
    columns["oblateness"] = oblateness_bound(code, fast).round(4).astype(np.float32)
    used = [list(json.loads(row[8])) for row in rows]
    relation_sets = sorted({row[9] for row in rows})
    relation_names = sorted({name for names in used for name in names})
    bit = {name: 1 << index for index, name in enumerate(relation_names)}
    columns["relations_used"] = spread(
        np.array([sum(bit[name] for name in names) for names in used], dtype=np.uint64), "u8"
    )

    # Bright stars first within a cell, so that the pages a ranking touches lie together.
    order = np.lexsort([ids, np.nan_to_num(columns["magnitude_Ks"], nan=99.0), cells])
    columns = {name: column[order] for name, column in columns.items()}
    row_of = np.empty(count, dtype=np.int64)
    row_of[order] = np.arange(count)
    columns["cell_starts"] = np.searchsorted(cells[order], np.arange(CELL_COUNT + 1)).astype(np.int64)
    columns["cell_centres"] = cell_centres().round(12)

    companion = select(
        Companion.star_id,
        Companion.separation_arcsec,
        Companion.delta_v_mag,
        Companion.delta_ks_mag,
        Companion.neighbour_id,
    ).order_by(Companion.star_id, Companion.separation_arcsec, Companion.id)
    # Of a neighbour that is another entry of the same star, or of one counted already, nothing is said.
    rows = [
        row
        for row in connection.execute(companion)
        if row[4] not in merged and (row[4] is None or merged.get(row[0]) != row[4])
    ]
    stars = [place[merged.get(row[0], row[0])] for row in rows]
    at = row_of[stars] if rows else np.empty(0, dtype=np.int64)
    by_row = np.argsort(at, kind="stable")
    columns["companion_rows"] = at[by_row]
    for index, name in ((1, "separation"), (2, "delta_V"), (3, "delta_Ks")):
        columns[f"companion_{name}"] = _column(rows, index, "f4")[by_row]
    return columns, {"relations": relation_names, "relation_sets": relation_sets, "stars": count}


def content_hash(columns: dict[str, NDArray[Any]], facts: dict[str, Any]) -> str:
    """The hash of an edition: of all its arrays, and of what its manifest says of relations and stars."""
    digest = hashlib.sha256(json.dumps([_FORMAT, facts], sort_keys=True).encode())
    for name in sorted(columns):
        column = np.ascontiguousarray(columns[name])
        digest.update(f"{name} {column.dtype.str} {column.shape}".encode())
        digest.update(column.tobytes())
    return digest.hexdigest()


def _is_whole(place: Path, columns: dict[str, NDArray[Any]]) -> bool:
    """Whether an edition's folder holds every file, each of the size that it should have."""
    try:
        if not (place / MANIFEST).is_file():
            return False
        return all((place / f"{key}.npy").stat().st_size > column.nbytes for key, column in columns.items())
    except OSError:
        return False


def write_edition(connection: Connection, folder: Path) -> tuple[str, dict[str, Any]]:
    """Freeze the catalogue into a sub-folder of `folder` named after its content.

    A reader sees the whole edition or none of it: the files are written aside and the folder
    is renamed when complete. Writing the same content again changes nothing.

    Returns
    -------
    name, facts
        The edition's name and its manifest.

    Raises
    ------
    CatalogueError
        If the folder cannot be written.
    """
    with many_rows():
        columns, facts = _read_columns(connection)
    full_hash = content_hash(columns, facts)
    name = full_hash[:12]
    manifest = {"format": _FORMAT, "name": name, "hash": full_hash, **facts}
    final = folder / name
    if _is_whole(final, columns):
        return name, manifest
    try:
        folder.mkdir(parents=True, exist_ok=True)
        aside = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=folder))
        try:
            for key, column in columns.items():
                np.save(aside / f"{key}.npy", column)
            (aside / MANIFEST).write_text(json.dumps(manifest, indent=1, sort_keys=True), encoding="utf-8")
            aside.chmod(0o755)
            if final.exists() and not _is_whole(final, columns):
                os.replace(final, aside.with_name(f"{aside.name}-damaged"))
            try:
                os.replace(aside, final)
            except OSError:
                if not _is_whole(final, columns):  # else another process made the same one first
                    raise
        finally:
            for left_over in (aside, aside.with_name(f"{aside.name}-damaged")):
                shutil.rmtree(left_over, ignore_errors=True)
    except OSError as error:
        raise CatalogueError(f"cannot write edition {final}: {error.strerror or error}") from error
    return name, manifest


def record_edition(change: Changing, name: str, facts: dict[str, Any], after: int) -> None:
    """Make an edition whose files are written known to the catalogue; `after` is the change it follows."""
    if change.connection.execute(select(Edition.name).where(Edition.name == name)).first():
        return
    change.connection.execute(
        insert(Edition).values(
            name=name,
            made_utc=change.made_utc,
            star_count=facts["stars"],
            relation_set=" ".join(facts["relation_sets"]),
            change_id=after or change.id,
        )
    )


def open_edition(folder: Path, name: str) -> StarColumns:
    """Map an edition into memory.

    Raises
    ------
    CatalogueError
        If its files are missing or were written by another format.
    """
    place = folder / name
    try:
        manifest = json.loads((place / MANIFEST).read_text(encoding="utf-8"))
        if manifest["format"] != _FORMAT:
            found = manifest["format"]
            raise CatalogueError(f"edition {place} has format {found}; this Pinlight reads {_FORMAT}")

        def column(key: str) -> NDArray[Any]:
            return np.load(place / f"{key}.npy", mmap_mode="r")

        return StarColumns(
            edition=name,
            ids=column("ids"),
            names=column("names"),
            spectral_types=column("spectral_types"),
            ra_deg=column("ra_deg"),
            dec_deg=column("dec_deg"),
            pm_ra_mas_yr=column("pm_ra_mas_yr"),
            pm_dec_mas_yr=column("pm_dec_mas_yr"),
            parallax_mas=column("parallax_mas"),
            radial_velocity_km_s=column("radial_velocity_km_s"),
            flags=column("flags"),
            magnitudes={band: column(f"magnitude_{band}") for band in CATALOGUE_BANDS},
            magnitude_errors={band: column(f"magnitude_error_{band}") for band in CATALOGUE_BANDS},
            diameter_mas=column("diameter_mas"),
            own_error_mas=column("own_error_mas"),
            shared_error_mas=column("shared_error_mas"),
            limb_darkening=column("limb_darkening"),
            relations_used=column("relations_used"),
            relation_names=tuple(manifest["relations"]),
            oblateness=column("oblateness"),
            companion_rows=column("companion_rows"),
            companion_separations_arcsec=column("companion_separation"),
            companion_deltas_mag={"V": column("companion_delta_V"), "Ks": column("companion_delta_Ks")},
            cell_starts=column("cell_starts"),
            cell_centres=column("cell_centres"),
        )
    except (OSError, KeyError, ValueError) as error:
        raise CatalogueError(f"edition {place} is missing or damaged ({error}); run 'pinlight init'") from error
