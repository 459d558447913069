"""Relations and predictions against stars whose diameters were measured, and against the Sun."""

import csv
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.prediction import Diameters, StarPhotometry, predict_diameters
from pinlight.diameters.relations import RelationSet
from pinlight.diameters.spectral import parse_spectral_type
from pinlight.errors import InputError
from pinlight.photometry.bands import PHOTOMETRY

__all__ = [
    "SUN_MAS_AT_10_PC",
    "MeasuredStars",
    "check_relations",
    "predict_measured",
    "read_measured",
    "the_sun",
]

Floats = NDArray[np.float64]

# Willmer (2018), ApJS 236, 47, moved to 10 pc; IAU 2015 resolution B3: 695 700 km there.
_SUN = {"B": 5.437, "V": 4.811, "R": 4.424, "I": 4.105, "J": 3.668, "H": 3.324, "Ks": 3.274, "W3": 3.263}
SUN_MAS_AT_10_PC = 0.93009
_BANDS = ("B", "V", "J", "H", "Ks", "K_BB")
_COLOUR_BINS = (-2.0, 0.0, 1.0, 1.5, 2.0, 2.5, 3.0, 4.0, 8.0)


@dataclass(frozen=True)
class MeasuredStars:
    """N stars with measured limb-darkened diameters, and their photometry.

    hip, spectral_types, sources : N texts; `sources` of the diameters
    recalled : shape (N,), diameters known from memory only, for sanity
    diameters_mas, errors_mas : shape (N,)
    parallax_mas, teff_k : shape (N,), NaN where unknown
    magnitudes, magnitude_errors : shape (N, 6), columns B, V, J, H, Ks, K_BB; NaN where missing, an
        error NaN where the magnitude is the survey's
    saturated : shape (N,), the infrared magnitudes are those of a saturated survey
    """

    hip: list[str]
    spectral_types: list[str]
    sources: list[str]
    recalled: NDArray[np.bool_]
    diameters_mas: Floats
    errors_mas: Floats
    parallax_mas: Floats
    teff_k: Floats
    magnitudes: Floats
    magnitude_errors: Floats
    saturated: NDArray[np.bool_]

    def subset(self, wanted: NDArray[np.bool_]) -> "MeasuredStars":
        """Those stars for which `wanted`, shape (N,), holds."""
        at = np.flatnonzero(wanted)

        def part(values: Any) -> Any:
            return [values[i] for i in at] if isinstance(values, list) else values[at]

        return MeasuredStars(**{name: part(values) for name, values in vars(self).items()})


def read_measured(path: Path) -> MeasuredStars:
    """Measured stars of a CSV file; tests/data/README.md tells its columns.

    Near-infrared magnitudes are the one from the ground or synthetic (`K_good`) where the file has it;
    the survey's J, H and Ks too where Ks is not saturated; and those alone, saturated as they are, where
    there is nothing else.

    Raises
    ------
    InputError
        If the file cannot be read or a row is wrong; the message names file and line.
    """
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    texts: dict[str, list[str]] = {"hip": [], "spectral_type": [], "source": [], "kind": []}
    numbers: list[list[float]] = []
    columns = (
        "theta_ld_mas",
        "err_mas",
        "parallax_mas",
        "teff_k",
        "B",
        "V",
        "J",
        "H",
        "Ks",
        "K_good",
        "K_good_error",
    )
    systems = []
    reader = csv.DictReader(lines)
    for row in reader:
        try:
            numbers.append([float(row[key]) if row[key] else np.nan for key in columns])
            for key, values in texts.items():
                values.append(row[key])
            systems.append(row["K_good_system"])
        except (KeyError, TypeError, ValueError) as error:
            raise InputError(f"{path} line {reader.line_num}: {error}") from error
    table = np.array(numbers).reshape(-1, len(columns))
    diameter, diameter_error, parallax, teff = table[:, :4].T
    magnitudes = np.column_stack([table[:, 4:9], np.full(len(table), np.nan)])
    errors = np.full(magnitudes.shape, np.nan)
    good, good_error = table[:, 9], table[:, 10]
    with np.errstate(invalid="ignore"):
        bright = magnitudes[:, 4] < PHOTOMETRY["Ks"].saturation[-1][0]
    has_good = np.isfinite(good)
    magnitudes[has_good & bright, 2:5] = np.nan
    for column, system in ((4, "Ks"), (5, "K_BB")):
        at = has_good & (np.array(systems) == system)
        magnitudes[at, column], errors[at, column] = good[at], good_error[at]
    return MeasuredStars(
        hip=texts["hip"],
        spectral_types=texts["spectral_type"],
        sources=texts["source"],
        recalled=np.array([kind == "recalled" for kind in texts["kind"]]),
        diameters_mas=diameter,
        errors_mas=diameter_error,
        parallax_mas=parallax,
        teff_k=teff,
        magnitudes=magnitudes,
        magnitude_errors=errors,
        saturated=bright & ~has_good,
    )


def predict_measured(stars: MeasuredStars, relation_set: RelationSet) -> Diameters:
    """What is predicted for measured stars; they are near, so dust counts as toward the galactic pole."""
    return predict_diameters(
        StarPhotometry.of(
            _BANDS,
            stars.magnitudes,
            stars.magnitude_errors,
            stars.spectral_types,
            stars.parallax_mas,
            np.full(len(stars.hip), 90.0),
        ),
        relation_set,
    )


def the_sun(relation_set: RelationSet) -> Diameters:
    """What is predicted for the Sun at 10 pc, magnitudes good to 0.02; see `SUN_MAS_AT_10_PC`."""
    bands = tuple(_SUN)
    return predict_diameters(
        StarPhotometry(
            np.array([list(_SUN.values())]),
            np.full((1, len(bands)), 0.02),
            ["G2V"],
            np.array([100.0]),
            np.array([90.0]),
            av_mag=np.zeros(1),
            bands=bands,
        ),
        relation_set,
    )


def check_relations(relation_set: RelationSet, stars: MeasuredStars) -> list[dict[str, Any]]:
    """Each relation on its own against the measured stars that it holds for, and against the Sun.

    Stars whose diameters are recalled and stars of saturated photometry are left out.

    Returns
    -------
    answers : list of dict
        ``relation``, ``scatter_percent`` (published), ``sun_percent`` (predicted less true, None where it
        does not hold for the Sun) and ``bins``: ``group``, ``v_k_min``, ``v_k_max``, ``stars``,
        ``bias_percent`` (median) and ``spread_percent`` (standard deviation, None for one star).
    """
    stars = stars.subset(~stars.recalled & ~stars.saturated)
    k = np.where(np.isfinite(stars.magnitudes[:, 5]), stars.magnitudes[:, 5], stars.magnitudes[:, 4] + 0.039)
    v_k = stars.magnitudes[:, 1] - k
    groups = np.array([parse_spectral_type(text).group or "dwarf" for text in stars.spectral_types])
    answers = []
    for relation in relation_set.relations:
        alone = replace(relation_set, relations=(relation,))
        ratio = predict_measured(stars, alone).limb_darkened_mas / stars.diameters_mas
        bins = []
        for group in dict.fromkeys(groups.tolist()):
            for low, high in pairwise(_COLOUR_BINS):
                off = 100 * (ratio[(groups == group) & (v_k >= low) & (v_k < high) & np.isfinite(ratio)] - 1)
                if off.size:
                    bins.append(
                        {
                            "group": group,
                            "v_k_min": low,
                            "v_k_max": high,
                            "stars": int(off.size),
                            "bias_percent": round(float(np.median(off)), 2),
                            "spread_percent": round(float(off.std(ddof=1)), 2) if off.size > 1 else None,
                        }
                    )
        sun = float(the_sun(alone).limb_darkened_mas[0]) / SUN_MAS_AT_10_PC
        answers.append(
            {
                "relation": relation.name,
                "scatter_percent": relation.scatter_percent,
                "sun_percent": round(100 * (sun - 1), 2) if np.isfinite(sun) else None,
                "bins": bins,
            }
        )
    return answers
