"""Which columns of a table mean what: found by name, UCD and unit, or told; and their units."""

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.catalogue.names import name_key
from pinlight.catalogue.tablefile import Chunk, Column
from pinlight.errors import InputError
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.ranking.columns import FLAGS

__all__ = [
    "CANONICAL",
    "Canonical",
    "ColumnMap",
    "Mapped",
    "Rows",
    "check_zero_points",
    "find_columns",
    "read_rows",
]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Canonical:
    """A column that the catalogue takes: its unit, the names and UCDs it is known by."""

    unit: str
    names: tuple[str, ...]
    ucds: tuple[str, ...] = ()


def _photometry(band: str, letters: str, region: str) -> dict[str, Canonical]:
    names = [f"{one}{end}" for one in letters.split() for end in ("", "mag", "_m")]
    patterns = "e_{}mag e_{} {}_error {}_err {}mag_error err_{} {}_mag_error {}_msigcom {}_cmsig".split()
    errors = [pattern.format(one) for one in letters.split() for pattern in patterns]
    letter = [f"{one}_{end}" for one in letters.split() for end in ("quality", "qual", "flag")]
    return {
        band: Canonical("mag", tuple(names), (f"phot.mag;em.{region}",)),
        f"{band}_error": Canonical("mag", tuple(errors), (f"stat.error;phot.mag;em.{region}",)),
        f"{band}_quality": Canonical("", tuple(letter)),
    }


# Names as tables of the trade have them; UCDs of the IVOA's list (UCD1+, version 1.5).
CANONICAL: dict[str, Canonical] = {
    "name": Canonical("", ("name", "main_id", "star", "object", "designation"), ("meta.id;meta.main",)),
    "identifiers": Canonical("", ("identifiers", "ids", "names", "aliases")),
    "hd": Canonical("", ("hd", "hd_number")),
    "hip": Canonical("", ("hip", "hip_number")),
    "hr": Canonical("", ("hr", "hr_number")),
    "tyc": Canonical("", ("tyc", "tycho", "tyc2")),
    "gaia_dr3": Canonical("", ("gaia_dr3", "gaiadr3", "source_id", "dr3name")),
    "ra_deg": Canonical(
        "deg", ("ra_deg", "ra", "raj2000", "ra_j2000", "_ra", "_raj2000", "ra_icrs", "raicrs", "alpha"),
        ("pos.eq.ra;meta.main", "pos.eq.ra"),
    ),
    "dec_deg": Canonical(
        "deg", ("dec_deg", "dec", "dej2000", "decj2000", "dec_j2000", "_de", "_dej2000", "de_icrs", "dec_icrs"),
        ("pos.eq.dec;meta.main", "pos.eq.dec"),
    ),
    "epoch_yr": Canonical("yr", ("epoch_yr", "epoch", "ref_epoch"), ("time.epoch", "meta.ref;time.epoch")),
    "pm_ra_mas_yr": Canonical(
        "mas/yr", ("pm_ra_mas_yr", "pmra", "pm_ra", "pmra_cosdec"), ("pos.pm;pos.eq.ra",)
    ),
    "pm_dec_mas_yr": Canonical("mas/yr", ("pm_dec_mas_yr", "pmdec", "pmde", "pm_dec"), ("pos.pm;pos.eq.dec",)),
    "parallax_mas": Canonical(
        "mas", ("parallax_mas", "parallax", "plx"), ("pos.parallax.trig", "pos.parallax")
    ),
    "radial_velocity_km_s": Canonical(
        "km/s", ("radial_velocity_km_s", "radial_velocity", "rv", "hrv"),
        ("spect.dopplerveloc", "spect.dopplerveloc.opt", "phys.veloc;pos.heliocentric"),
    ),
    "spectral_type": Canonical("", ("spectral_type", "sp_type", "sptype", "spectype"), ("src.sptype",)),
    "flags": Canonical("", ("flags",)),
    "separation_arcsec": Canonical("arcsec", ("separation_arcsec", "sep", "rho"), ("pos.angdistance",)),
    "delta_v_mag": Canonical("mag", ("delta_v_mag", "dmag_v", "deltav")),
    "delta_ks_mag": Canonical("mag", ("delta_ks_mag", "dmag_k", "deltak")),
    **_photometry("B", "b", "opt.b"),
    **_photometry("V", "v", "opt.v"),
    **_photometry("J", "j", "ir.j"),
    **_photometry("H", "h", "ir.h"),
    **_photometry("Ks", "ks k", "ir.k"),
}  # fmt: skip
_TEXTS = frozenset(
    {"name", "identifiers", "hd", "hip", "hr", "tyc", "gaia_dr3", "spectral_type", "flags"}
    | {f"{band}_quality" for band in CATALOGUE_BANDS}
)
_NUMBERED = {"hd": "HD", "hip": "HIP", "hr": "HR", "tyc": "TYC", "gaia_dr3": "Gaia DR3"}
_ENDINGS = {
    "_mas_yr": "mas/yr", "_arcsec_yr": "arcsec/yr", "_deg": "deg", "_rad": "rad", "_hours": "hourangle",
    "_mas": "mas", "_arcsec": "arcsec", "_km_s": "km/s", "_m_s": "m/s", "_jy": "Jy",
}  # fmt: skip
_MISSING = frozenset({"", "nan", "null", "none", "n/a", "na", "--", "-", "..."})
_LONGEST = 200


@dataclass(frozen=True)
class Mapped:
    """One column of the file and what it is taken for; `how` says by what it was found."""

    canonical: str
    column: str
    unit: str
    how: str


@dataclass(frozen=True)
class ColumnMap:
    """All columns that are taken, and what else a reading needs."""

    columns: dict[str, Mapped]
    epoch_yr: float = 2000.0
    zero_points_jy: Mapping[str, float] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """Ready for JSON, and to be hashed."""
        return {
            "columns": {
                key: {"column": one.column, "unit": one.unit, "how": one.how}
                for key, one in self.columns.items()
            },
            "epoch_yr": self.epoch_yr,
            "zero_points_jy": dict(sorted(self.zero_points_jy.items())),
        }


def _folded(name: str) -> str:
    return re.sub(r"[^a-z0-9]", "", name.lower())


def find_columns(
    columns: Sequence[Column],
    told: Mapping[str, str],
    epoch_yr: float = 2000.0,
    zero_points_jy: Mapping[str, float] | None = None,
) -> ColumnMap:
    """What each column of a table means.

    Parameters
    ----------
    columns : list of Column
    told : mapping
        Canonical name -> column, which goes before all that is found; a column of '' leaves it out.
    epoch_yr : float
        Of the positions, where no column has it.
    zero_points_jy : mapping, optional
        Band -> the flux of magnitude 0, for columns in Jy.

    Raises
    ------
    InputError
        If a name is unknown, two columns could be the same, a unit does not fit, or there is no
        position.
    """
    by_name = {column.name: column for column in columns}
    found: dict[str, Mapped] = {}
    for key, name in told.items():
        if key not in CANONICAL:
            raise InputError(f"map has {key!r}; it may be one of {', '.join(CANONICAL)}")
        if name and name not in by_name:
            raise InputError(f"map says {key}={name}, but the columns are {', '.join(by_name)}")
    for key, wanted in CANONICAL.items():
        if key in told:
            column = by_name.get(told[key])
            how = "told"
        else:
            column, how = _search(columns, key, wanted, set(told.values()))
        if column is not None:
            found[key] = Mapped(key, column.name, _unit(column, key, wanted, zero_points_jy or {}), how)
    for key in ("ra_deg", "dec_deg"):
        if key not in found:
            raise InputError(f"no column is {key}; say --map {key}=COLUMN, one of {', '.join(by_name)}")
    if not 1800 <= epoch_yr <= 2200:
        raise InputError(f"epoch is {epoch_yr:g}; write a year such as 2016.0")
    return ColumnMap(found, epoch_yr, dict(zero_points_jy or {}))


def _search(
    columns: Sequence[Column], key: str, wanted: Canonical, taken: set[str]
) -> tuple[Column | None, str]:
    free = [column for column in columns if column.name not in taken]
    names = [_folded(key), *map(_folded, wanted.names)]
    for name in dict.fromkeys(names):
        same = [column for column in free if _folded(column.name) == name]
        if len(same) > 1:
            raise InputError(
                f"columns {' and '.join(one.name for one in same)} may both be {key}; say --map {key}=COLUMN"
            )
        if same:
            return same[0], "name"
    for ucd in wanted.ucds:
        same = [column for column in free if (column.ucd or "").lower().replace(" ", "") == ucd]
        if len(same) == 1:  # several of one kind (two proper motions, say) tell nothing
            return same[0], "UCD"
    return None, ""


def _unit(column: Column, key: str, wanted: Canonical, zero_points_jy: Mapping[str, float]) -> str:
    """The unit to read a column in: its own if it has one, else what its name ends in, else the usual."""
    if not wanted.unit:
        return ""
    given = column.unit
    if given is None:
        folded = column.name.lower()
        given = next((unit for end, unit in _ENDINGS.items() if folded.endswith(end)), wanted.unit)
    if key == "ra_deg" and given in ("h", "hr", "hour", "hours", '"h:m:s"', "h:m:s"):
        return "hourangle"
    if given.strip('"') in ("h:m:s", "d:m:s"):
        return wanted.unit
    _factor(given, wanted.unit, column.name, key, zero_points_jy)
    return given


def _factor(given: str, wanted: str, name: str, key: str, zero_points_jy: Mapping[str, float]) -> float:
    """How many of `wanted` one of `given` is; of a flux, how many Jy."""
    from astropy import units

    if given == wanted:
        return 1.0
    try:
        unit = units.Unit(given)
        if wanted == "mag" and unit.is_equivalent("Jy"):
            band = key.removesuffix("_error")
            if band not in zero_points_jy:
                raise InputError(f"{name} is in {given}; say --zero-point {band}=JY, the flux of magnitude 0")
            return float(unit.to("Jy"))
        return float(unit.to(wanted))
    except (ValueError, TypeError, units.UnitConversionError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"{name} is in {given!r}, which is no unit of {key} ({wanted})") from error


@dataclass
class Rows:
    """Rows ready for the catalogue: arrays of shape (N,), texts as lists of N.

    `names` has each row's names, the first to be shown; `keyed` the keys they are compared by;
    `reasons` row -> why it is refused.
    Magnitudes, errors and qualities are by band, NaN or '' where missing.
    """

    lines: Sequence[int]
    names: list[list[str]]
    keyed: list[dict[str, str]]
    numbers: dict[str, Floats]
    texts: dict[str, list[str]]
    reasons: dict[int, str]

    def __len__(self) -> int:
        return len(self.lines)

    def number(self, key: str) -> Floats:
        """A column of numbers, NaN throughout where the file has none."""
        if key not in self.numbers:
            self.numbers[key] = np.full(len(self), np.nan)
        return self.numbers[key]


def read_rows(chunk: Chunk, mapping: ColumnMap) -> Rows:
    """A chunk's rows in the catalogue's units; what cannot be is told row by row."""
    reasons = dict(chunk.bad)
    numbers: dict[str, Floats] = {}
    texts: dict[str, list[str]] = {}
    for key, mapped in mapping.columns.items():
        values = chunk.values[mapped.column]
        if key in _TEXTS:
            texts[key] = [_text(value) for value in values]
            for index, value in enumerate(texts[key]):
                if len(value) > _LONGEST and key != "identifiers":
                    reasons.setdefault(
                        index, f"{mapped.column} has {len(value)} letters; {_LONGEST} are the most"
                    )
        else:
            numbers[key] = _numbers(values, mapped, mapping, reasons)
    _convert_fluxes(numbers, mapping)
    _check(numbers, texts, mapping, reasons)
    names = _names(texts, len(chunk.lines))
    keyed = [{name_key(name): name for name in reversed(found)} for found in names]
    for index, keys in enumerate(keyed):
        if "" in keys:
            reasons.setdefault(index, f"{keys['']!r} is no name of a star")
    return Rows(chunk.lines, names, keyed, numbers, texts, reasons)


def _text(value: Any) -> str:
    if value is None or value != value:
        return ""
    if isinstance(value, float) and value.is_integer():
        value = int(value)
    text = " ".join(str(value).replace("\0", " ").split())
    return "" if text.lower() in _MISSING else text


def _numbers(values: Sequence[Any], mapped: Mapped, mapping: ColumnMap, reasons: dict[int, str]) -> Floats:
    try:
        array = np.array([np.nan if value is None or value == "" else float(value) for value in values])
    except (ValueError, TypeError):
        array = np.full(len(values), np.nan)
        for index, value in enumerate(values):
            text = _text(value)
            if not text:
                continue
            try:
                array[index] = float(text)
            except ValueError:
                try:
                    array[index] = _sexagesimal(text, mapped)
                except ValueError:
                    reasons.setdefault(index, f"{mapped.column} is {text[:40]!r}, which is no number")
    infinite = np.isinf(array)
    for at in np.flatnonzero(infinite):
        reasons.setdefault(int(at), f"{mapped.column} is infinite")
    array[infinite] = np.nan
    if mapped.unit != CANONICAL[mapped.canonical].unit:
        wanted = CANONICAL[mapped.canonical].unit
        array = array * _factor(mapped.unit, wanted, mapped.column, mapped.canonical, mapping.zero_points_jy)
    return array


def _sexagesimal(text: str, mapped: Mapped) -> float:
    """Degrees of a sexagesimal angle, as a number in the column's own unit."""
    if mapped.canonical not in ("ra_deg", "dec_deg"):
        raise ValueError(text)
    parts = [float(part) for part in re.split(r"[:\s]+|[hdms°'\"]+", text.strip("hdms°'\"")) if part]
    if len(parts) not in (2, 3) or any(part < 0 or part >= 60 for part in parts[1:]):
        raise ValueError(text)
    degrees = abs(parts[0]) + parts[1] / 60 + (parts[2] / 3600 if len(parts) == 3 else 0.0)
    degrees = (15 * degrees if mapped.canonical == "ra_deg" else degrees) * (-1 if text.startswith("-") else 1)
    return degrees / _factor(mapped.unit, "deg", mapped.column, mapped.canonical, {})


def _convert_fluxes(numbers: dict[str, Floats], mapping: ColumnMap) -> None:
    for band, zero_point in mapping.zero_points_jy.items():
        mapped, error = mapping.columns.get(band), mapping.columns.get(f"{band}_error")
        if mapped is None or not _is_flux(mapped.unit):
            continue
        flux = numbers[band]
        with np.errstate(divide="ignore", invalid="ignore"):
            if error is not None and _is_flux(error.unit):
                # d mag = 2.5 / ln 10 * d flux / flux
                numbers[f"{band}_error"] = 2.5 / np.log(10) * numbers[f"{band}_error"] / flux
            numbers[band] = np.where(flux > 0, -2.5 * np.log10(flux / zero_point), np.nan)


def _is_flux(unit: str) -> bool:
    from astropy import units

    return unit != "mag" and units.Unit(unit).is_equivalent("Jy")


def _check(
    numbers: dict[str, Floats], texts: dict[str, list[str]], mapping: ColumnMap, reasons: dict[int, str]
) -> None:
    def refuse(which: NDArray[np.bool_], key: str, may_be: str) -> None:
        for index in np.flatnonzero(which):
            value, name = numbers[key][index], mapping.columns[key].column
            told = f"{name} is missing" if np.isnan(value) else f"{name} is {value:g}; {may_be}"
            reasons.setdefault(int(index), told)

    ra, dec = numbers["ra_deg"], numbers["dec_deg"]
    refuse(~((ra >= 0) & (ra < 360)), "ra_deg", "it must lie between 0 and 360 deg")
    refuse(~(np.abs(dec) <= 90), "dec_deg", "it must lie between -90 and 90 deg")
    for key, low, high in (
        *((band, -5.0, 30.0) for band in CATALOGUE_BANDS),
        *((f"{band}_error", 0.0, 10.0) for band in CATALOGUE_BANDS),
        ("epoch_yr", 1800.0, 2200.0),
        ("parallax_mas", -1000.0, 1000.0),
        ("pm_ra_mas_yr", -20_000.0, 20_000.0),
        ("pm_dec_mas_yr", -20_000.0, 20_000.0),
        ("radial_velocity_km_s", -2000.0, 2000.0),
        ("separation_arcsec", 0.0, 3600.0),
        ("delta_v_mag", -30.0, 30.0),
        ("delta_ks_mag", -30.0, 30.0),
    ):
        if key in numbers:
            values = numbers[key]
            outside = ~((values >= low) & (values <= high)) & ~np.isnan(values)
            refuse(outside, key, f"it must lie between {low:g} and {high:g}")
    for index, words in enumerate(texts.get("flags", ())):
        if unknown := [word for word in words.split() if word not in FLAGS]:
            reasons.setdefault(index, f"flags has {unknown[0]!r}, which is none of the catalogue's flags")


def _names(texts: dict[str, list[str]], count: int) -> list[list[str]]:
    names: list[list[str]] = [[] for _ in range(count)]
    for key in ("name", *_NUMBERED, "identifiers"):
        if key not in texts:
            continue
        for found, text in zip(names, texts[key], strict=True):
            if not text:
                continue
            if key == "identifiers":
                found += [one for part in re.split(r"[|;]", text) if (one := part.strip()[:_LONGEST])]
            elif key in _NUMBERED:
                bare = text.isdigit() or re.fullmatch(r"[\d-]+", text)
                found.append(f"{_NUMBERED[key]} {text}" if bare else text)
            else:
                found.append(text)
    return [list(dict.fromkeys(found)) for found in names]


def check_zero_points(given: Mapping[str, float]) -> None:
    """Raise InputError unless every band is known and every flux positive."""
    for band, flux in given.items():
        if band not in CATALOGUE_BANDS:
            raise InputError(f"zero-point has {band!r}; it may be one of {', '.join(CATALOGUE_BANDS)}")
        if not 0 < flux < 1e6:
            raise InputError(f"zero-point of {band} is {flux:g}; write the flux of magnitude 0 in Jy")
