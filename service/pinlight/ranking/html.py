"""A ranking as rich HTML: the strip of a budget, and the table that notebooks show."""

from html import escape
from typing import TYPE_CHECKING

from pinlight.ranking.budget import TERMS

if TYPE_CHECKING:
    from pinlight.ranking.result import Calibrator, Ranking

__all__ = ["TERM_COLOURS", "budget_strip", "ranking_html"]

# Told apart in lightness as well as hue, also by colour-blind readers; the page's style sheet has them too.
TERM_COLOURS = {
    "diameter": "#222a57",
    "photon": "#bc8f36",
    "drift": "#5ca3bc",
    "brightness": "#b4b9a8",
    "companion": "#833c25",
    "shape": "#6a5da3",
}
_LISTED = 10


def budget_strip(star: "Calibrator", widest: float) -> str:
    """A star's budget as an SVG strip, as long as its error in parts of `widest`.

    Within it each term has the share of its square, since it is the squares that add up.
    """
    parts, start = [], 0.0
    known = {name: star.budget[name] for name in TERMS if star.budget[name] is not None}
    for name, term in known.items():
        if term:
            width = 100 * star.calibration_error / widest * (term / star.calibration_error) ** 2
            parts.append(
                f'<rect class="{name}" x="{start:.3f}" width="{width:.3f}" height="6">'
                f"<title>{name} {100 * term:.2f} %</title></rect>"
            )
            start += width
    told = ", ".join(f"{name} {100 * (term or 0):.2f} %" for name, term in known.items())
    return (
        f'<svg viewBox="0 0 100 6" preserveAspectRatio="none" role="img" aria-label="{told}">'
        f"{''.join(parts)}</svg>"
    )


def ranking_html(ranking: "Ranking") -> str:
    """The best ten stars as a table with strips, complete in itself."""
    stars = ranking.calibrators[:_LISTED]
    widest = max((star.calibration_error for star in stars), default=1.0)
    colours = "".join(f".pinlight .{name}{{fill:{colour}}}" for name, colour in TERM_COLOURS.items())
    rows = "".join(
        f"<tr><td>{star.rank}</td><td style='text-align:left'>{escape(star.name)}</td>"
        f"<td><b>{100 * star.calibration_error:.2f}</b></td>"
        f"<td style='width:14em'>{budget_strip(star, widest)}</td><td>{star.separation_deg:.1f}</td>"
        f"<td>{escape(star.spectral_type)}</td><td>{star.magnitudes[ranking.setup.band][0]:.2f}</td>"
        f"<td>{star.limb_darkened_mas:.3f}</td><td>{star.v2_min:.2f}</td></tr>"
        for star in stars
    )
    headings = (
        "",
        "star",
        "error %",
        "where it comes from",
        "away °",
        "type",
        ranking.setup.band,
        "mas",
        "V² from",
    )
    key = " ".join(f"<span style='color:{colour}'>■</span> {name}" for name, colour in TERM_COLOURS.items())
    left_out = ", ".join(f"{count} {reason.replace('_', ' ')}" for reason, count in ranking.excluded.items())
    return (
        f"<div class='pinlight'><style>{colours} .pinlight svg{{width:100%;height:.8em;display:block}}</style>"
        f"<p><b>{escape(ranking.target.name) or 'Target'}</b>: {ranking.ranked} stars rank. {key}</p>"
        f"<table><thead><tr>{''.join(f'<th>{heading}</th>' for heading in headings)}</tr></thead>"
        f"<tbody>{rows}</tbody></table><p>Left out: {left_out or 'none'}. Edition {ranking.edition}.</p></div>"
    )
