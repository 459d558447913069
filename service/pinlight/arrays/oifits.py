"""Array files from the OI_ARRAY and OI_WAVELENGTH tables of OIFITS files, the open standard."""

import json
from pathlib import Path
from typing import Any

import erfa
import numpy as np

from pinlight.errors import InputError
from pinlight.photometry.bands import nearest_band

__all__ = ["array_file_from_oifits"]

_WGS84 = 1
# The poles and the highest mountains, with a few kilometres to spare.
_LEAST_RADIUS_M, _GREATEST_RADIUS_M = 6.35e6, 6.40e6
_BLANK = '"?"'


def array_file_from_oifits(path: Path) -> str:
    """The text of an array file with what an OIFITS file says of its array.

    Site, stations, and one mode for each instrument's wavelength table. What the file does not
    say is written as "?", which `load_array` refuses by name until it is filled in.

    Raises
    ------
    InputError
        If the file cannot be read or has no usable OI_ARRAY table.

    Notes
    -----
    Pauls et al. (2005), PASP 117, 1255; Duvert, Young & Hummel (2017), A&A 597, A8: STAXYZ are metres
    from the array's centre along geocentric axes, the centre is ARRAYX, ARRAYY, ARRAYZ.
    """
    from astropy.io import fits  # slow to import

    try:
        with fits.open(path) as file:
            tables = [(hdu.name, dict(hdu.header), hdu.data) for hdu in file[1:] if hdu.name.startswith("OI_")]
            return _array_file(path, tables)
    except InputError:
        raise
    except (OSError, TypeError, ValueError, KeyError, IndexError) as error:
        raise InputError(f"cannot read {path} as OIFITS: {error}") from error


def _array_file(path: Path, tables: list[tuple[str, dict[str, Any], Any]]) -> str:
    arrays = [(header, data) for name, header, data in tables if name == "OI_ARRAY"]
    if not arrays:
        raise InputError(f"{path} has no OI_ARRAY table, so it does not say where the stations are")
    header, data = arrays[0]
    frame = str(header.get("FRAME", "GEOCENTRIC")).strip().upper()
    if frame != "GEOCENTRIC":
        raise InputError(
            f"the OI_ARRAY table of {path} has FRAME {frame}; only GEOCENTRIC says where stations are"
        )
    centre = np.array([float(header[f"ARRAY{axis}"]) for axis in "XYZ"])
    from_earths_centre = float(np.linalg.norm(centre))
    if not _LEAST_RADIUS_M < from_earths_centre < _GREATEST_RADIUS_M:
        where = f"{from_earths_centre / 1000:g} km from the Earth's centre"
        raise InputError(f"the OI_ARRAY table of {path} puts the array {where}; the ground is at 6360 to 6390")
    longitude, latitude, height = erfa.gc2gd(_WGS84, centre)
    stations = np.asarray(data["STAXYZ"], dtype=float) @ _east_north_up(longitude, latitude).T
    lines = [
        f"# From the OI_ARRAY table of {path.name}. Fill in every {_BLANK} by the array's own documents.",
        f"name = {_text(header.get('ARRNAME') or path.stem)}",
        f"latitude_deg = {np.degrees(latitude):.7f}",
        f"longitude_deg = {np.degrees(longitude):.7f}",
        f"height_m = {float(height):.2f}",
        "",
        "[drift]",
        *(f"{key} = {_BLANK}" for key in ("spread", "time_min", "angle_deg", "brightness_per_mag")),
        "",
        "[limits]",
        *(
            f"{key} = {_BLANK}"
            for key in (
                "altitude_min_deg", "sun_altitude_max_deg", "moon_distance_min_deg", "separation_max_deg",
                "v2_min",
            )
        ),
    ]  # fmt: skip
    names = [str(name).strip() for name in data["STA_NAME"]]
    if unfit := [name or "a blank" for name in names if not name or names.count(name) > 1]:
        raise InputError(
            f"the OI_ARRAY table of {path} has stations named {unfit[0]} more than once or not at all"
        )
    for name, (east, north, up) in zip(names, stations, strict=True):
        lines += [
            "",
            "[[station]]",
            f"name = {_text(name)}",
            f"east_m = {_number(east, 4)}",
            f"north_m = {_number(north, 4)}",
            f"up_m = {_number(up, 4)}",
            *(f"{key} = {_BLANK}" for key in ("fixed_path_m", "coarse_paths_m", "cart_m", "horizon")),
        ]
    for name, wavelength_header, wavelengths in tables:
        if name == "OI_WAVELENGTH":
            lines += ["", "[[mode]]", *_mode(wavelength_header, wavelengths)]
    if not any(name == "OI_WAVELENGTH" for name, _, _ in tables):
        lines += ["", "[[mode]]", *(f"{key} = {_BLANK}" for key in ("name", "band", "wavelength_um"))]
        lines += [f"{key} = {_BLANK}" for key in ("bandwidth_um", "channels", *_MODE_BLANKS)]
    return "\n".join(lines) + "\n"


_MODE_BLANKS = (
    "frame_ms", "counts_per_frame_at_mag0", "read_variance", "integration_s", "system_v2",
    "limiting_magnitude", "bright_limit_magnitude", "field_arcsec",
)  # fmt: skip


def _mode(header: dict[str, Any], data: Any) -> list[str]:
    waves, widths = (np.asarray(data[key], dtype=float) * 1e6 for key in ("EFF_WAVE", "EFF_BAND"))
    if not len(waves) or not (np.isfinite(waves) & (waves > widths / 2)).all():
        keys = ("band", "wavelength_um", "bandwidth_um", "channels", *_MODE_BLANKS)
        return [f"name = {_text(header.get('INSNAME') or 'mode')}", *(f"{key} = {_BLANK}" for key in keys)]
    low, high = (waves - widths / 2).min(), (waves + widths / 2).max()
    return [
        f"name = {_text(header.get('INSNAME') or 'mode')}",
        f"band = {_text(nearest_band(float(waves.mean()), ('B', 'V', 'J', 'H', 'Ks')))}",
        f"wavelength_um = {_number((low + high) / 2, 5)}",
        f"bandwidth_um = {_number(high - low, 5)}",
        f"channels = {len(waves)}",
        *(f"{key} = {_BLANK}" for key in _MODE_BLANKS),
    ]


def _east_north_up(longitude: float, latitude: float) -> np.ndarray:
    """Rows are the east, north and up directions in geocentric axes."""
    sin_lon, cos_lon, sin_lat, cos_lat = (
        np.sin(longitude),
        np.cos(longitude),
        np.sin(latitude),
        np.cos(latitude),
    )
    return np.array(
        [
            [-sin_lon, cos_lon, 0.0],
            [-sin_lat * cos_lon, -sin_lat * sin_lon, cos_lat],
            [cos_lat * cos_lon, cos_lat * sin_lon, sin_lat],
        ]
    )


def _number(value: float, digits: int) -> str:
    """A TOML number; what the file leaves undefined is a blank."""
    return f"{value:.{digits}f}" if np.isfinite(value) else _BLANK


def _text(value: Any) -> str:
    """A TOML string; JSON's are a subset."""
    return json.dumps(str(value).strip())
