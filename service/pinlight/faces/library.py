"""The calls that every face makes."""

import csv
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from pinlight.arrays.files import Array, load_array
from pinlight.catalogue.store import Catalogue
from pinlight.diameters.limb_darkening import coefficients_at, uniform_disk_ratio
from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import load_relations
from pinlight.errors import InputError, NotFoundError
from pinlight.photometry.bands import BANDS, check_magnitude, default_errors, saturation_errors
from pinlight.photometry.bands import band as band_of
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.planning.night import NightPlan, Request
from pinlight.planning.night import plan_night as plan_columns
from pinlight.ranking.clock import Clock, night_clock, span_clock
from pinlight.ranking.rank import rank as rank_columns
from pinlight.ranking.result import CalibratorSet, Ranking
from pinlight.ranking.setup import Setup, quick_setup, setup_of
from pinlight.ranking.target import Target
from pinlight.ranking.track import track
from pinlight.resources import seed_folder
from pinlight.sky.positions import (
    check_position,
    galactic_latitude_deg,
    looks_like_coordinates,
    parse_coordinates,
)
from pinlight.sky.time import parse_utc

__all__ = [
    "best_set",
    "find_array",
    "is_file",
    "known_arrays",
    "make_clock",
    "make_setup",
    "named_array",
    "plan_night",
    "predict_diameter",
    "rank",
    "read_requests",
    "read_targets",
    "resolve_target",
    "track_target",
]

# A_V and its error at a place and parallax.
ExtinctionMap = Callable[[float, float, float], tuple[float, float]]

# Steps of a ranking's clock; windows are found finer.
_RANK_STEP_MIN = 10.0


def rank(
    catalogue: Catalogue,
    target: str | Target,
    *,
    array: str | Path | Array | None = None,
    stations: list[str] | str | None = None,
    mode: str | None = None,
    baseline_m: float | None = None,
    wavelength_um: float | None = None,
    separation_max_deg: float | None = None,
    magnitude_max: float | None = None,
    v2_min: float | None = None,
    judge: str = "rms",
    best: int = 20,
    edition: str | None = None,
    night: str | None = None,
    at: str | None = None,
    from_: str | None = None,
    to: str | None = None,
    with_: list[str] | None = None,
) -> Ranking:
    """Rank calibrators for a target, with an array or just a baseline and a wavelength.

    Parameters
    ----------
    catalogue : Catalogue
    target : str or Target
        A star's name, coordinates as text, or a target of your own.
    array : path, name or Array, optional
        With `stations` (all by default) and `mode`.
    baseline_m, wavelength_um : float, optional
        The quick answer, in place of `array`.
    separation_max_deg, magnitude_max, v2_min : float, optional
        In place of the array's limits.
    judge : str
        ``rms`` over baselines and channels, or ``worst``.
    best : int
        How many to list.
    edition : str, optional
        The newest by default.
    night : str, optional
        Date of an evening at the array: its dark hours. Stars then have to be in reach together
        with the target, and baselines are the projected ones.
    at, from_, to : str, optional
        One time, or the beginning and end of a span, in UTC; in place of `night`.
    with_ : list of str, optional
        Names of stars whose set is evaluated beside the best sets.

    Returns
    -------
    Ranking

    Raises
    ------
    InputError, NotFoundError
        If something asked for is impossible or unknown.
    CatalogueError
        If the catalogue cannot be read.
    """
    setup = make_setup(array, stations, mode, baseline_m, wavelength_um)
    if array is None and (timed := night or at or from_ or to):
        raise InputError(f"a time, {timed}, is given without an array; give the array too")
    clock = None
    if array is not None:
        clock = make_clock(_array(array), stations, night, at, from_, to, _RANK_STEP_MIN)
    return rank_columns(
        catalogue.columns(edition),
        resolve_target(catalogue, target),
        setup,
        limits=setup.limits.replace(separation_max_deg, v2_min, magnitude_max),
        judge=judge,
        best=best,
        standings=catalogue.standings(),
        clock=clock,
        with_ids=[catalogue.find(name) for name in with_ or ()],
    )


def best_set(catalogue: Catalogue, target: str | Target, size: int = 2, **options: Any) -> CalibratorSet:
    """The set of calibrators of one size that costs a target least.

    Parameters
    ----------
    catalogue, target
        As `rank` takes them, and so all other options.
    size : int
        1 to 4.

    Raises
    ------
    InputError, NotFoundError
        As `rank`; also where fewer stars than `size` pass every gate.
    """
    sets = {len(one.star_ids): one for one in rank(catalogue, target, **options).best_sets}
    if size not in sets:
        raise InputError(
            f"size is {size}; it may be one of {', '.join(map(str, sets)) or 'none: no star ranks'}"
        )
    return sets[size]


def _array(array: str | Path | Array) -> Array:
    return array if isinstance(array, Array) else find_array(array)


def _stations(names: list[str] | str | None) -> list[str] | None:
    """A list of stations, also from one text with commas."""
    return [name.strip() for name in names.split(",") if name.strip()] if isinstance(names, str) else names


def make_clock(
    array: Array,
    stations: list[str] | str | None,
    night: str | None,
    at: str | None,
    from_: str | None,
    to: str | None,
    step_min: float = 5.0,
) -> Clock | None:
    """The clock of a night, a moment or a span; None where no time is given.

    Raises
    ------
    InputError
        If more than one is given, or a span lacks an end.
    """
    given = [name for name, value in (("night", night), ("at", at), ("from", from_ or to)) if value is not None]
    if len(given) > 1:
        raise InputError(f"{' and '.join(given)} are both given; give a night, a time, or from and to")
    chosen = array.choose_stations(_stations(stations))
    if night is not None:
        return night_clock(array, chosen, night, step_min)
    if at is not None:
        return span_clock(array, chosen, at, at, step_min)
    if from_ is not None or to is not None:
        if from_ is None or to is None:
            raise InputError(f"{'from' if from_ is None else 'to'} is missing; give both, or a night")
        return span_clock(array, chosen, from_, to, step_min)
    return None


def track_target(
    catalogue: Catalogue | None,
    target: str | Target,
    array: str | Path | Array,
    *,
    stations: list[str] | str | None = None,
    night: str | None = None,
    from_: str | None = None,
    to: str | None = None,
    step_min: float = 10.0,
) -> dict[str, Any]:
    """Where a target stands over an array, ready for JSON; see `ranking.track.track`.

    Coordinates need no catalogue.
    """
    clock = make_clock(_array(array), stations, night, None, from_, to, step_min)
    if clock is None:
        raise InputError("from is missing; give from and to, or a night")
    return track(clock, resolve_target(catalogue, target))


def plan_night(
    catalogue: Catalogue,
    requests: list[Request],
    *,
    array: str | Path | Array,
    stations: list[str] | str | None = None,
    mode: str | None = None,
    night: str | None = None,
    from_: str | None = None,
    to: str | None = None,
    edition: str | None = None,
    time_limit_s: float = 5.0,
) -> NightPlan:
    """A night of blocks for many targets; see `planning.night`.

    Parameters
    ----------
    catalogue : Catalogue
    requests : list of Request
        Of `read_requests`, or your own.
    array, stations, mode
        As `rank` takes them.
    night, from_, to : str, optional
        The evening's date at the array, or a span of UTC.
    edition : str, optional
    time_limit_s : float
        For the solver.
    """
    found = _array(array)
    clock = make_clock(found, stations, night, None, from_, to)
    if clock is None:
        raise InputError("night is missing; write the date of its evening, such as 2026-12-01")
    return plan_columns(
        catalogue.columns(edition),
        requests,
        setup_of(found, _stations(stations), mode),
        clock,
        standings=catalogue.standings(),
        time_limit_s=time_limit_s,
    )


def make_setup(
    array: str | Path | Array | None,
    stations: list[str] | str | None,
    mode: str | None,
    baseline_m: float | None,
    wavelength_um: float | None,
) -> Setup:
    """The setup of an array, or of one baseline at one wavelength.

    Raises
    ------
    InputError
        If neither or both are given, or either is impossible.
    """
    quick = {"baseline_m": baseline_m, "wavelength_um": wavelength_um}
    given = [name for name, value in quick.items() if value is not None]
    if array is not None:
        if given:
            raise InputError(f"array and {given[0]} are both given; give one or the other")
        return setup_of(_array(array), _stations(stations), mode)
    for name, value in (("stations", stations), ("mode", mode)):
        if value is not None:
            raise InputError(f"{name} is given without an array; give the array too")
    if baseline_m is None or wavelength_um is None:
        missing = "array" if not given else next(name for name, value in quick.items() if value is None)
        raise InputError(f"{missing} is missing; give an array, or both baseline_m and wavelength_um")
    return quick_setup(baseline_m, wavelength_um)


def known_arrays(folder: Path | None = None) -> dict[str, Array]:
    """The arrays of a folder by file name, by default the invented ones that Pinlight ships."""
    folder = folder or seed_folder() / "arrays"
    return {path.stem: load_array(path) for path in sorted(folder.glob("*.toml"))}


def named_array(name: str, arrays: Mapping[str, Array]) -> Array:
    """One of `arrays` by its key or its full name.

    Raises
    ------
    NotFoundError
        If none is called so.
    """
    wanted = name.strip().casefold()
    for key, array in arrays.items():
        if wanted in (key.casefold(), array.name.casefold()):
            return array
    raise NotFoundError(f"array is {name!r}; it may be one of {', '.join(arrays)}")


def find_array(name: str | Path) -> Array:
    """An array by file, or one of those that Pinlight ships by name.

    Raises
    ------
    NotFoundError
        If there is no such array.
    InputError
        If the file is wrong.
    """
    if isinstance(name, Path) or Path(name).suffix == ".toml" or is_file(str(name)):
        return load_array(name)
    return named_array(name, known_arrays())


def is_file(name: str) -> bool:
    """Whether a text names a file; one too long to be a file name does not."""
    try:
        return Path(name).is_file()
    except (OSError, ValueError):
        return False


def resolve_target(catalogue: Catalogue | None, target: str | Target) -> Target:
    """A target from what a person wrote: coordinates, or a name known to the catalogue.

    Raises
    ------
    InputError, NotFoundError
        If it is neither.
    """
    if isinstance(target, Target):
        return target
    if looks_like_coordinates(target):
        ra_deg, dec_deg = parse_coordinates(target)
        return Target(ra_deg, dec_deg, name=target.strip())
    if catalogue is None:
        raise InputError(f"target is {target!r}; without a catalogue give coordinates")
    star = catalogue.star(catalogue.find(target))
    return Target(
        star["ra_deg"],
        star["dec_deg"],
        name=star["name"],
        magnitudes={band: entry["value"] for band, entry in star["magnitudes"].items()},
        diameter_mas=star["diameter"]["limb_darkened_mas"] if star["diameter"] else None,
        star_id=star["star_id"],
    )


def read_targets(path: Path) -> list[Target]:
    """Targets from a CSV file with columns name, ra_deg, dec_deg and, if known, diameter_mas and bands.

    Other columns are left to whoever needs them.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names the line.
    """
    return [request.target for request in read_requests(path)]


def read_requests(path: Path) -> list[Request]:
    """Targets with what a plan wants of each: columns priority, repeats, required_error_percent, from, to.

    All of these may be missing or blank: priority 1, one block, any error, any time of the night.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names the line.
    """
    requests = []
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            columns = _targets_columns(path, next(reader, []))
            for cells in reader:
                if not any(cell.strip() for cell in cells):
                    continue
                row = {column: cell.strip() for column, cell in zip(columns, cells, strict=False)}
                try:
                    requests.append(_request(row))
                except InputError as error:
                    raise InputError(f"{path} line {reader.line_num}: {error}") from error
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        reason = error.strerror if isinstance(error, OSError) else error
        raise InputError(f"cannot read targets file {path}: {reason}") from error
    if not requests:
        raise InputError(f"targets file {path} has no rows; it needs columns name, ra_deg, dec_deg")
    return requests


def _targets_columns(path: Path, header: list[str]) -> list[str]:
    """The columns of a targets file, as this project spells them, whatever their case."""
    spelled = {name.casefold(): name for name in _TARGET_COLUMNS}
    columns = [spelled.get(cell.strip().casefold(), cell.strip()) for cell in header]
    missing = [name for name in ("name", "ra_deg", "dec_deg") if name not in columns]
    if missing:
        found = ", ".join(header)[:80] or "none"
        lacking = f"{', '.join(missing)} missing (commas part them)"
        raise InputError(f"targets file {path} has columns {found}; {lacking}")
    for name in columns:
        if name and columns.count(name) > 1:
            raise InputError(f"targets file {path} has the column {name} twice")
    return columns


_TARGET_COLUMNS = (
    "name", "ra_deg", "dec_deg", "diameter_mas", *BANDS, "priority", "repeats", "required_error_percent",
    "from", "to",
)  # fmt: skip


def _request(written: dict[str, str]) -> Request:
    for column in ("name", "ra_deg", "dec_deg"):
        if not written.get(column):
            raise InputError(f"{column} is missing")
    values: dict[str, float] = {}
    numbers = ("ra_deg", "dec_deg", "diameter_mas", *BANDS, "priority", "repeats", "required_error_percent")
    for column in numbers:
        if text := written.get(column):
            try:
                values[column] = float(text)
            except ValueError as error:
                raise InputError(f"{column} is {text!r}; it must be a number") from error
    repeats = values.get("repeats", 1.0)
    if not repeats.is_integer():
        raise InputError(f"repeats is {repeats:g}; it must be a whole number")
    required = values.get("required_error_percent")
    target = Target(
        values["ra_deg"],
        values["dec_deg"],
        name=written["name"],
        magnitudes={band: values[band] for band in BANDS if band in values},
        diameter_mas=values.get("diameter_mas"),
    )
    return Request(
        target,
        priority=values.get("priority", 1.0),
        repeats=int(repeats),
        required_error=None if required is None else required / 100,
        earliest=parse_utc(written["from"], "from") if written.get("from") else None,
        latest=parse_utc(written["to"], "to") if written.get("to") else None,
    )


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
) -> dict[str, Any]:
    """A diameter from magnitudes, and how it came about, ready for JSON.

    Parameters
    ----------
    magnitudes, errors : dict
        Band -> magnitude; an error that is not given takes the band's default.
    spectral_type : str, optional
        Without one, parallax and colour tell a dwarf from a giant.
    parallax_mas, position_deg : optional
        For the extinction prior; without a parallax no extinction is assumed.
    av_mag, av_error_mag : float, optional
        In place of the prior; without an error max(0.05, 0.5 A_V) is taken.
    extinction_map : function of ra_deg, dec_deg, parallax_mas, optional
        A map of your own: gives A_V and its error, in place of the prior, where `av_mag` is not
        given and position and parallax are.
    band : str
        Where the uniform-disc diameter is wanted.

    Raises
    ------
    InputError
        If fewer than two bands are given, a value is impossible, or no relation applies.
    """
    errors = errors or {}
    for key, value in magnitudes.items():
        check_magnitude(key, value)
        if key not in CATALOGUE_BANDS:
            raise InputError(f"band {key} is not used by any relation yet; give {', '.join(CATALOGUE_BANDS)}")
    for key, value in errors.items():
        if not 0 < value < 5:
            raise InputError(f"{key}_error is {value:g}; it must be positive and below 5 mag")
        if key not in magnitudes:
            raise InputError(f"{key}_error is given without {key}")
    if len(magnitudes) < 2:
        raise InputError(f"{len(magnitudes)} magnitude is given; a colour takes at least two bands")
    if parallax_mas is not None and not 0 < parallax_mas < 1000:
        raise InputError(f"parallax_mas is {parallax_mas:g}; it must lie between 0 and 1000")
    if av_mag is None and extinction_map is not None and position_deg is not None and parallax_mas is not None:
        av_mag, av_error_mag = extinction_map(*position_deg, parallax_mas)
    for key, extinction in (("av_mag", av_mag), ("av_error_mag", av_error_mag)):
        if extinction is not None and not 0 <= extinction < 50:
            raise InputError(f"{key} is {extinction:g}; it must lie between 0 and 50")
    # Without a distance the prior would put the star behind all the dust there is.
    av = (0.0 if parallax_mas is None else np.nan) if av_mag is None else av_mag
    latitude = 90.0 if position_deg is None else float(galactic_latitude_deg(*check_position(*position_deg)))
    values = np.array([[magnitudes.get(key, np.nan) for key in CATALOGUE_BANDS]])
    assumed = np.stack([default_errors(key, values[:, i]) for i, key in enumerate(CATALOGUE_BANDS)], axis=1)
    saturated = np.stack(
        [saturation_errors(key, values[:, i]) for i, key in enumerate(CATALOGUE_BANDS)], axis=1
    )
    own = np.array([[errors.get(key, np.nan) for key in CATALOGUE_BANDS]])
    relation_set = load_relations()
    result = predict_diameters(
        StarPhotometry(
            magnitudes=values,
            errors=np.where(np.isfinite(own), own, assumed),
            # An error of one's own says that the photometry is not the saturated survey's.
            shared_errors=np.where(np.isfinite(own), 0.0, saturated),
            spectral_types=[spectral_type],
            parallax_mas=np.array([np.nan if parallax_mas is None else parallax_mas]),
            galactic_latitude_deg=np.array([latitude]),
            av_mag=np.array([av]),
            av_error_mag=np.array([np.nan if av_error_mag is None else av_error_mag]),
        ),
        relation_set,
    )
    theta = float(result.limb_darkened_mas[0])
    if not np.isfinite(theta):
        kind = str(result.luminosity_group[0]) or "star of this type"
        raise InputError(f"no published relation applies to a {kind} with these colours")
    u = float(coefficients_at(band_of(band).wavelength_um, result.limb_darkening)[0])
    used = result.relations_used(0)
    return {
        "name": name,
        "diameter": {
            "limb_darkened_mas": round(theta, 5),
            "uniform_disk_mas": round(theta * float(uniform_disk_ratio(u)), 5),
            "band": band,
            "own_error_mas": round(float(result.own_error_mas[0]), 5),
            "shared_error_mas": round(float(result.shared_error_mas[0]), 5),
            "error_mas": round(float(result.error_mas[0]), 5),
            "relations": used,
            "discordant": bool(result.discordant[0]),
        },
        "luminosity_group": str(result.luminosity_group[0]),
        "av_mag": round(float(result.av_mag[0]), 4),
        "av_error_mag": round(float(result.av_error_mag[0]), 4),
        "teff_k": round(float(result.teff_k[0])),
        "relation_set": relation_set.hash,
        "parts": [
            {
                "relation": relation,
                "diameter_mas": round(float(10 ** result.log_thetas[0, index]), 5),
                "weight": round(float(result.weights[0, index]), 4),
            }
            for index, relation in enumerate(relation_set.names)
            if relation in used
        ],
    }
