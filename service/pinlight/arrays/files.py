"""Array files: TOML, checked key by key."""

import tomllib
from pathlib import Path
from typing import Annotated, Any, Self

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    ValidationError,
    model_validator,
)

from pinlight.errors import InputError
from pinlight.photometry.bands import BANDS

__all__ = ["Array", "Drift", "Limits", "Mode", "Station", "describe", "load_array"]


def _number(value: object) -> object:
    if isinstance(value, bool | str):
        raise ValueError("it must be a number")  # noqa: TRY004 - pydantic reports ValueErrors
    return value


def _label(value: object) -> object:
    if isinstance(value, str) and (not value.strip() or "," in value or not value.isprintable()):
        raise ValueError("a name must be printable and without commas")
    return value


def _known_band(name: str) -> str:
    if name not in BANDS:
        raise ValueError(f"it may be one of {', '.join(BANDS)}")
    return name


class _Part(BaseModel):
    """Numbers must be finite, keys must be known, and nothing changes once read."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


Number = Annotated[float, BeforeValidator(_number)]
Name = Annotated[str, BeforeValidator(_label)]
Metres = Annotated[Number, Field(ge=-1e5, le=1e5)]
Wavelength = Annotated[Number, Field(gt=0.1, le=30)]


class Drift(_Part):
    """How the transfer function wanders: relative spread, time and angle over which it forgets."""

    spread: Annotated[Number, Field(ge=0, le=10)]
    time_min: Annotated[Number, Field(gt=0, le=1e6)]
    angle_deg: Annotated[Number, Field(gt=0, le=1e6)]
    brightness_per_mag: Annotated[Number, Field(ge=0, le=10)]


class Limits(_Part):
    """What the array will not do, and what its team will not accept."""

    altitude_min_deg: Annotated[Number, Field(ge=0, lt=90)]
    sun_altitude_max_deg: Annotated[Number, Field(ge=-90, le=0)]
    moon_distance_min_deg: Annotated[Number, Field(ge=0, le=180)]
    separation_max_deg: Annotated[Number, Field(gt=0, le=180)]
    v2_min: Annotated[Number, Field(ge=0, lt=1)]
    coarse_change_min: Annotated[Number, Field(ge=0, le=120)] = 0.0


class Station(_Part):
    """One telescope: where it stands and what its delay line can do (optical path)."""

    name: Name
    east_m: Metres
    north_m: Metres
    up_m: Metres
    fixed_path_m: Metres
    coarse_paths_m: Annotated[tuple[Metres, ...], Field(min_length=1, max_length=64)]
    cart_m: Annotated[Metres, Field(ge=0)]
    horizon: tuple[tuple[Annotated[Number, Field(ge=0, le=360)], Annotated[Number, Field(ge=0, lt=90)]], ...]


class Mode(_Part):
    """One way of using the camera; counts are of one baseline, both beams, all channels together."""

    name: Name
    band: Annotated[str, AfterValidator(_known_band)]
    wavelength_um: Wavelength
    bandwidth_um: Annotated[Number, Field(gt=0, le=60)]
    channels: Annotated[int, Field(ge=1, le=4096), BeforeValidator(_number)]
    frame_ms: Annotated[Number, Field(gt=0, le=1e6)]
    counts_per_frame_at_mag0: Annotated[Number, Field(ge=1e-3, le=1e15)]
    read_variance: Annotated[Number, Field(ge=0, le=1e12)]
    integration_s: Annotated[Number, Field(ge=0.1, le=86_400)]
    system_v2: Annotated[Number, Field(ge=1e-6, le=1)]
    limiting_magnitude: Annotated[Number, Field(ge=-5, le=30)]
    bright_limit_magnitude: Annotated[Number, Field(ge=-30, le=30)]
    field_arcsec: Annotated[Number, Field(gt=0, le=3600)]

    @model_validator(mode="after")
    def _fits(self) -> Self:
        if self.bandwidth_um >= 2 * self.wavelength_um:
            raise ValueError("bandwidth_um must be below twice wavelength_um")
        if self.bright_limit_magnitude >= self.limiting_magnitude:
            raise ValueError("bright_limit_magnitude must be below limiting_magnitude")
        return self


class Array(_Part):
    """An array: its site, its stations and its camera's modes."""

    name: Name
    latitude_deg: Annotated[Number, Field(ge=-90, le=90)]
    longitude_deg: Annotated[Number, Field(ge=-180, le=360)]
    height_m: Annotated[Number, Field(ge=-500, le=9000)]
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
        content: dict[str, Any] = tomllib.loads(Path(path).read_text(encoding="utf-8-sig"))
    except OSError as error:
        raise InputError(f"cannot read array file {path}: {error.strerror}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"array file {path} is not TOML: {error}") from error
    try:
        return Array.model_validate(content)
    except ValidationError as error:
        raise InputError(f"array file {path}: {describe(error)}") from error


def describe(error: ValidationError) -> str:
    """What a validation found, in one line: key, value and what it may be; three findings at the most."""
    found = [_finding(dict(one)) for one in error.errors(include_url=False)]
    more = f" (and {len(found) - 3} more)" if len(found) > 3 else ""
    return "; ".join(found[:3]) + more


def _finding(one: dict[str, Any]) -> str:
    parts = [part for part in one["loc"] if part not in _TAGS]
    key = "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in parts).lstrip(".")
    given = repr(one["input"])
    shown = given if len(given) <= 60 else f"{given[:57]}…"
    message = one["msg"].removeprefix("Value error, ")
    if one["type"] == "missing":
        return f"{key} is missing"
    if one["type"] == "extra_forbidden":
        return f"{key} is not a known key"
    if not key:
        return message
    hint = ""
    if (
        key.endswith("wavelength_um")
        and isinstance(one["input"], int | float)
        and 100 <= one["input"] <= 30_000
    ):
        hint = f" ({one['input']:g} nm is {one['input'] / 1000:g} um)"
    return f"{key} is {shown}: {message[0].lower()}{message[1:]}{hint}"


# Names of alternatives in the HTTP interface's questions; they stand in pydantic's paths, not in people's.
_TAGS = frozenset({"own-target", "named-target"})
