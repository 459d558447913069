"""Published surface-brightness–colour relations, read from relations.csv."""

import csv
import hashlib
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.spectral import LUMINOSITY_GROUPS, spectral_code
from pinlight.errors import InputError
from pinlight.photometry.systems import SYSTEM_BANDS

__all__ = ["COLUMNS", "FORMS", "Relation", "RelationSet", "load_relations"]

FORMS = ("direct", "F", "S")
ORIGINS = ("seen", "validated", "memory")
# F = 4.2207 - 0.1 V0 - 0.5 log theta (Barnes & Evans 1976, MNRAS 174, 489), solved for log theta.
_F_ZERO = 8.4414
_POWERS = 6
_MOST = 60  # which of them a star used is kept in the bits of one number
COLUMNS = (
    "relation", "sample", "active", "reference", "doi", "luminosity", "spectral_min", "spectral_max", "form",
    "zero_band", "bluer", "redder", *(f"c{i}" for i in range(_POWERS)), *(f"e{i}" for i in range(_POWERS)),
    "colour_min", "colour_max", "scatter_percent", "common_percent", "shared_percent", "origin", "note",
)  # fmt: skip
# What may be left out of a row of one's own.
_MAY_LACK = {"doi", "common_percent", "note", *(f"c{i}" for i in range(1, _POWERS))} | {
    f"e{i}" for i in range(_POWERS)
}


@dataclass(frozen=True)
class Relation:
    """One published relation: log10 of a limb-darkened diameter in mas from two magnitudes.

    With the colour C = `bluer` - `redder` and P(C) the polynomial of `coefficients`, the form is
    ``direct``: log theta = P(C) - 0.2 m; ``F``: log theta = 8.4414 - 0.2 m - 2 P(C);
    ``S``: log theta = 0.2 (P(C) - m); m is the magnitude in `zero_band`.

    `luminosity` maps each luminosity group it holds for to the latest spectral code there, as far as
    the paper sets one. `scatter_percent` is the relation's own scatter in theta. `common_percent` is
    the part of it that one star shows in every relation of the same `sample`: it does not average down
    over them. `shared_percent` is the systematic that all relations of one sample share, and so all
    stars that used them. Both parts are ours, for papers rarely tell them: `common_percent` is 0.8 of
    the least scatter of the sample in that class, `shared_percent` is what the samples differ by
    (DEVELOPERS.md tells how). An inactive relation is carried, and not used.
    """

    name: str
    sample: str
    active: bool
    reference: str
    doi: str
    luminosity: dict[str, float]
    spectral_min: float
    spectral_max: float
    form: str
    zero_band: str
    bluer: str
    redder: str
    coefficients: tuple[float, ...]
    coefficient_errors: tuple[float | None, ...]
    colour_min: float
    colour_max: float
    scatter_percent: float
    common_percent: float
    shared_percent: float
    origin: str
    note: str

    def log_diameter(self, zero_mag: NDArray[np.float64], colour: NDArray[np.float64]) -> NDArray[np.float64]:
        """log10(theta / mas), shape of the arguments, without regard to the colour range."""
        polynomial = np.polynomial.polynomial.polyval(colour, self.coefficients)
        if self.form == "direct":
            return polynomial - 0.2 * zero_mag
        if self.form == "F":
            return _F_ZERO - 0.2 * zero_mag - 2 * polynomial
        return 0.2 * (polynomial - zero_mag)

    def slope(self, colour: NDArray[np.float64]) -> NDArray[np.float64]:
        """d log10(theta) / d colour at a fixed zero magnitude, shape of `colour`."""
        derivative = np.polynomial.polynomial.polyder(self.coefficients)
        factor = {"direct": 1.0, "F": -2.0, "S": 0.2}[self.form]
        return np.asarray(factor * np.polynomial.polynomial.polyval(colour, derivative), dtype=np.float64)


@dataclass(frozen=True)
class RelationSet:
    """The relations in use, a hash that names them in every diameter, and those that are only carried.

    `file` is the name of the team's own file, '' where there is none.
    """

    relations: tuple[Relation, ...]
    hash: str
    carried: tuple[Relation, ...] = ()
    file: str = ""

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(relation.name for relation in self.relations)


def _groups(text: str) -> dict[str, float]:
    """Luminosity groups, each with its latest code: ``dwarf subgiant<=K0``."""
    groups = {}
    for word in text.split():
        group, _, latest = word.partition("<=")
        if group not in LUMINOSITY_GROUPS:
            raise InputError(f"luminosity is {group!r}; it may be one of {', '.join(LUMINOSITY_GROUPS)}")
        groups[group] = spectral_code(latest) if latest else float("inf")
    if not groups:
        raise InputError(f"luminosity is {text!r}; it may be one or more of {', '.join(LUMINOSITY_GROUPS)}")
    return groups


def _relation(row: dict[str, str]) -> Relation:
    def number(key: str, low: float, high: float) -> float:
        try:
            value = float(row[key])
        except ValueError as error:
            raise InputError(f"{key} is {row[key]!r}; it must be a number") from error
        if not low <= value <= high:  # NaN fails too
            raise InputError(f"{key} is {row[key]}; it must lie between {low:g} and {high:g}")
        return value

    def choice(key: str, choices: tuple[str, ...]) -> str:
        if row[key] not in choices:
            raise InputError(f"{key} is {row[key]!r}; it may be one of {', '.join(choices)}")
        return row[key]

    if None in row:
        raise InputError("the row has more cells than the heading")
    if lacking := [key for key in COLUMNS if row.get(key) in (None, "") and key not in _MAY_LACK]:
        raise InputError(f"{lacking[0]} is blank; it must be given")
    row = {key: row.get(key) or "" for key in COLUMNS}
    active = choice("active", ("yes", "no")) == "yes"
    coefficients = [number(f"c{i}", -100, 100) if row[f"c{i}"] else 0.0 for i in range(_POWERS)]
    while len(coefficients) > 1 and coefficients[-1] == 0:
        coefficients.pop()
    scatter = number("scatter_percent", 0.05, 100)
    relation = Relation(
        name=row["relation"],
        sample=row["sample"],
        active=active,
        reference=row["reference"],
        doi=row["doi"],
        luminosity=_groups(row["luminosity"]),
        spectral_min=spectral_code(row["spectral_min"]),
        spectral_max=spectral_code(row["spectral_max"]),
        form=choice("form", FORMS),
        zero_band=row["zero_band"],
        bluer=row["bluer"],
        redder=row["redder"],
        coefficients=tuple(coefficients),
        coefficient_errors=tuple(
            number(f"e{i}", 0, 100) if row[f"e{i}"] else None for i in range(len(coefficients))
        ),
        colour_min=number("colour_min", -10, 20),
        colour_max=number("colour_max", -10, 20),
        scatter_percent=scatter,
        common_percent=number("common_percent", 0, 0.999 * scatter) if row["common_percent"] else 0.0,
        shared_percent=number("shared_percent", 0, 100),
        origin=choice("origin", ORIGINS),
        note=row["note"],
    )
    for key in ("zero_band", "bluer", "redder") if active else ():
        choice(key, SYSTEM_BANDS)
    if relation.zero_band not in (relation.bluer, relation.redder):
        raise InputError(f"zero_band is {relation.zero_band!r}; it must be one of the colour's two bands")
    if relation.colour_min >= relation.colour_max:
        raise InputError(f"colour_min is {row['colour_min']}; it must be below colour_max, {row['colour_max']}")
    if active and relation.origin == "memory":
        raise InputError(
            "origin is 'memory' on an active row; make it 'validated' and say in note by which second "
            "route, or make active 'no'"
        )
    if active and relation.origin == "validated" and not relation.note:
        raise InputError("note is blank; say by which second route the coefficients were confirmed")
    return relation


def _read(path: Path) -> tuple[bytes, list[Relation]]:
    try:
        content = path.read_bytes()
        lines = content.decode("utf-8-sig").splitlines()
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    except UnicodeDecodeError as error:
        raise InputError(f"cannot read {path}: it is no UTF-8 text") from error
    reader = csv.DictReader(lines)
    headings = reader.fieldnames or []
    if missing := [key for key in COLUMNS if key not in headings and key not in _MAY_LACK]:
        raise InputError(f"{path} has no column {missing[0]}; it needs {', '.join(COLUMNS)}")
    relations: list[Relation] = []
    for row in reader:
        try:
            relation = _relation(row)
        except InputError as error:
            raise InputError(f"{path} line {reader.line_num}: {error}") from error
        if relation.name in {other.name for other in relations}:
            raise InputError(f"{path} line {reader.line_num}: an earlier row is called {relation.name!r} too")
        relations.append(relation)
    return content, relations


@lru_cache(maxsize=8)
def _load(path: Path | None, _modified: float) -> RelationSet:
    digest = hashlib.sha256()
    found: dict[str, Relation] = {}
    for each in (Path(__file__).with_name("relations.csv"), *([path] if path else [])):
        content, relations = _read(each)
        digest.update(content)
        found |= {relation.name: relation for relation in relations}
    active = tuple(relation for relation in found.values() if relation.active)
    carried = tuple(relation for relation in found.values() if not relation.active)
    if not 0 < len(active) <= _MOST:
        raise InputError(f"{path} leaves {len(active)} active relations; there may be 1 to {_MOST}")
    return RelationSet(active, digest.hexdigest()[:12], carried, path.name if path else "")


def load_relations(path: Path | None = None) -> RelationSet:
    """The relations that Pinlight ships, and those of a file of one's own beside them.

    A row of the file whose name is that of a shipped relation takes its place; so can a team also
    switch a relation off.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names file and line.
    """
    try:
        modified = path.stat().st_mtime if path else 0.0
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    return _load(path, modified)
