"""Figures of a ranking, drawn by Bokeh: the sky, V^2 against baseline, the night's windows, the sets."""

import math
from dataclasses import dataclass
from datetime import datetime
from typing import TYPE_CHECKING, Any

import numpy as np

from pinlight.fringes.visibility import disk_argument, visibility
from pinlight.sky.time import format_utc

if TYPE_CHECKING:
    from bokeh import plotting
    from bokeh.models import UIElement

    from pinlight.ranking.result import Ranking

__all__ = ["DARK", "LIGHT", "NO_DATA", "Palette", "draw", "plot_data", "plots"]

_CURVE_POINTS = 49
# A night's plot shows this many of the best stars.
_MOST_ROWS = 20


@dataclass(frozen=True)
class Palette:
    """Colours of the plots, the page's own; told apart in lightness as well as hue."""

    ink: str
    quiet: str
    line: str
    star: str
    best: str
    target: str
    pointed: str


LIGHT = Palette("#1c2630", "#5a6672", "#d3d7d9", "#7d909e", "#17658a", "#b5561c", "#1c2630")
DARK = Palette("#dfe4e6", "#98a4ad", "#37434e", "#6f8494", "#7cc3e0", "#f0a35e", "#ffffff")


# The plots before there is a ranking: every source with its columns, and ranges to begin with.
NO_DATA: dict[str, Any] = {
    "sources": {
        source: {column: [] for column in columns.split()}
        for source, columns in {
            "stars": "star_id name east north size in_best",
            "rings": "radius label zero",
            "compass": "east north label",
            "curves": "star_id baselines v2",
            "bands": "star_id baselines v2",
            "target": "baselines v2",
            "target_band": "baselines v2",
            "baselines": "length v2",
            "windows": "star_id row start end kind",
            "looks": "row start end",
            "sets": "size error names",
        }.items()
    },
    "ranges": {"sky": [1, -1, -1, 1], "visibility": [0, 1, 0, 1], "night": [0, 1, 1, 0]},
    "rows": [],
    "floor": 0.5,
}


def plot_data(ranking: "Ranking") -> dict[str, Any]:
    """What the plots of a ranking show: columns by source, and ranges; ready for JSON.

    The sky is zenithal equidistant about the target: a star's distance from the middle is its separation.
    V^2 is that of a uniform disc at the middle of the band, with the band that the diameter's error allows.
    """
    stars = ranking.calibrators
    best = set(ranking.paying_set.star_ids) if ranking.paying_set else set()
    east, north = _offsets_deg(ranking)
    field_deg = max(
        ranking.limits.separation_max_deg if not stars else max(s.separation_deg for s in stars), 0.5
    )
    step_deg = next(step for step in (0.2, 0.5, 1, 2, 5, 10, 20, 60) if field_deg / step <= 4)
    rings_deg = [step_deg * (i + 1) for i in range(math.ceil(field_deg / step_deg))]
    magnitudes = [star.magnitudes[ranking.setup.band][0] for star in stars]
    faintest = max(magnitudes, default=0.0)
    longest_m = float(ranking.setup.baselines_m.max())
    baselines_m = np.linspace(0, 1.04 * longest_m, _CURVE_POINTS)
    wavelength_um = ranking.setup.wavelength_um

    def curve(diameter_mas: float, error_mas: float) -> tuple[list[float], list[float], list[float]]:
        low, middle, high = (
            (visibility(disk_argument(max(theta, 0.0), baselines_m, wavelength_um)) ** 2).round(5).tolist()
            for theta in (diameter_mas + error_mas, diameter_mas, diameter_mas - error_mas)
        )
        return low, middle, high

    along = baselines_m.round(2).tolist()
    curves = [
        curve(star.uniform_disk_mas, math.hypot(star.own_error_mas, star.shared_error_mas)) for star in stars
    ]
    target = ranking.target
    of_target = [curve(target.diameter_mas, target.diameter_error_mas or 0.0)] if target.diameter_mas else []
    lowest = min((min(low) for low, _, _ in [*curves, *of_target]), default=0.0)
    names = [target.name or "target", *(star.name for star in stars[:_MOST_ROWS])]
    bars = [
        (row, 0 if row else -1, start, end)
        for row, windows in enumerate([ranking.target_windows, *(star.windows for star in stars[:_MOST_ROWS])])
        for start, end in windows or ()
    ]
    bottom = max(round(min(lowest, ranking.limits.v2_min), 2) - 0.06, 0.0)
    top = rings_deg[-1] * 1.06 if rings_deg else 1.0
    return {
        "sources": {
            "stars": {
                "star_id": [star.star_id for star in stars],
                "name": [star.name for star in stars],
                "east": east,
                "north": north,
                "size": [round(5 + 1.6 * min(faintest - magnitude, 5.0), 2) for magnitude in magnitudes],
                "in_best": ["best" if star.star_id in best else "star" for star in stars],
            },
            "rings": {
                "radius": rings_deg,
                "label": [f"{radius:g}°" for radius in rings_deg],
                "zero": [0.0] * len(rings_deg),
            },
            "compass": {"east": [0.98 * top], "north": [0.0], "label": ["E"]},
            "curves": {
                "star_id": [star.star_id for star in stars],
                "baselines": [along] * len(stars),
                "v2": [middle for _, middle, _ in curves],
            },
            "bands": {
                "star_id": [star.star_id for star in stars],
                "baselines": [along + along[::-1]] * len(stars),
                "v2": [low + high[::-1] for low, _, high in curves],
            },
            "target": {
                "baselines": [along] * len(of_target),
                "v2": [middle for _, middle, _ in of_target],
            },
            "target_band": {
                "baselines": [along + along[::-1]] * len(of_target),
                "v2": [low + high[::-1] for low, _, high in of_target],
            },
            "baselines": {
                "length": [round(float(length), 2) for length in ranking.setup.baselines_m],
                "v2": [bottom] * len(ranking.setup.baselines),
            },
            "windows": {
                "star_id": [None if row == 0 else stars[row - 1].star_id for row, _, _, _ in bars],
                "row": [row for row, _, _, _ in bars],
                "start": [_milliseconds(start) for _, _, start, _ in bars],
                "end": [_milliseconds(end) for _, _, _, end in bars],
                "kind": [
                    "target" if row == 0 else "best" if stars[row - 1].star_id in best else "star"
                    for row, _, _, _ in bars
                ],
            },
            "looks": {"row": [], "start": [], "end": []},
            "sets": {
                "size": [str(len(one.star_ids)) for one in ranking.best_sets],
                "error": [round(100 * one.calibration_error, 4) for one in ranking.best_sets],
                "names": [", ".join(ranking.names[i] for i in one.star_ids) for one in ranking.best_sets],
            },
        },
        "ranges": {
            "sky": [top, -top, -top, top],
            "visibility": [0.0, along[-1], bottom, 1.03],
            "night": [
                *([0.0, 1.0] if ranking.span is None else [_milliseconds(time) for time in ranking.span]),
                len(names) - 0.4,
                -0.6,
            ],
        },
        "rows": names,
        "floor": ranking.limits.v2_min,
    }


def _milliseconds(mjd_tai: float) -> float:
    """Since 1970 in UTC, as Bokeh counts time; a leap second counts as the second before it."""
    return datetime.fromisoformat(format_utc(mjd_tai).replace(":60Z", ":59Z")).timestamp() * 1000


def _offsets_deg(ranking: "Ranking") -> tuple[list[float], list[float]]:
    """Each calibrator's place east and north of the target, at its separation."""
    ra0, dec0 = math.radians(ranking.target.ra_deg), math.radians(ranking.target.dec_deg)
    east, north = [], []
    for star in ranking.calibrators:
        ra, dec = math.radians(star.ra_deg) - ra0, math.radians(star.dec_deg)
        angle = math.atan2(
            math.cos(dec) * math.sin(ra),
            math.sin(dec) * math.cos(dec0) - math.cos(dec) * math.sin(dec0) * math.cos(ra),
        )
        east.append(round(star.separation_deg * math.sin(angle), 4))
        north.append(round(star.separation_deg * math.cos(angle), 4))
    return east, north


def _plain(name: str, height: int, palette: Palette, **options: Any) -> "plotting.figure":
    """A figure without frame, tools or toolbar."""
    from bokeh.plotting import figure

    plot = figure(
        name=name, height=height, tools="", toolbar_location=None, background_fill_alpha=0.0,
        border_fill_alpha=0.0, outline_line_color=None, min_border=4, output_backend="canvas", **options,
    )  # fmt: skip
    plot.axis.axis_line_color = palette.line
    plot.axis.major_tick_line_color = palette.line
    plot.axis.minor_tick_line_color = None
    plot.axis.major_label_text_color = palette.quiet
    plot.axis.major_label_text_font_size = "12px"
    plot.axis.axis_label_text_color = palette.quiet
    plot.axis.axis_label_text_font_size = "12px"
    plot.axis.axis_label_text_font_style = "normal"
    plot.grid.grid_line_color = palette.line
    plot.grid.grid_line_alpha = 0.6
    return plot


def plots(palette: Palette, data: dict[str, Any]) -> dict[str, "plotting.figure"]:
    """The plots over named sources filled from `plot_data`: sky, visibility, night, sets.

    In each an empty glyph named ``pointed`` waits for the star that the reader points at.
    """
    from bokeh.models import ColumnDataSource

    sources = {name: ColumnDataSource(columns, name=name) for name, columns in data["sources"].items()}
    return {
        "sky": _sky(palette, sources, data),
        "visibility": _visibility(palette, sources, data),
        "night": _night(palette, sources, data),
        "sets": _sets(palette, sources),
    }


def _sky(palette: Palette, sources: dict[str, Any], data: dict[str, Any]) -> "plotting.figure":
    from bokeh.models import ColumnDataSource, Range1d
    from bokeh.transform import factor_cmap

    left, right, low, high = data["ranges"]["sky"]
    plot = _plain("sky", 360, palette, x_range=Range1d(left, right), y_range=Range1d(low, high), min_width=260)
    plot.axis.visible = False
    plot.grid.visible = False
    plot.circle(
        x="zero", y="zero", radius="radius", source=sources["rings"], fill_color=None,
        line_color=palette.line, radius_dimension="y",
    )  # fmt: skip
    plot.text(
        x="zero", y="radius", text="label", source=sources["rings"], text_color=palette.quiet,
        text_font_size="11px", text_align="center", text_baseline="bottom",
    )  # fmt: skip
    plot.text(
        x="east", y="north", text="label", source=sources["compass"], text_color=palette.quiet,
        text_font_size="12px", text_baseline="middle",
    )  # fmt: skip
    plot.scatter(
        x=[0], y=[0], marker="cross", size=18, line_color=palette.target, line_width=2.5, name="target_mark"
    )
    colours = factor_cmap("in_best", [palette.star, palette.best], ["star", "best"])
    plot.scatter(
        x="east", y="north", size="size", source=sources["stars"], fill_color=colours, line_color=None,
        fill_alpha=0.9,
    )  # fmt: skip
    pointed = ColumnDataSource({"x": [], "y": [], "name": []}, name="pointed_sky")
    plot.scatter(
        x="x", y="y", size=19, source=pointed, fill_color=None, line_color=palette.pointed, line_width=2.5
    )
    plot.text(
        x="x", y="y", text="name", source=pointed, text_color=palette.ink, text_font_size="13px",
        text_font_style="bold", text_align="center", text_baseline="bottom", y_offset=-13,
    )  # fmt: skip
    return plot


def _visibility(palette: Palette, sources: dict[str, Any], data: dict[str, Any]) -> "plotting.figure":
    from bokeh.models import ColumnDataSource, Range1d, Span

    left, right, low, high = data["ranges"]["visibility"]
    plot = _plain(
        "visibility", 260, palette, x_range=Range1d(left, right), y_range=Range1d(low, high),
        x_axis_label="baseline, m", y_axis_label="V²", min_width=260,
    )  # fmt: skip
    plot.xgrid.grid_line_color = None
    floor = Span(
        location=data["floor"], dimension="width", line_color=palette.quiet, line_dash="dotted", name="floor"
    )
    plot.add_layout(floor)
    plot.patches(
        xs="baselines", ys="v2", source=sources["bands"], fill_color=palette.star, fill_alpha=0.12,
        line_color=None,
    )  # fmt: skip
    plot.multi_line(
        xs="baselines", ys="v2", source=sources["curves"], line_color=palette.star, line_alpha=0.75,
        line_width=1.2,
    )  # fmt: skip
    plot.patches(
        xs="baselines", ys="v2", source=sources["target_band"], fill_color=palette.target, fill_alpha=0.25,
        line_color=None,
    )  # fmt: skip
    plot.multi_line(
        xs="baselines", ys="v2", source=sources["target"], line_color=palette.target, line_width=2.5,
        line_dash=[7, 3],
    )  # fmt: skip
    plot.scatter(
        x="length", y="v2", marker="dash", angle=math.pi / 2, size=13, source=sources["baselines"],
        line_color=palette.quiet, line_width=1.5, name="rug",
    )  # fmt: skip
    pointed = ColumnDataSource({"band_x": [], "band_y": [], "x": [], "y": []}, name="pointed_visibility")
    plot.patches(
        xs="band_x", ys="band_y", source=pointed, fill_color=palette.best, fill_alpha=0.35, line_color=None
    )
    plot.multi_line(xs="x", ys="y", source=pointed, line_color=palette.pointed, line_width=2.5)
    return plot


def _night(palette: Palette, sources: dict[str, Any], data: dict[str, Any]) -> "plotting.figure":
    from bokeh.models import ColumnDataSource, DatetimeTickFormatter, FixedTicker, Range1d
    from bokeh.transform import factor_cmap

    left, right, low, high = data["ranges"]["night"]
    rows = data["rows"]
    plot = _plain(
        "night", 74 + 19 * len(rows), palette, x_range=Range1d(left, right), y_range=Range1d(low, high),
        x_axis_type="datetime", x_axis_label="UTC", x_axis_location="above", min_width=260,
    )  # fmt: skip
    plot.xaxis.formatter = DatetimeTickFormatter(
        hours="%H:%M", hourmin="%H:%M", minutes="%H:%M", days="%H:%M", boundary_scaling=False
    )
    plot.yaxis.ticker = FixedTicker(ticks=list(range(len(rows))))
    plot.yaxis.major_label_overrides = dict(enumerate(rows))
    plot.yaxis.major_tick_line_color = None
    plot.yaxis.axis_line_color = None
    plot.ygrid.grid_line_color = None
    colours = factor_cmap("kind", [palette.star, palette.best, palette.target], ["star", "best", "target"])
    plot.hbar(
        y="row", left="start", right="end", height=0.52, source=sources["windows"], fill_color=colours,
        fill_alpha=0.8, line_color=None,
    )  # fmt: skip
    plot.hbar(
        y="row", left="start", right="end", height=0.86, source=sources["looks"], fill_color=palette.ink,
        line_color=None,
    )  # fmt: skip
    pointed = ColumnDataSource({"row": [], "start": [], "end": []}, name="pointed_night")
    plot.hbar(
        y="row", left="start", right="end", height=0.82, source=pointed, fill_color=None,
        line_color=palette.pointed, line_width=2.5,
    )  # fmt: skip
    return plot


def _sets(palette: Palette, sources: dict[str, Any]) -> "plotting.figure":
    from bokeh.models import FactorRange

    sizes = list(sources["sets"].data["size"])
    plot = _plain(
        "sets", 200, palette, x_range=FactorRange(factors=sizes), x_axis_label="calibrators in the set",
        y_axis_label="error, %", min_width=220,
    )  # fmt: skip
    plot.xgrid.grid_line_color = None
    plot.y_range.start = 0
    plot.vbar(
        x="size", top="error", width=0.5, source=sources["sets"], fill_color=palette.best, line_color=None
    )
    return plot


def draw(ranking: "Ranking", palette: Palette = LIGHT) -> "UIElement":
    """One Bokeh layout of a ranking: sky, V^2, sets and, with a clock, the night's windows."""
    from bokeh.layouts import column, row

    drawn = plots(palette, plot_data(ranking))
    drawn["sky"].width = drawn["sky"].height
    drawn["visibility"].width = 460
    drawn["sets"].width = 460
    parts: list[Any] = [row(drawn["sky"], column(drawn["visibility"], drawn["sets"]))]
    if ranking.span is not None:
        drawn["night"].width = 840
        parts.append(drawn["night"])
    return column(*parts)
