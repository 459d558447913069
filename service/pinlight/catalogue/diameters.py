"""A star's diameter as a row of the catalogue, and how it came about."""

import json
from collections.abc import Iterable, Iterator, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.limb_darkening import coefficients, uniform_disk_by_band
from pinlight.diameters.prediction import Diameters
from pinlight.diameters.spectral import LUMINOSITY_GROUPS, luminosity_probabilities, parse_spectral_type
from pinlight.photometry.extinction import relative_extinction

__all__ = ["diameter_rows", "explain_diameter"]

_ENCODER = json.JSONEncoder(separators=(",", ":"))


def diameter_rows(diameters: Diameters, star_ids: Iterable[int]) -> Iterator[dict[str, Any]]:
    """Rows of the table of diameters, one for each star."""

    def or_none(values: NDArray[Any]) -> list[float | None]:
        return [None if value != value else value for value in values.tolist()]  # NaN is not itself

    # So many digits after the point: the last bits of linear algebra differ between machines.
    columns = {
        name: or_none(getattr(diameters, name).astype(np.float64).round(digits))
        for names, digits in (
            (("limb_darkened_mas", "own_error_mas", "shared_error_mas"), 6),
            (("chi_squared", "probability", "av_mag", "av_error_mag"), 5),
            (("spectral_code", "teff_k", "logg"), 3),
        )
        for name in names
    }
    log_thetas, weights, pulls = (
        array.astype(np.float64).round(4).tolist()
        for array in (diameters.log_thetas, diameters.weights, diameters.pulls)
    )
    names, groups = diameters.relation_set.names, diameters.luminosity_group.tolist()
    for row, star_id in enumerate(star_ids):
        parts = {
            name: [log_theta, weight, None if pull != pull else pull]
            for name, log_theta, weight, pull in zip(
                names, log_thetas[row], weights[row], pulls[row], strict=True
            )
            if weight == weight
        }
        yield {
            "star_id": star_id,
            **{name: values[row] for name, values in columns.items()},
            "degrees_of_freedom": int(diameters.degrees_of_freedom[row]),
            "discordant": bool(diameters.discordant[row]),
            "culprit": diameters.culprit_name(row),
            "luminosity_group": groups[row],
            "relation_set": diameters.relation_set.hash,
            "parts": _ENCODER.encode(parts),
        }


def explain_diameter(
    row: Mapping[str, Any], spectral_type: str, parallax_mas: float | None, magnitudes: Mapping[str, float]
) -> dict[str, Any] | None:
    """How a star's diameter came about, ready for JSON; None where it has none.

    Parameters
    ----------
    row : mapping
        Its row of the table of diameters.
    spectral_type, parallax_mas, magnitudes
        Of the star, magnitudes by band: they tell how sure its luminosity group is.
    """
    theta = row["limb_darkened_mas"]
    if theta is None:
        return None
    own, shared = row["own_error_mas"], row["shared_error_mas"]
    teff, logg = (np.nan if row[key] is None else row[key] for key in ("teff_k", "logg"))
    u = coefficients(np.array([teff]), np.array([logg]))[0]
    group = parse_spectral_type(spectral_type).group
    # A stated class needs no dust, whose law is slow to load.
    in_ks = 0.0 if group else relative_extinction("Ks") * row["av_mag"]
    v, ks = magnitudes.get("V", np.nan) - row["av_mag"], magnitudes.get("Ks", np.nan) - in_ks
    probabilities = luminosity_probabilities(
        np.array([group]),
        np.array([v - ks]),
        np.array([ks]),
        np.array([np.nan if parallax_mas is None else parallax_mas]),
    )[0]
    return {
        "limb_darkened_mas": theta,
        "uniform_disk_mas_by_band": None if np.isnan(u).any() else uniform_disk_by_band(theta, u),
        "own_error_mas": own,
        "shared_error_mas": shared,
        "error_mas": round((own**2 + shared**2) ** 0.5, 6),
        **{
            key: row[key]
            for key in (
                "chi_squared", "degrees_of_freedom", "probability", "discordant", "culprit", "av_mag",
                "av_error_mag", "luminosity_group",
            )
        },
        "luminosity_probabilities": {
            name: round(float(value), 3) for name, value in zip(LUMINOSITY_GROUPS, probabilities, strict=True)
        },
        **{key: row[key] for key in ("teff_k", "logg", "relation_set")},
        "relations": [
            {
                "relation": name,
                "diameter_mas": round(10**log_theta, 5),
                "weight": weight,
                "residual_percent": round(100 * (10**log_theta / theta - 1), 2),
                "pull": pull,
            }
            for name, (log_theta, weight, pull) in json.loads(row["parts"]).items()
        ],
    }  # fmt: skip
