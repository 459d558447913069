"""Filling an empty catalogue from the seed: real stars, their names, magnitudes and neighbours."""

import gzip
import re
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import insert

from pinlight.catalogue.changes import Changing
from pinlight.catalogue.database import bulk_insert
from pinlight.catalogue.diameters import diameter_rows
from pinlight.catalogue.names import name_key, short_keys
from pinlight.catalogue.predicting import NEIGHBOUR_ARCSEC, or_none
from pinlight.catalogue.tables import Companion, Diameter, Identifier, Magnitude, Source, Star
from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import load_relations
from pinlight.diameters.spectral import parse_spectral_type
from pinlight.errors import SeedFileError
from pinlight.photometry.bands import default_errors
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.ranking.columns import FLAGS
from pinlight.resources import seed_folder
from pinlight.sky.cells import cells_of
from pinlight.sky.positions import galactic_latitude_deg

__all__ = ["OBJECT_TYPES", "SeedStars", "fill_from_seed", "read_seed"]

Progress = Callable[[str], object]

STARS_SOURCE = {
    "id": 1,
    "title": "SIMBAD stars within 300 pc",
    "reference": "SIMBAD300.mat in exosims 3.6.6; Wenger et al. 2000, A&AS 143, 9",
    "licence": "BSD-3-Clause",
    "retrieved": "2012-12-06",
}
NAMES_SOURCE = {
    "id": 2,
    "title": "Hipparcos stars and star designations",
    "reference": "stars.14.json and starnames.json in d3-celestial 0.7.35",
    "licence": "BSD-3-Clause",
    "retrieved": "2020-03-15",
}
# R to Z, RR to QZ, V335 and on: Kholopov et al., General Catalogue of Variable Stars, 4th ed.
_VARIABLE_DESIGNATION = re.compile(r"([R-Z]|[A-Z]{2}|V\d{3,4}) [A-Z][A-Za-z]{2}")

# SIMBAD's object types of 2012 -> flag words of this project.
OBJECT_TYPES = {
    "*": "", "**": "double", "*i*": "component", "SB*": "spectroscopic_binary",
    "EB*": "eclipsing_binary variable", "Al*": "eclipsing_binary variable",
    "bL*": "eclipsing_binary variable", "WU*": "eclipsing_binary variable",
    "El*": "ellipsoidal variable", "RS*": "active_binary variable", "AM*": "cataclysmic variable",
    "DQ*": "cataclysmic variable", "NL*": "cataclysmic variable", "DN*": "cataclysmic variable",
    "No*": "cataclysmic variable", "XB*": "xray_binary", "LXB": "xray_binary", "V*": "variable",
    "V*?": "variable", "dS*": "variable delta_scuti", "gD*": "variable gamma_doradus",
    "bC*": "variable beta_cephei", "a2*": "variable alpha2_cvn peculiar", "BY*": "variable by_draconis",
    "Ro*": "variable rotating", "Pu*": "variable pulsating", "sr*": "variable semiregular",
    "LP*": "variable long_period", "Mi*": "variable mira", "Ce*": "variable cepheid",
    "cC*": "variable cepheid", "WV*": "variable cepheid", "RR*": "variable rr_lyrae",
    "RV*": "variable rv_tauri", "SX*": "variable sx_phoenicis", "ZZ*": "variable pulsating white_dwarf",
    "Fl*": "variable flare", "Or*": "variable orion_variable", "Ir*": "variable irregular",
    "RI*": "variable irregular", "RC*": "variable r_crb", "Em*": "emission_line",
    "Be*": "be_star emission_line fast_rotator", "Pe*": "peculiar", "pr*": "pre_main_sequence",
    "Y*O": "pre_main_sequence", "Y*?": "pre_main_sequence", "TT*": "pre_main_sequence t_tauri variable",
    "TT?": "pre_main_sequence t_tauri variable", "C*": "carbon_star", "CH*": "carbon_star peculiar",
    "S*": "s_star", "WR*": "wolf_rayet", "pA*": "evolved", "WD*": "white_dwarf", "BD*": "brown_dwarf",
    "LM*": "low_mass", "HB*": "horizontal_branch", "BS*": "blue_straggler", "*iC": "in_cluster",
    "*iA": "in_association", "*iN": "in_nebula", "PM*": "high_proper_motion", "HV*": "high_velocity",
}  # fmt: skip


@dataclass(frozen=True)
class SeedStars:
    """The seed's columns, N stars; magnitudes have shape (N, 5), columns follow `CATALOGUE_BANDS`.

    `source_names` are the names that the stars' own source gives; all others come with the names.
    """

    names: list[str]
    source_names: list[str]
    identifiers: list[list[str]]
    object_types: list[str]
    spectral_types: list[str]
    ra_deg: NDArray[np.float64]
    dec_deg: NDArray[np.float64]
    pm_ra_mas_yr: NDArray[np.float64]
    pm_dec_mas_yr: NDArray[np.float64]
    parallax_mas: NDArray[np.float64]
    radial_velocity_km_s: NDArray[np.float64]
    magnitudes: NDArray[np.float64]


def read_seed(path: Path | None = None) -> SeedStars:
    """The stars of a seed file (a FITS table, see seed_catalog/README.md).

    Raises
    ------
    SeedFileError
        If the file cannot be read, or a row has no place on the sky or an unknown object type.
    """
    from astropy.io import fits  # slow to import

    path = path or seed_folder() / "stars.fits.gz"
    try:
        table = fits.getdata(path)

        def numbers(name: str) -> NDArray[np.float64]:
            return np.asarray(table[name], dtype=np.float64)

        stars = SeedStars(
            names=[str(name) for name in table["name"]],
            source_names=[str(name) for name in table["source_name"]],
            identifiers=[str(names).split("|") for names in table["identifiers"]],
            object_types=[str(kind) for kind in table["object_type"]],
            spectral_types=[str(kind) for kind in table["spectral_type"]],
            ra_deg=numbers("ra_deg"),
            dec_deg=numbers("dec_deg"),
            pm_ra_mas_yr=numbers("pm_ra_mas_yr"),
            pm_dec_mas_yr=numbers("pm_dec_mas_yr"),
            parallax_mas=numbers("parallax_mas"),
            radial_velocity_km_s=numbers("radial_velocity_km_s"),
            # Single precision in the file; three decimals is what the source gave.
            magnitudes=np.stack([numbers(band).round(3) for band in CATALOGUE_BANDS], axis=1),
        )
    except (OSError, gzip.BadGzipFile, KeyError, TypeError) as error:
        raise SeedFileError(f"cannot read seed file {path}: {error}") from error
    for row, kind in enumerate(stars.object_types, start=1):
        if kind not in OBJECT_TYPES:
            raise SeedFileError(f"{path} row {row}: object_type is {kind!r}, which is not known")
    misplaced = ~((stars.ra_deg >= 0) & (stars.ra_deg < 360) & (np.abs(stars.dec_deg) <= 90))
    if misplaced.any():
        row = int(np.flatnonzero(misplaced)[0])
        raise SeedFileError(
            f"{path} row {row + 1}: position {stars.ra_deg[row]:g} {stars.dec_deg[row]:g} is not on the sky"
        )
    return stars


def _flags(object_type: str, spectral_type: str, identifiers: list[str]) -> str:
    """All flag words of a star, in the order of `FLAGS`."""
    words = set(OBJECT_TYPES[object_type].split())
    if any(_VARIABLE_DESIGNATION.fullmatch(name) for name in identifiers):
        words.add("variable")
    spectral = parse_spectral_type(spectral_type)
    if spectral.composite:
        words.add("composite_spectrum")
    if spectral.broad_lined:
        words.add("fast_rotator")
    if spectral.emission:
        words.add("emission_line")
    if spectral.peculiar:
        words.add("peculiar")
    if spectral.degenerate:
        words.add("white_dwarf")
    return " ".join(word for word in FLAGS if word in words)


def fill_from_seed(change: Changing, progress: Progress, path: Path | None = None) -> int:
    """Put the seed's stars, names, magnitudes, neighbours and diameters into empty tables.

    Returns
    -------
    count : int
        How many stars.

    Raises
    ------
    SeedFileError
        If the seed file is wrong; nothing is committed here in any case.
    """
    progress("reading the seed")
    stars = read_seed(path)
    errors = np.stack(
        [default_errors(band, stars.magnitudes[:, i]) for i, band in enumerate(CATALOGUE_BANDS)], axis=1
    )
    connection = change.connection
    connection.execute(insert(Source), [STARS_SOURCE, NAMES_SOURCE])

    def write(table: type[Any], rows: Iterable[dict[str, Any]]) -> None:
        bulk_insert(connection, table, (row | {"change_id": change.id} for row in rows))

    progress("writing stars and names")
    write(Star, _star_rows(stars))
    write(Identifier, _identifier_rows(stars))
    write(Magnitude, _magnitude_rows(stars, errors))
    write(Companion, _companion_rows(stars))
    progress("predicting diameters")
    diameters = predict_diameters(
        StarPhotometry.of(
            CATALOGUE_BANDS,
            stars.magnitudes,
            np.full(stars.magnitudes.shape, np.nan),  # the source gives none
            stars.spectral_types,
            stars.parallax_mas,
            galactic_latitude_deg(stars.ra_deg, stars.dec_deg),
        ),
        load_relations(),
    )
    progress("writing diameters")
    write(Diameter, diameter_rows(diameters, range(1, len(stars.names) + 1)))
    return len(stars.names)


def _star_rows(stars: SeedStars) -> Iterator[dict[str, Any]]:
    optional = [
        or_none(values.round(6))
        for values in (stars.pm_ra_mas_yr, stars.pm_dec_mas_yr, stars.parallax_mas, stars.radial_velocity_km_s)
    ]
    cells = cells_of(stars.ra_deg, stars.dec_deg).tolist()
    for row, name in enumerate(stars.names):
        yield {
            "id": row + 1,
            "name": name,
            "ra_deg": float(stars.ra_deg[row]),
            "dec_deg": float(stars.dec_deg[row]),
            "pm_ra_mas_yr": optional[0][row],
            "pm_dec_mas_yr": optional[1][row],
            "parallax_mas": optional[2][row],
            "radial_velocity_km_s": optional[3][row],
            "spectral_type": stars.spectral_types[row],
            "object_type": stars.object_types[row],
            "flags": _flags(stars.object_types[row], stars.spectral_types[row], stars.identifiers[row]),
            "cell": cells[row],
            "source_id": STARS_SOURCE["id"],
        }


def _identifier_rows(stars: SeedStars) -> Iterator[dict[str, Any]]:
    for row, names in enumerate(stars.identifiers):
        keys = {name_key(name): (name, False) for name in reversed(names)}
        for name in names:
            for short in short_keys(name):
                keys.setdefault(short, (name, True))
        for key, (name, is_short) in keys.items():
            yield {
                "star_id": row + 1,
                "name": name,
                "key": key,
                "short": is_short,
                "source_id": (STARS_SOURCE if name == stars.source_names[row] else NAMES_SOURCE)["id"],
            }


def _magnitude_rows(stars: SeedStars, errors: NDArray[np.float64]) -> Iterator[dict[str, Any]]:
    for index, band in enumerate(CATALOGUE_BANDS):
        values, errors_mag = or_none(stars.magnitudes[:, index]), errors[:, index].tolist()
        for row, value in enumerate(values):
            if value is not None:
                yield {
                    "star_id": row + 1,
                    "band": band,
                    "source_id": STARS_SOURCE["id"],
                    "value": value,
                    "error": errors_mag[row],
                    "error_assumed": True,
                    "quality": "",
                    "chosen": False,
                }


def _companion_rows(stars: SeedStars) -> Iterator[dict[str, Any]]:
    """Every pair of the seed's stars closer than `NEIGHBOUR_ARCSEC`, once from each side."""
    from scipy.spatial import cKDTree

    from pinlight.sky.positions import separation_deg, unit_vectors

    tree = cKDTree(unit_vectors(stars.ra_deg, stars.dec_deg))
    pairs = tree.query_pairs(2 * np.sin(np.radians(NEIGHBOUR_ARCSEC / 3600) / 2), output_type="ndarray")
    pairs = np.concatenate([pairs, pairs[:, ::-1]])
    pairs = pairs[np.lexsort([pairs[:, 1], pairs[:, 0]])]
    one, other = pairs.T
    apart = separation_deg(stars.ra_deg[one], stars.dec_deg[one], stars.ra_deg[other], stars.dec_deg[other])
    deltas = [
        or_none((stars.magnitudes[other, column] - stars.magnitudes[one, column]).round(3))
        for column in (CATALOGUE_BANDS.index("V"), CATALOGUE_BANDS.index("Ks"))
    ]
    for index, arcsec in enumerate((apart * 3600).round(3).tolist()):
        yield {
            "star_id": int(one[index]) + 1,
            "neighbour_id": int(other[index]) + 1,
            "separation_arcsec": arcsec,
            "delta_v_mag": deltas[0][index],
            "delta_ks_mag": deltas[1][index],
            "source_id": STARS_SOURCE["id"],
        }
