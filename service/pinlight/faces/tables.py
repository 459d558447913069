"""Tables for other tools: VOTable 1.4, ECSV and CSV, with units, UCDs and a coordinate system."""

import io
import json
import threading
import warnings
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pinlight.errors import InputError
from pinlight.ranking.columns import StarColumns, flag_words

if TYPE_CHECKING:
    from astropy.io.votable.tree import VOTableFile
    from astropy.table import Table

__all__ = ["CONTENT_TYPES", "FORMATS", "as_votable", "stars_table", "table_of", "votable_bytes", "write_table"]

CONTENT_TYPES = {
    "votable": "application/x-votable+xml",
    "ecsv": "application/x-ecsv; charset=utf-8",
    "csv": "text/csv; charset=utf-8",
}
FORMATS = ("json", *CONTENT_TYPES)

_WRITING = threading.Lock()  # warning filters belong to the whole process

# The last word of a name is its unit; here as VOUnit 1.0 writes it, which has no per cent.
_UNITS = {
    "_mas_yr": "mas/yr", "_km_s": "km/s", "_deg": "deg", "_arcsec": "arcsec", "_mas": "mas", "_um": "um",
    "_m": "m", "_mag": "mag", "_min": "min", "_ms": "ms", "_s": "s", "_k": "K",
}  # fmt: skip
# IVOA UCD1+ vocabulary (1.5) of the columns that have a word there.
_UCDS = {
    "star_id": "meta.id;meta.main", "name": "meta.id", "target": "meta.id", "rank": "meta.number",
    "ra": "pos.eq.ra;meta.main", "ra_deg": "pos.eq.ra;meta.main",
    "dec": "pos.eq.dec;meta.main", "dec_deg": "pos.eq.dec;meta.main",
    "separation": "pos.angDistance", "separation_deg": "pos.angDistance", "spectral_type": "src.spType",
    "limb_darkened_diameter": "phys.angSize;src", "limb_darkened_mas": "phys.angSize;src",
    "uniform_disk_diameter": "phys.angSize;src", "error_mas": "stat.error;phys.angSize",
    "own_error": "stat.error;phys.angSize", "own_error_mas": "stat.error;phys.angSize",
    "shared_error": "stat.error.sys;phys.angSize", "shared_error_mas": "stat.error.sys;phys.angSize",
    "calibration_error_percent": "stat.error", "flags": "meta.code",
    "standing": "meta.code.qual", "pm_ra_mas_yr": "pos.pm;pos.eq.ra", "pm_dec_mas_yr": "pos.pm;pos.eq.dec",
    "parallax_mas": "pos.parallax", "radial_velocity_km_s": "spect.dopplerVeloc",
    "start_utc": "time.start", "end_utc": "time.end", "edition": "meta.version",
}  # fmt: skip
_BAND_UCDS = {"B": "em.opt.B", "V": "em.opt.V", "J": "em.IR.J", "H": "em.IR.H", "Ks": "em.IR.K"}


def table_of(rows: Sequence[Mapping[str, Any]], meta: Mapping[str, Any] | None = None) -> "Table":
    """JSON rows as an astropy table: nested keys joined by ``_``, units from the names, blanks masked."""
    from astropy.table import MaskedColumn, Table

    flat = [_flat(row) for row in rows]
    table = Table(meta=dict(meta or {}))
    for name in dict.fromkeys(name for row in flat for name in row):
        values = [row.get(name) for row in flat]
        known = [value for value in values if value is not None]
        if all(isinstance(value, bool) for value in known):
            values = [None if value is None else str(value).lower() for value in values]
            known = [str(value).lower() for value in known]
        kind: type = str
        if known and all(isinstance(value, int | float) for value in known):
            kind = float if any(isinstance(value, float) for value in known) else int
        blank = {str: "", int: 0, float: np.nan}[kind]
        column = MaskedColumn(
            [blank if value is None else value for value in values],
            name=name,
            dtype=kind,
            mask=[value is None for value in values],
        )
        table.add_column(column if None in values else column.filled())
        table[name].unit = _unit(name) if kind is not str else None
    return table


def _flat(row: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    found: dict[str, Any] = {}
    for key, value in row.items():
        name = f"{prefix}{key}"
        if isinstance(value, Mapping):
            found |= _flat(value, f"{name}_")
        elif isinstance(value, list | tuple):
            plain = all(isinstance(one, str) for one in value)
            found[name] = " ".join(value) if plain else json.dumps(value, ensure_ascii=False)
        else:
            found[name] = value
    return found


def _unit(name: str) -> str | None:
    if name.startswith("magnitude"):
        return "mag"
    if name.endswith(("v2_min", "_per_mag")):  # a least V^2; a rate
        return None
    return next((unit for ending, unit in _UNITS.items() if name.endswith(ending)), None)


def stars_table(
    columns: StarColumns,
    rows: NDArray[np.int64],
    separations_deg: NDArray[np.float64] | None = None,
    verbosity: int = 2,
) -> "Table":
    """Stars of an edition as an astropy table; the higher the verbosity, 1 to 3, the more columns."""
    from astropy.table import Table

    table = Table(meta={"edition": columns.edition})
    # Names and types of the catalogue are ASCII but for the odd Greek letter, which has no place in `char`.
    table["star_id"] = columns.ids[rows].astype("S20")
    table["name"] = columns.names[rows].astype("S")
    table["ra_deg"] = np.asarray(columns.ra_deg[rows], float)
    table["dec_deg"] = np.asarray(columns.dec_deg[rows], float)
    if separations_deg is not None:
        table["separation_deg"] = separations_deg.round(7)
    if verbosity >= 2:
        table["spectral_type"] = columns.spectral_types[rows].astype("S")
        for band, values in columns.magnitudes.items():
            table[f"magnitude_{band}"] = np.asarray(values[rows], np.float32)
        table["limb_darkened_mas"] = np.asarray(columns.diameter_mas[rows], np.float32)
        table["own_error_mas"] = np.asarray(columns.own_error_mas[rows], np.float32)
        table["shared_error_mas"] = np.asarray(columns.shared_error_mas[rows], np.float32)
    if verbosity >= 3:
        for band, values in columns.magnitude_errors.items():
            table[f"magnitude_{band}_error"] = np.asarray(values[rows], np.float32)
        for name in ("pm_ra_mas_yr", "pm_dec_mas_yr", "parallax_mas", "radial_velocity_km_s"):
            table[name] = np.asarray(getattr(columns, name)[rows], np.float32)
        words = [" ".join(flag_words(int(bits))) for bits in columns.flags[rows]]
        table["flags"] = np.array(words, dtype="S" if words else "S1")
    for name in table.colnames:
        table[name].unit = _unit(name)
    return table


def as_votable(table: "Table", name: str, *, ucds: Mapping[str, str] | None = None) -> "VOTableFile":
    """A table as VOTable 1.4: one resource of results, ICRS positions, UCDs.

    `ucds` are used in place of those of the vocabulary.
    """
    from astropy.io.votable import from_table
    from astropy.io.votable.tree import CooSys, Info

    votable = from_table(table)
    votable.version = "1.4"
    resource = votable.resources[0]
    resource.type = "results"
    resource.name = name
    resource.coordinate_systems.append(CooSys(ID="ICRS", system="ICRS", epoch="J2000.0"))
    resource.infos.append(Info(name="QUERY_STATUS", value="OK"))
    for key, value in table.meta.items():
        text = value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
        resource.infos.append(Info(name=key, value=text))
    [drawn] = resource.tables
    drawn.name = name
    drawn.infos.clear()
    for field in drawn.fields:
        field.ucd = (ucds or {}).get(field.name) or _ucd(field.name)
        if field.name in ("ra", "dec", "ra_deg", "dec_deg"):
            field.ref = "ICRS"
    return votable


def _ucd(name: str) -> str | None:
    if name.startswith("magnitude_"):
        band, _, rest = name.removeprefix("magnitude_").removeprefix("s_").partition("_")
        if band in _BAND_UCDS:
            return (
                f"stat.error;phot.mag;{_BAND_UCDS[band]}" if rest == "error" else f"phot.mag;{_BAND_UCDS[band]}"
            )
    return _UCDS.get(name)


def votable_bytes(votable: "VOTableFile") -> bytes:
    """As text, rows as TABLEDATA, which every reader knows."""
    from astropy.io.votable.exceptions import W50

    buffer = io.BytesIO()
    with _WRITING, warnings.catch_warnings():
        # The writer knows no per cent sign, but writes it, and readers of VOTables show it.
        warnings.filterwarnings("ignore", "(?s).*Invalid unit string '%'", W50)
        votable.to_xml(buffer, tabledata_format="tabledata")
    return buffer.getvalue()


def write_table(table: "Table", kind: str, name: str) -> bytes:
    """A table as a file's content.

    Raises
    ------
    InputError
        If `kind` is no format.
    """
    if kind == "votable":
        return votable_bytes(as_votable(table, name))
    if kind not in CONTENT_TYPES:
        raise InputError(f"format is {kind!r}; it may be one of {', '.join(FORMATS)}")
    text = io.StringIO()
    table.write(text, format={"ecsv": "ascii.ecsv", "csv": "ascii.csv"}[kind])
    return text.getvalue().encode()
