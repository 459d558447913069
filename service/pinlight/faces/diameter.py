"""Diameters from magnitudes: of one star, or of a table of stars."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from pinlight.diameters.limb_darkening import uniform_disk_by_band
from pinlight.diameters.prediction import Diameters, StarPhotometry, predict_diameters
from pinlight.diameters.relations import RelationSet, load_relations
from pinlight.diameters.spectral import LUMINOSITY_GROUPS
from pinlight.errors import InputError
from pinlight.photometry.bands import band as band_of
from pinlight.photometry.bands import check_magnitude
from pinlight.photometry.systems import INPUT_BANDS
from pinlight.sky.positions import check_position, galactic_latitude_deg

__all__ = ["StarRow", "predict_diameter", "predict_rows", "read_stars"]

# A_V and its error at a place and parallax.
ExtinctionMap = Callable[[float, float, float], tuple[float, float]]

_NUMBERS = ("parallax_mas", "ra_deg", "dec_deg", "av_mag", "av_error_mag")


@dataclass(frozen=True)
class StarRow:
    """One star: magnitudes and their errors by band, and what else is known of it.

    Raises
    ------
    InputError
        If fewer than two bands are given or a value is impossible.
    """

    magnitudes: dict[str, float]
    errors: dict[str, float] = field(default_factory=dict)
    name: str = ""
    spectral_type: str = ""
    parallax_mas: float | None = None
    ra_deg: float | None = None
    dec_deg: float | None = None
    av_mag: float | None = None
    av_error_mag: float | None = None

    def __post_init__(self) -> None:
        for key, value in self.magnitudes.items():
            if key not in INPUT_BANDS:
                raise InputError(f"band is {key!r}; it may be one of {', '.join(INPUT_BANDS)}")
            check_magnitude(key, value)
        for key, value in self.errors.items():
            if not 0 < value < 5:
                raise InputError(f"{key}_error is {value:g}; it must be positive and below 5 mag")
            if key not in self.magnitudes:
                raise InputError(f"{key}_error is given without {key}")
        if len(self.magnitudes) < 2:
            raise InputError(f"{len(self.magnitudes)} magnitude is given; a colour takes at least two bands")
        if self.parallax_mas is not None and not 0 < self.parallax_mas < 1000:
            raise InputError(f"parallax_mas is {self.parallax_mas:g}; it must lie between 0 and 1000")
        for key, extinction in (("av_mag", self.av_mag), ("av_error_mag", self.av_error_mag)):
            if extinction is not None and not 0 <= extinction < 50:
                raise InputError(f"{key} is {extinction:g}; it must lie between 0 and 50")
        if (self.ra_deg is None) != (self.dec_deg is None):
            missing = "dec_deg" if self.dec_deg is None else "ra_deg"
            raise InputError(f"{missing} is missing; give both or neither")
        if self.ra_deg is not None and self.dec_deg is not None:
            check_position(self.ra_deg, self.dec_deg)

    @property
    def galactic_latitude_deg(self) -> float:
        """Where the extinction prior is asked; the pole for a star without a position."""
        if self.ra_deg is None or self.dec_deg is None:
            return 90.0
        return float(galactic_latitude_deg(self.ra_deg, self.dec_deg))


def predict_rows(
    rows: Sequence[StarRow],
    band: str = "Ks",
    relations: RelationSet | None = None,
    extinction_map: ExtinctionMap | None = None,
) -> list[dict[str, Any]]:
    """Diameters of many stars at once, ready for JSON.

    A magnitude without an error is taken to be the survey's: it gets its band's default error, and
    where 2MASS saturates the correction of its bias. Without a luminosity class, parallax and colour
    tell a dwarf from a giant. Without an extinction the prior is taken, or none where there is no
    parallax.

    Parameters
    ----------
    rows : sequence of StarRow
    band : str
        Where the uniform-disc diameter is wanted.
    relations : RelationSet, optional
        In place of those that Pinlight ships.
    extinction_map : function of ra_deg, dec_deg, parallax_mas, optional
        Gives A_V and its error where a star has none of its own, but a position and a parallax.

    Returns
    -------
    answers : list of dict
        ``diameter`` is None and ``reason`` says why where no relation applies.

    Raises
    ------
    InputError
        If `band` is unknown, or the map gives an impossible extinction.
    """
    band_of(band)
    if not rows:
        return []
    if extinction_map is not None:
        rows = [_with_map(row, extinction_map) for row in rows]
    bands = tuple(key for key in INPUT_BANDS if any(key in row.magnitudes for row in rows))

    def column(values: list[float | None]) -> Any:
        return np.array([np.nan if value is None else value for value in values], dtype=float)

    result = predict_diameters(
        StarPhotometry.of(
            bands,
            np.array([[row.magnitudes.get(key, np.nan) for key in bands] for row in rows]),
            np.array([[row.errors.get(key, np.nan) for key in bands] for row in rows]),
            [row.spectral_type for row in rows],
            column([row.parallax_mas for row in rows]),
            column([row.galactic_latitude_deg for row in rows]),
            column([row.av_mag for row in rows]),
            column([row.av_error_mag for row in rows]),
        ),
        relations or load_relations(),
    )
    return [_answer(row, result, index, band) for index, row in enumerate(rows)]


def _with_map(row: StarRow, extinction_map: ExtinctionMap) -> StarRow:
    if row.av_mag is not None or row.ra_deg is None or row.dec_deg is None or row.parallax_mas is None:
        return row
    av_mag, av_error_mag = extinction_map(row.ra_deg, row.dec_deg, row.parallax_mas)
    return replace(row, av_mag=float(av_mag), av_error_mag=float(av_error_mag))


def _answer(row: StarRow, result: Diameters, index: int, band: str) -> dict[str, Any]:
    reason = result.reason(index)
    if reason is not None:
        return {"name": row.name, "diameter": None, "reason": reason}
    theta = float(result.limb_darkened_mas[index])
    disks = uniform_disk_by_band(theta, result.limb_darkening[index])
    used = result.relations_used(index)
    answer = {
        "name": row.name,
        "diameter": {
            "limb_darkened_mas": round(theta, 5),
            "uniform_disk_mas": disks[band],
            "band": band,
            "own_error_mas": round(float(result.own_error_mas[index]), 5),
            "shared_error_mas": round(float(result.shared_error_mas[index]), 5),
            "error_mas": round(float(result.error_mas[index]), 5),
            "relations": used,
            "discordant": bool(result.discordant[index]),
        },
        "uniform_disk_mas_by_band": disks,
        "chi_squared": round(float(result.chi_squared[index]), 3),
        "degrees_of_freedom": int(result.degrees_of_freedom[index]),
        "probability": round(float(result.probability[index]), 6),
        "culprit": result.culprit_name(index),
        "luminosity_group": str(result.luminosity_group[index]),
        "luminosity_probabilities": {
            name: round(float(value), 3)
            for name, value in zip(LUMINOSITY_GROUPS, result.group_probabilities[index], strict=True)
        },
        "av_mag": round(float(result.av_mag[index]), 4),
        "av_error_mag": round(float(result.av_error_mag[index]), 4),
        "teff_k": None if np.isnan(result.teff_k[index]) else round(float(result.teff_k[index])),
        "logg": None if np.isnan(result.logg[index]) else round(float(result.logg[index]), 2),
        "relation_set": result.relation_set.hash,
        "relations_file": result.relation_set.file or None,
    }
    parts = []
    for place, relation in enumerate(result.relation_set.names):
        if relation in used:
            value, pull = float(10 ** result.log_thetas[index, place]), float(result.pulls[index, place])
            parts.append(
                {
                    "relation": relation,
                    "diameter_mas": round(value, 5),
                    "weight": round(float(result.weights[index, place]), 4),
                    "residual_percent": round(100 * (value / theta - 1), 2),
                    "pull": None if np.isnan(pull) else round(pull, 2),
                }
            )
    return answer | {"parts": parts}


def predict_diameter(
    magnitudes: dict[str, float],
    errors: dict[str, float] | None = None,
    *,
    spectral_type: str = "",
    parallax_mas: float | None = None,
    position_deg: tuple[float, float] | None = None,
    av_mag: float | None = None,
    av_error_mag: float | None = None,
    extinction_map: ExtinctionMap | None = None,
    band: str = "Ks",
    name: str = "",
    relations: RelationSet | None = None,
) -> dict[str, Any]:
    """A diameter from magnitudes, and how it came about, ready for JSON; see `predict_rows`.

    Parameters
    ----------
    magnitudes, errors : dict
        Band -> magnitude, and its error.
    spectral_type, parallax_mas, position_deg : optional
    av_mag, av_error_mag : float, optional
        In place of the prior; without an error max(0.05, 0.5 A_V) is taken.
    extinction_map : function of ra_deg, dec_deg, parallax_mas, optional
        A map of your own: gives A_V and its error, in place of the prior, where `av_mag` is not
        given and position and parallax are.
    band : str
        Where the uniform-disc diameter is wanted.
    relations : RelationSet, optional
        Of `pinlight.load_relations`, in place of those that Pinlight ships.

    Raises
    ------
    InputError
        If fewer than two bands are given, a value is impossible, or no relation applies.
    """
    ra_deg, dec_deg = position_deg or (None, None)
    row = StarRow(
        magnitudes, errors or {}, name, spectral_type, parallax_mas, ra_deg, dec_deg, av_mag, av_error_mag
    )
    [answer] = predict_rows([row], band, relations, extinction_map)
    if answer["diameter"] is None:
        raise InputError(answer["reason"])
    return answer


def read_stars(path: Path) -> list[StarRow | tuple[str, str]]:
    """Stars of a table file: CSV, ECSV, VOTable or FITS.

    Columns are named by band (``V``, ``V_error``, ``Ks``, …), and ``name``, ``spectral_type``,
    ``parallax_mas``, ``ra_deg``, ``dec_deg``, ``av_mag``, ``av_error_mag``; all but two bands are
    optional, and blanks count as not given. Other columns are passed over.

    Returns
    -------
    rows : list
        A StarRow, or a name and the reason why it is none, for each row of the file.

    Raises
    ------
    InputError
        If the file cannot be read or has fewer than two columns of magnitudes.
    """
    from astropy.table import Table

    kinds = {".csv": "ascii.csv", ".ecsv": "ascii.ecsv", ".vot": "votable", ".xml": "votable", ".fits": "fits"}
    kind = kinds.get(path.suffix.lower())
    if kind is None:
        raise InputError(f"{path} may end in one of {', '.join(kinds)}, to tell what it is")
    try:
        table = Table.read(path, format=kind)
    except Exception as error:  # astropy's readers raise whatever their parsers do
        reason = getattr(error, "strerror", None) or str(error).splitlines()[0][:120]
        raise InputError(f"cannot read {path} as {kind.rpartition('.')[2]}: {reason}") from error
    bands = [name for name in table.colnames if name in INPUT_BANDS]
    if len(bands) < 2:
        found = ", ".join(table.colnames)[:80]
        raise InputError(f"{path} has columns {found}; it needs two or more of {', '.join(INPUT_BANDS)}")
    return [_row(dict(zip(table.colnames, values, strict=True)), bands) for values in table.iterrows()]


def _row(cells: dict[str, Any], bands: list[str]) -> StarRow | tuple[str, str]:
    def text(key: str) -> str:
        value = cells.get(key, "")
        if value is np.ma.masked:
            return ""
        return value.decode() if isinstance(value, bytes) else str(value).strip()

    def number(key: str) -> float | None:
        written = text(key)
        if written in ("", "nan", "--"):
            return None
        try:
            return float(written)
        except ValueError as error:
            raise InputError(f"{key} is {written!r}; it must be a number") from error

    def known(keys: dict[str, str]) -> dict[str, float]:
        return {band: value for band, key in keys.items() if (value := number(key)) is not None}

    try:
        return StarRow(
            known({band: band for band in bands}),
            known({band: f"{band}_error" for band in bands}),
            text("name"),
            text("spectral_type"),
            **{key: number(key) for key in _NUMBERS},
        )
    except InputError as error:
        return text("name"), str(error)
