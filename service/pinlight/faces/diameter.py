"""A diameter from magnitudes."""

from collections.abc import Callable
from typing import Any

import numpy as np

from pinlight.diameters.limb_darkening import coefficients_at, uniform_disk_ratio
from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import load_relations
from pinlight.errors import InputError
from pinlight.photometry.bands import band as band_of
from pinlight.photometry.bands import check_magnitude, default_errors, saturation_errors
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.sky.positions import check_position, galactic_latitude_deg

__all__ = ["predict_diameter"]

# A_V and its error at a place and parallax.
ExtinctionMap = Callable[[float, float, float], tuple[float, float]]


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
