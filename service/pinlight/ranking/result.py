"""The one result object behind every face."""

import itertools
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from pinlight.ranking.budget import TERMS
from pinlight.ranking.setup import Setup, Thresholds
from pinlight.ranking.target import Target
from pinlight.sky.time import format_utc
from pinlight.sky.windows import Window

if TYPE_CHECKING:
    from astropy.table import QTable
    from bokeh.models import UIElement

__all__ = ["Calibrator", "CalibratorSet", "LeftOut", "Ranking", "windows_json"]


# One more calibrator pays while it lowers the set's error by this part of it.
_WORTH_IT = 0.05


def _rounded(value: float | None, digits: int) -> float | None:
    """JSON has no NaN and no infinity; both become null."""
    return None if value is None or not math.isfinite(value) else round(float(value), digits)


def windows_json(windows: Iterable[Window]) -> list[dict[str, str]]:
    """Windows as they stand in JSON."""
    return [{"start_utc": format_utc(start), "end_utc": format_utc(end)} for start, end in windows]


@dataclass(frozen=True)
class CalibratorSet:
    """Stars looked at together, and their calibration error, relative.

    With a clock, `windows` tell when all are in reach with the target under one coarse setting, the one that
    serves them for longest, `coarse_paths_m`.
    """

    star_ids: tuple[int, ...]
    calibration_error: float
    windows: tuple[Window, ...] | None = None
    coarse_paths_m: dict[str, float] | None = None

    def to_dict(self, names: Mapping[int, str]) -> dict[str, Any]:
        """As it stands in a ranking's JSON."""
        return {
            "size": len(self.star_ids),
            "star_ids": list(self.star_ids),
            "names": [names[star_id] for star_id in self.star_ids],
            "calibration_error_percent": _rounded(100 * self.calibration_error, 4),
            "window_utc": None if self.windows is None else windows_json(self.windows),
            "coarse_paths_m": self.coarse_paths_m,
        }


@dataclass(frozen=True)
class Calibrator:
    """One ranked star. Errors in `budget` and `calibration_error` are relative, not percent."""

    rank: int
    star_id: int
    name: str
    ra_deg: float
    dec_deg: float
    separation_deg: float
    spectral_type: str
    magnitudes: dict[str, tuple[float, float]]
    limb_darkened_mas: float
    uniform_disk_mas: float
    own_error_mas: float
    shared_error_mas: float
    relations: tuple[str, ...]
    flags: tuple[str, ...]
    v2_min: float
    v2_max: float
    longest_baseline_m: float
    budget: dict[str, float | None]
    calibration_error: float
    standing: str | None
    windows: tuple[Window, ...] | None
    coarse_paths_m: dict[str, float] | None

    def to_dict(self, band: str) -> dict[str, Any]:
        """As it stands in a ranking's JSON."""
        own, shared = round(self.own_error_mas, 5), round(self.shared_error_mas, 5)
        return {
            "rank": self.rank,
            "star_id": self.star_id,
            "name": self.name,
            "ra_deg": round(self.ra_deg, 7),
            "dec_deg": round(self.dec_deg, 7),
            "separation_deg": round(self.separation_deg, 4),
            "spectral_type": self.spectral_type,
            "flags": list(self.flags),
            "magnitudes": {
                name: {"value": round(value, 3), "error": round(error, 3)}
                for name, (value, error) in self.magnitudes.items()
            },
            "diameter": {
                "limb_darkened_mas": round(self.limb_darkened_mas, 5),
                "uniform_disk_mas": round(self.uniform_disk_mas, 5),
                "band": band,
                "own_error_mas": own,
                "shared_error_mas": shared,
                "error_mas": round(math.hypot(own, shared), 5),
                "relations": list(self.relations),
                "discordant": "discordant" in self.flags,
            },
            "visibility": {
                "v2_min": round(self.v2_min, 5),
                "v2_max": round(self.v2_max, 5),
                "longest_baseline_m": round(self.longest_baseline_m, 3),
            },
            "budget_percent": {
                name: _rounded(None if (term := self.budget[name]) is None else 100 * term, 4) for name in TERMS
            },
            "calibration_error_percent": _rounded(100 * self.calibration_error, 4),
            "standing": self.standing,
            "window_utc": None if self.windows is None else windows_json(self.windows),
            "coarse_paths_m": self.coarse_paths_m,
        }


@dataclass(frozen=True)
class LeftOut:
    """A star that failed a gate, and how far from the target it is."""

    star_id: int
    name: str
    separation_deg: float


@dataclass(frozen=True)
class Ranking:
    """The calibrators of one target, best first, and why all other stars are not among them.

    `excluded` counts every star of the edition that failed a gate, by reason; with the
    `ranked` stars, of which the best are `calibrators`, it adds up to `stars`. `best_sets` has
    the best set of each size from 1, with a clock only of stars that are in reach at one time under
    one coarse setting; `named_set` is one that the caller asked for. With a clock,
    `span` is the time looked at, `target_windows` are the target's, and `coarse_paths_m` the
    coarse delay settings that give it its longest one; a star's and a set's own settings stand with
    them. `names` are the names of the stars in sets;
    `left_out` names the nearest of the excluded stars by reason, those too far from the target not among them.
    """

    edition: str
    pinlight: str
    target: Target
    setup: Setup
    limits: Thresholds
    judge: str
    best: int
    calibrators: tuple[Calibrator, ...]
    stars: int
    ranked: int
    excluded: dict[str, int]
    best_sets: tuple[CalibratorSet, ...]
    named_set: CalibratorSet | None
    span: Window | None
    target_windows: tuple[Window, ...] | None
    coarse_paths_m: dict[str, float] | None
    names: dict[int, str]
    left_out: dict[str, tuple[LeftOut, ...]]
    notes: tuple[str, ...]

    @property
    def paying_set(self) -> CalibratorSet | None:
        """The smallest best set whose error one more star would lower by less than 5 % of it."""
        for one, larger in itertools.pairwise(self.best_sets):
            if larger.calibration_error > (1 - _WORTH_IT) * one.calibration_error:
                return one
        return self.best_sets[-1] if self.best_sets else None

    def to_dict(self) -> dict[str, Any]:
        """The JSON of a ranking, as described in the project's interface."""
        return {
            "edition": self.edition,
            "pinlight": self.pinlight,
            "target": self.target.to_dict(self.setup.band),
            "setup": self.setup.to_dict(),
            "parameters": {
                "separation_max_deg": self.limits.separation_max_deg,
                "magnitude_max": self.limits.magnitude_max,
                "v2_min": self.limits.v2_min,
                "judge": self.judge,
                "best": self.best,
            },
            "calibrators": [star.to_dict(self.setup.band) for star in self.calibrators],
            "counts": {"stars": self.stars, "ranked": self.ranked, "listed": len(self.calibrators)},
            "excluded": dict(self.excluded),
            "best_sets": [one.to_dict(self.names) for one in self.best_sets],
            "named_set": None if self.named_set is None else self.named_set.to_dict(self.names),
            "span_utc": None if self.span is None else windows_json([self.span])[0],
            "target_window_utc": None if self.target_windows is None else windows_json(self.target_windows),
            "coarse_paths_m": self.coarse_paths_m,
            "notes": list(self.notes),
        }

    def table(self) -> "QTable":
        """The calibrators as an astropy table with units, which ECSV, FITS and VOTable files can hold."""
        from astropy import units
        from astropy.table import QTable

        stars = self.calibrators
        percent = {
            f"{name}_error_percent": [
                math.nan if (term := star.budget[name]) is None else 100 * term for star in stars
            ]
            for name in TERMS
        }
        return QTable(
            {
                "rank": [star.rank for star in stars],
                "star_id": [star.star_id for star in stars],
                "name": [star.name for star in stars],
                "ra": [star.ra_deg for star in stars] * units.deg,
                "dec": [star.dec_deg for star in stars] * units.deg,
                "separation": [star.separation_deg for star in stars] * units.deg,
                "spectral_type": [star.spectral_type for star in stars],
                "limb_darkened_diameter": [star.limb_darkened_mas for star in stars] * units.mas,
                "uniform_disk_diameter": [star.uniform_disk_mas for star in stars] * units.mas,
                "own_error": [star.own_error_mas for star in stars] * units.mas,
                "shared_error": [star.shared_error_mas for star in stars] * units.mas,
                "v2_min": [star.v2_min for star in stars],
                "v2_max": [star.v2_max for star in stars],
                **percent,
                "calibration_error_percent": [100 * star.calibration_error for star in stars],
            },
            meta={
                "edition": self.edition,
                "pinlight": self.pinlight,
                "target": self.target.name,
                "excluded": " ".join(f"{reason}={count}" for reason, count in self.excluded.items()),
                "notes": " ".join(self.notes),
            },
        )

    def figure(self) -> "UIElement":
        """Sky, V^2 against baseline, sets and the night's windows as one Bokeh layout."""
        from pinlight.ranking.figure import draw

        return draw(self)

    def _repr_html_(self) -> str:
        from pinlight.ranking.html import ranking_html

        return ranking_html(self)
