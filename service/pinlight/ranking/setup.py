"""A setup: the array, its chosen stations and one mode, or just a baseline and a wavelength."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.arrays.files import Array, Drift, Mode
from pinlight.arrays.geometry import Baseline, baselines
from pinlight.errors import InputError
from pinlight.fringes.visibility import channel_nodes
from pinlight.photometry.bands import nearest_band
from pinlight.photometry.systems import CATALOGUE_BANDS

__all__ = ["Setup", "Thresholds", "quick_setup", "setup_of"]

# Slewing and finding fringes between two looks (common practice, no source).
SLEW_MIN = 5.0
# Where no mode tells: the field, the faintest star listed, the largest separation and the V^2 floor.
QUICK_FIELD_ARCSEC = 2.0
QUICK_MAGNITUDE_MAX = 8.0
QUICK_SEPARATION_MAX_DEG = 10.0
QUICK_V2_MIN = 0.5


@dataclass(frozen=True)
class Thresholds:
    """The gates' numbers: the array's, or the caller's where given."""

    separation_max_deg: float
    v2_min: float
    magnitude_max: float | None
    magnitude_min: float | None

    def replace(
        self,
        separation_max_deg: float | None = None,
        v2_min: float | None = None,
        magnitude_max: float | None = None,
    ) -> "Thresholds":
        """The same limits with those that are given put in their place.

        Raises
        ------
        InputError
            If a number is impossible.
        """
        for name, value, low, high in (
            ("separation_max_deg", separation_max_deg, 0, 180),
            ("v2_min", v2_min, 0, 1),
            ("magnitude_max", magnitude_max, -5, 30),
        ):
            if value is not None and not low <= value <= high:  # NaN fails too
                raise InputError(f"{name} is {value:g}; it must lie between {low} and {high}")
        return Thresholds(
            self.separation_max_deg if separation_max_deg is None else separation_max_deg,
            self.v2_min if v2_min is None else v2_min,
            self.magnitude_max if magnitude_max is None else magnitude_max,
            self.magnitude_min,
        )


@dataclass(frozen=True)
class Setup:
    """What a budget needs of the instrument.

    `nodes_um`, shape (C, 3 or 1), and `weights` integrate each channel. `mode` and `drift` are
    None for the quick answer; the terms that need them are then left out. `look_interval_min`
    is the time between a calibrator's look and the target's. `dec_range_deg` are the declinations
    that rise above the array's altitude limit, None without an array.
    """

    array_name: str | None
    stations: tuple[str, ...]
    baselines: tuple[Baseline, ...]
    mode: Mode | None
    drift: Drift | None
    band: str
    wavelength_um: float
    nodes_um: NDArray[np.float64]
    weights: NDArray[np.float64]
    field_arcsec: float
    look_interval_min: float | None
    limits: Thresholds
    dec_range_deg: tuple[float, float] | None = None

    @property
    def mode_name(self) -> str | None:
        """The mode's name, None for the quick answer."""
        return self.mode.name if self.mode else None

    @property
    def baselines_m(self) -> NDArray[np.float64]:
        """Lengths of the baselines, longest first."""
        return np.array([baseline.length_m for baseline in self.baselines])

    def to_dict(self) -> dict[str, Any]:
        """As it stands in a ranking's JSON."""
        return {
            "array": self.array_name,
            "stations": list(self.stations),
            "baselines": [
                {"stations": list(baseline.stations), "length_m": round(baseline.length_m, 3)}
                for baseline in self.baselines
            ],
            "mode": self.mode_name,
            "band": self.band,
            "wavelength_um": self.wavelength_um,
            "bandwidth_um": self.mode.bandwidth_um if self.mode else None,
            "channels": self.mode.channels if self.mode else 1,
            "field_arcsec": self.field_arcsec,
            "look_interval_min": self.look_interval_min,
        }


def setup_of(array: Array, stations: list[str] | None = None, mode: str | None = None) -> Setup:
    """The setup of an array's stations (all by default) and mode.

    Raises
    ------
    InputError
        If a station or mode is unknown, or the catalogue has no magnitudes in the mode's band.
    """
    chosen_stations, chosen_mode = array.choose_stations(stations), array.choose_mode(mode)
    if chosen_mode.band not in CATALOGUE_BANDS:
        may_be = ", ".join(CATALOGUE_BANDS)
        raise InputError(f"band of mode {chosen_mode.name} is {chosen_mode.band}; stars have {may_be}")
    nodes_um, weights = channel_nodes(chosen_mode.wavelength_um, chosen_mode.bandwidth_um, chosen_mode.channels)
    return Setup(
        array_name=array.name,
        stations=tuple(station.name for station in chosen_stations),
        baselines=baselines(chosen_stations),
        mode=chosen_mode,
        drift=array.drift,
        band=chosen_mode.band,
        wavelength_um=chosen_mode.wavelength_um,
        nodes_um=nodes_um,
        weights=weights,
        field_arcsec=chosen_mode.field_arcsec,
        look_interval_min=chosen_mode.integration_s / 60 + SLEW_MIN,
        limits=Thresholds(
            array.limits.separation_max_deg,
            array.limits.v2_min,
            chosen_mode.limiting_magnitude,
            chosen_mode.bright_limit_magnitude,
        ),
        dec_range_deg=_dec_range_deg(array),
    )


def _dec_range_deg(array: Array) -> tuple[float, float]:
    """Declinations whose culmination, 90 - |latitude - dec|, lies above the altitude limit."""
    reach = 90 - array.limits.altitude_min_deg
    return array.latitude_deg - reach, array.latitude_deg + reach


def quick_setup(baseline_m: float, wavelength_um: float) -> Setup:
    """One baseline at one wavelength.

    Raises
    ------
    InputError
        If a number is impossible; a wavelength that looks like nanometres is told so.
    """
    if not 0 < baseline_m <= 100_000:
        raise InputError(f"baseline_m is {baseline_m:g}; it must lie above 0 and not above 100000")
    if not 0.1 <= wavelength_um <= 30:
        in_nm = 100 <= wavelength_um <= 30_000
        hint = f" ({wavelength_um:g} nm is {wavelength_um / 1000:g} um)" if in_nm else ""
        raise InputError(f"wavelength_um is {wavelength_um:g}; it must lie between 0.1 and 30{hint}")
    return Setup(
        array_name=None,
        stations=(),
        baselines=(Baseline(("1", "2"), float(baseline_m)),),
        mode=None,
        drift=None,
        band=nearest_band(wavelength_um, CATALOGUE_BANDS),
        wavelength_um=float(wavelength_um),
        nodes_um=np.array([[float(wavelength_um)]]),
        weights=np.array([1.0]),
        field_arcsec=QUICK_FIELD_ARCSEC,
        look_interval_min=None,
        limits=Thresholds(QUICK_SEPARATION_MAX_DEG, QUICK_V2_MIN, QUICK_MAGNITUDE_MAX, None),
    )
