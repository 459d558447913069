"""Published surface-brightness-colour relations, read from relations.csv."""

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

__all__ = ["FORMS", "Relation", "RelationSet", "load_relations"]

FORMS = ("direct", "F", "S")
# F = 4.2207 - 0.1 V0 - 0.5 log theta (Barnes & Evans 1976, MNRAS 174, 489), solved for log theta.
_F_ZERO = 8.4414


@dataclass(frozen=True)
class Relation:
    """One published relation: log10 of a limb-darkened diameter in mas from two magnitudes.

    With the colour C = `bluer` - `redder` and P(C) the polynomial of `coefficients`, the form is
    ``direct``: log theta = P(C) - 0.2 m; ``F``: log theta = 8.4414 - 0.2 m - 2 P(C);
    ``S``: log theta = 0.2 (P(C) - m); m is the magnitude in `zero_band`.

    `luminosity` maps each luminosity group it holds for to the latest spectral code there, as far as
    the paper sets one. `scatter_percent` is the relation's own scatter in theta; `shared_percent` the
    systematic that all relations of one `sample` share, and so all stars that used them. It is ours:
    papers rarely tell it; half the distance at which relations for the same stars disagree.
    """

    name: str
    sample: str
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
    colour_min: float
    colour_max: float
    scatter_percent: float
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
    """The relations in use, with a hash that names them in every diameter."""

    relations: tuple[Relation, ...]
    hash: str

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
    return groups


def _relation(row: dict[str, str]) -> Relation:
    coefficients = [float(row[f"c{power}"] or 0) for power in range(6)]
    while len(coefficients) > 1 and coefficients[-1] == 0:
        coefficients.pop()
    relation = Relation(
        name=row["relation"],
        sample=row["sample"],
        reference=row["reference"],
        doi=row["doi"],
        luminosity=_groups(row["luminosity"]),
        spectral_min=spectral_code(row["spectral_min"]),
        spectral_max=spectral_code(row["spectral_max"]),
        form=row["form"],
        zero_band=row["zero_band"],
        bluer=row["bluer"],
        redder=row["redder"],
        coefficients=tuple(coefficients),
        colour_min=float(row["colour_min"]),
        colour_max=float(row["colour_max"]),
        scatter_percent=float(row["scatter_percent"]),
        shared_percent=float(row["shared_percent"]),
        origin=row["origin"],
        note=row["note"],
    )
    if relation.form not in FORMS:
        raise InputError(f"form is {relation.form!r}; it may be one of {', '.join(FORMS)}")
    for key in ("zero_band", "bluer", "redder"):
        if row[key] not in SYSTEM_BANDS:
            raise InputError(f"{key} is {row[key]!r}; it may be one of {', '.join(SYSTEM_BANDS)}")
    return relation


@lru_cache(maxsize=8)
def load_relations(path: Path | None = None) -> RelationSet:
    """The relations of a file, by default those that Pinlight ships.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names file and line.
    """
    path = path or Path(__file__).with_name("relations.csv")
    try:
        content = path.read_bytes()
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    relations = []
    for number, row in enumerate(csv.DictReader(content.decode("utf-8").splitlines()), start=2):
        try:
            relations.append(_relation(row))
        except (KeyError, TypeError, ValueError) as error:
            raise InputError(f"{path} line {number}: {error}") from error
    return RelationSet(tuple(relations), hashlib.sha256(content).hexdigest()[:12])
