"""Answers on paper: a plan as CSV, iCalendar and a printable page, rankings as a printable page."""

import csv
import io
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from importlib.resources import files
from typing import Any

from pinlight.planning.night import NightPlan
from pinlight.ranking.figure import draw
from pinlight.ranking.gates import REASONS, REMARKS
from pinlight.ranking.html import TERM_COLOURS, budget_strip
from pinlight.ranking.result import Ranking
from pinlight.sky.time import format_utc
from pinlight.version import __version__

__all__ = ["plan_csv", "plan_ics", "plan_page", "plan_rows", "ranking_page", "timeline"]

_COLUMNS = ("block", "target", "role", "name", "star_id", "start_utc", "end_utc", "calibration_error_percent")


def plan_rows(plan: NightPlan) -> list[dict[str, Any]]:
    """A night's looks as rows of one table, numbered by block."""
    rows = []
    for number, block in enumerate(plan.to_dict()["blocks"], start=1):
        for look in block["looks"]:
            facts = block | look | {"block": number}
            rows.append({column: facts[column] for column in _COLUMNS})
    return rows


def plan_csv(plan: NightPlan) -> str:
    """One line a look."""
    text = io.StringIO()
    writer = csv.DictWriter(text, _COLUMNS, lineterminator="\n")
    writer.writeheader()
    writer.writerows(plan_rows(plan))
    return text.getvalue()


def _moment(mjd_tai: float) -> datetime:
    text = format_utc(mjd_tai).replace(":60Z", ":59Z")  # datetime knows no leap second
    return datetime.fromisoformat(text)


def plan_ics(plan: NightPlan) -> str:
    """One event a block, RFC 5545."""
    from icalendar import Calendar, Event

    calendar = Calendar()
    calendar.add("prodid", f"-//Pinlight//{__version__}//EN")
    calendar.add("version", "2.0")
    for number, block in enumerate(plan.blocks, start=1):
        event = Event()
        start = format_utc(block.start)
        event.add("uid", f"{plan.edition}-{start}-{number}@pinlight")
        event.add("dtstamp", datetime.now(UTC))
        event.add("dtstart", _moment(block.start))
        event.add("dtend", _moment(block.end))
        event.add("summary", f"{block.target} ({100 * block.calibration_error:.2f} %)")
        paths = ", ".join(f"{name} {path:g} m" for name, path in block.coarse_paths_m.items())
        looks = "\n".join(f"{format_utc(look.start)[11:16]} {look.role} {look.name}" for look in block.looks)
        event.add("description", f"{looks}\nCoarse paths: {paths}")
        if plan.setup.array_name:
            event.add("location", plan.setup.array_name)
        calendar.add_component(event)
    return str(calendar.to_ical().decode("utf-8"))


def plan_page(plan: NightPlan) -> str:
    """One HTML file that needs no network and prints well."""
    return _paper("plan.html", plan=plan, timeline=timeline(plan))


def ranking_page(rankings: Sequence[Ranking]) -> str:
    """Rankings with their charts as one HTML file that needs no network and prints well."""
    from bokeh.embed import components

    drawn = {str(index): draw(one) for index, one in enumerate(rankings) if one.calibrators}
    script, places = components(drawn, wrap_script=False) if drawn else ("", {})
    code = files("bokeh").joinpath("server/static/js/bokeh.min.js").read_text(encoding="utf-8")
    return _paper(
        "ranking.html", rankings=rankings, places=places, script=script, bokeh=code if drawn else "",
        terms=TERM_COLOURS, reasons=REASONS, remarks=REMARKS,
    )  # fmt: skip


def _paper(template: str, **context: Any) -> str:
    from jinja2 import Environment, FileSystemLoader, select_autoescape

    folder = str(files("pinlight.faces").joinpath("templates"))
    environment = Environment(
        loader=FileSystemLoader(folder), autoescape=select_autoescape(), trim_blocks=True, lstrip_blocks=True
    )
    environment.filters |= {
        "clock": lambda time: format_utc(time)[11:16], "utc": format_utc, "strip": budget_strip,
        "words": lambda text: text.replace("_", " "),
    }  # fmt: skip
    return environment.get_template(template).render(version=__version__, **context)


def timeline(plan: NightPlan) -> dict[str, Any]:
    """Whole hours, blocks and looks as shares of the night, in per cent."""
    start, end = plan.span

    def share(mjd_tai: float) -> float:
        return round(100 * (mjd_tai - start) / (end - start), 3)

    first, last = (datetime.fromisoformat(format_utc(time).replace(":60Z", ":59Z")) for time in plan.span)
    hour = first.replace(minute=0, second=0) + timedelta(hours=1)
    marks = []
    while hour < last:
        marks.append((round(100 * (hour - first) / (last - first), 3), f"{hour:%H}"))
        hour += timedelta(hours=1)
    return {
        "marks": marks,
        "blocks": [
            {
                "target": block.target,
                "start": share(block.start),
                "width": round(share(block.end) - share(block.start), 3),
                "looks": [
                    (look, share(look.start), round(share(look.end) - share(look.start), 3))
                    for look in block.looks
                ],
            }
            for block in plan.blocks
        ],
    }
