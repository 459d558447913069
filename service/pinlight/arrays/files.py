"""Array files: TOML, checked key by key."""

import tomllib
from pathlib import Path
from typing import Annotated, Any, Self

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError, model_validator

from pinlight.errors import InputError
from pinlight.photometry.bands import band

__all__ = ["Array", "Drift", "Limits", "Mode", "Station", "describe", "load_array"]


def _known_band(name: str) -> str:
    band(name)
    return name


class _Part(BaseModel):
    """Numbers must be finite, keys must be known, and nothing changes once read."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Wavelength = Annotated[float, Field(gt=0.1, le=30)]


class Drift(_Part):
    """How the transfer function wanders: relative spread, time and angle over which it forgets."""

    spread: NotNegative
    time_min: Positive
    angle_deg: Positive
    brightness_per_mag: NotNegative


class Limits(_Part):
    """What the array will not do, and what its team will not accept."""

    altitude_min_deg: Annotated[float, Field(ge=0, lt=90)]
    sun_altitude_max_deg: Annotated[float, Field(ge=-90, le=0)]
    moon_distance_min_deg: Annotated[float, Field(ge=0, le=180)]
    separation_max_deg: Annotated[float, Field(gt=0, le=180)]
    v2_min: Annotated[float, Field(ge=0, lt=1)]


class Station(_Part):
    """One telescope: where it stands and what its delay line can do (optical path)."""

    name: Annotated[str, Field(min_length=1)]
    east_m: float
    north_m: float
    up_m: float
    fixed_path_m: float
    coarse_paths_m: Annotated[tuple[float, ...], Field(min_length=1)]
    cart_m: NotNegative
    horizon: tuple[tuple[Annotated[float, Field(ge=0, le=360)], Annotated[float, Field(ge=0, lt=90)]], ...]


class Mode(_Part):
    """One way of using the camera; counts are of one baseline, both beams, all channels together."""

    name: Annotated[str, Field(min_length=1)]
    band: Annotated[str, AfterValidator(_known_band)]
    wavelength_um: Wavelength
    bandwidth_um: Positive
    channels: Annotated[int, Field(ge=1, le=4096)]
    frame_ms: Positive
    counts_per_frame_at_mag0: Positive
    read_variance: NotNegative
    integration_s: Positive
    system_v2: Annotated[float, Field(gt=0, le=1)]
    limiting_magnitude: float
    bright_limit_magnitude: float
    field_arcsec: Positive

    @model_validator(mode="after")
    def _fits(self) -> Self:
        if self.bandwidth_um >= 2 * self.wavelength_um:
            raise ValueError("bandwidth_um must be below twice wavelength_um")
        if self.bright_limit_magnitude >= self.limiting_magnitude:
            raise ValueError("bright_limit_magnitude must be below limiting_magnitude")
        return self


class Array(_Part):
    """An array: its site, its stations and its camera's modes."""

    name: Annotated[str, Field(min_length=1)]
    latitude_deg: Annotated[float, Field(ge=-90, le=90)]
    longitude_deg: Annotated[float, Field(ge=-180, le=360)]
    height_m: Annotated[float, Field(ge=-500, le=9000)]
    drift: Drift
    limits: Limits
    station: Annotated[tuple[Station, ...], Field(min_length=2)]
    mode: Annotated[tuple[Mode, ...], Field(min_length=1)]

    @model_validator(mode="after")
    def _names_differ(self) -> Self:
        for kind, parts in (("station", self.station), ("mode", self.mode)):
            names = [part.name.casefold() for part in parts]
            for name in names:
                if names.count(name) > 1:
                    raise ValueError(f"two entries of [[{kind}]] are named {name!r}")
        return self

    def choose_stations(self, names: list[str] | None) -> tuple[Station, ...]:
        """The stations of these names, all of them by default.

        Raises
        ------
        InputError
            If a name is unknown or given twice, or fewer than two are left.
        """
        if names is None:
            return self.station
        known = {station.name.casefold(): station for station in self.station}
        chosen = []
        for name in names:
            station = known.get(name.strip().casefold())
            if station is None:
                may_be = ", ".join(s.name for s in self.station)
                raise InputError(f"station is {name.strip()!r}; {self.name} has {may_be}")
            if station in chosen:
                raise InputError(f"station {station.name} is given twice")
            chosen.append(station)
        if len(chosen) < 2:
            raise InputError(f"stations is {', '.join(names) or 'empty'}; it takes at least two")
        return tuple(chosen)

    def choose_mode(self, name: str | None) -> Mode:
        """The mode of that name; an array with a single mode needs none.

        Raises
        ------
        InputError
            If the name is unknown, or missing where there is a choice.
        """
        may_be = ", ".join(mode.name for mode in self.mode)
        if name is None:
            if len(self.mode) == 1:
                return self.mode[0]
            raise InputError(f"mode is missing; {self.name} has {may_be}")
        for mode in self.mode:
            if mode.name.casefold() == name.strip().casefold():
                return mode
        raise InputError(f"mode is {name!r}; {self.name} has {may_be}")


def load_array(path: str | Path) -> Array:
    """The array that a TOML file describes.

    Raises
    ------
    InputError
        If the file cannot be read, is not TOML, or has a missing, unknown or impossible key;
        the message names the file and the key.
    """
    try:
        content: dict[str, Any] = tomllib.loads(Path(path).read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"cannot read array file {path}: {error.strerror}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"array file {path} is not TOML: {error}") from error
    try:
        return Array.model_validate(content)
    except ValidationError as error:
        raise InputError(f"array file {path}: {describe(error)}") from error


def describe(error: ValidationError) -> str:
    """The first thing a validation found, in one line with key, value and what it may be."""
    first = error.errors(include_url=False)[0]
    key = "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in first["loc"]).lstrip(".")
    more = f" (and {error.error_count() - 1} more)" if error.error_count() > 1 else ""
    if first["type"] == "missing":
        return f"{key} is missing{more}"
    if first["type"] in ("extra_forbidden", "unexpected_keyword_argument"):
        return f"{key} is not a known key{more}"
    message = first["msg"].removeprefix("Value error, ")
    if not key or first["type"] == "value_error":
        return f"{key + ': ' if key else ''}{message}{more}"
    return f"{key} is {first['input']!r}: {message[0].lower()}{message[1:]}{more}"
