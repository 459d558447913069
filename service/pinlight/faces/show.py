"""What the command prints for people: tables and lines on the terminal."""

import math
import sys
from typing import Any

from rich.console import Console
from rich.markup import escape
from rich.table import Table

from pinlight.diameters.relations import Relation, RelationSet
from pinlight.planning.night import NightPlan
from pinlight.ranking.budget import TERMS
from pinlight.ranking.gates import REMARKS
from pinlight.ranking.result import Ranking
from pinlight.sky.time import format_utc
from pinlight.sky.windows import Window

__all__ = [
    "relation_facts",
    "show_diameter",
    "show_diameters",
    "show_plan",
    "show_ranking",
    "show_relation_checks",
    "show_relations",
    "show_star",
    "show_track",
]

_SHORT = {"diameter": "diam.", "brightness": "bright.", "companion": "comp."}
_CAUTION = (
    "Advice to responsible operators: the observatory's own operating limits, Sun avoidance and laser and "
    "aircraft rules come first."
)


def _console() -> Console:
    return Console(width=None if sys.stdout.isatty() else 150, highlight=False)


def _hours(windows: tuple[Window, ...] | None) -> str:
    """Windows as hours and minutes of UTC."""
    spans = [f"{format_utc(start)[11:16]}–{format_utc(end)[11:16]}" for start, end in windows or ()]
    return ", ".join(spans) or "none"


def show_ranking(ranking: Ranking, most: int | None = None) -> None:
    """A ranking as a table; on a narrow screen only each star's largest term is named."""
    console, setup = _console(), ranking.setup
    with_what = f"{escape(setup.array_name or '')}, {escape(setup.mode.name)}" if setup.mode else "one baseline"
    longest = f"baselines to {setup.baselines_m.max():.0f} m, {setup.wavelength_um:g} um"
    console.print(f"\n[bold]{escape(ranking.target.name) or 'Target'}[/bold]  {with_what}, {longest}")
    wide = console.width >= 130
    table = Table(box=None, pad_edge=False, header_style="dim")
    term_headings = [*(_SHORT.get(name, name) for name in TERMS), "V2 min"] if wide else ["mostly"]
    headings = ["", "star", "error %", *term_headings, "sep deg", "type", setup.band, "diameter mas"]
    if ranking.span is not None:
        headings.append("UTC")
        hours = (
            f"{_hours(ranking.target_windows)} UTC in one coarse setting"
            if ranking.target_windows
            else "at no time"
        )
        console.print(f"in reach {hours}, from {format_utc(ranking.span[0])}")
    for heading in headings:
        left = heading in ("star", "type", "mostly")
        bold = "bold" if heading == "error %" else ""
        width = 9 if heading == "star" else None
        table.add_column(
            heading, justify="left" if left else "right", style=bold, no_wrap=True, min_width=width
        )
    table.add_column("remarks" if wide else "", style="dim", no_wrap=True, max_width=18 if wide else 1)
    for star in ranking.calibrators[:most]:
        total_mas = math.hypot(star.own_error_mas, star.shared_error_mas)
        terms = {name: term for name, term in star.budget.items() if term is not None}
        shown = (
            [f"{100 * terms[name]:.2f}" if name in terms else "–" for name in TERMS] + [f"{star.v2_min:.2f}"]
            if wide
            else [max(terms, key=lambda name: terms[name])]
        )
        remarks = ", ".join(flag for flag in star.flags if flag in REMARKS).replace("_", " ")
        table.add_row(
            str(star.rank), star.name, f"{100 * star.calibration_error:.2f}", *shown,
            f"{star.separation_deg:.1f}", star.spectral_type, f"{star.magnitudes[setup.band][0]:.2f}",
            f"{star.limb_darkened_mas:.3f} ± {total_mas:.3f}",
            *([_hours(star.windows)] if ranking.span else []), remarks if wide else "*" if remarks else "",
        )  # fmt: skip
    if ranking.calibrators:
        console.print(table)
    else:
        console.print("No star passes every gate.")
    for one in ranking.best_sets[1:] if most is None else ():
        names = ", ".join(ranking.names[star_id] for star_id in one.star_ids)
        console.print(f"best set of {len(one.star_ids)}: {100 * one.calibration_error:.2f} %  {names}")
    if ranking.named_set:
        names = ", ".join(ranking.names[star_id] for star_id in ranking.named_set.star_ids)
        console.print(f"the set named: {100 * ranking.named_set.calibration_error:.2f} %  {names}")
    counts = [f"{count} {reason.replace('_', ' ')}" for reason, count in ranking.excluded.items()]
    console.print(f"[dim]{ranking.ranked} stars rank. Left out: {', '.join(counts) or 'none'}.[/dim]")
    for note in ranking.notes:
        console.print(f"[dim]{note}[/dim]")


def show_star(facts: dict[str, Any]) -> None:
    """A star's facts and how its diameter came about."""
    console = _console()
    also = ", ".join(facts["identifiers"][1:])
    console.print(f"\n[bold]{facts['name']}[/bold]  {facts['spectral_type'] or 'no spectral type'}   {also}")
    console.print(f"ra {facts['ra_deg']:.6f}  dec {facts['dec_deg']:+.6f} deg (ICRS, epoch 2000)")
    motion = (facts["pm_ra_mas_yr"], facts["pm_dec_mas_yr"], facts["parallax_mas"])
    written = ["–" if value is None else f"{value:g}" for value in motion]
    console.print(f"proper motion {written[0]}, {written[1]} mas/yr, parallax {written[2]} mas")
    console.print(f"flags: {', '.join(facts['flags']) or 'none'}; standing: {facts['standing'] or 'none'}")
    for near in facts["companions"]:
        console.print(f"neighbour {near['name']} at {near['separation_arcsec']:.1f} arcsec")
    mags = [
        f"{band} {entry['value']:.3f} ± {entry['error']:.3f}" + ("*" if entry["error_assumed"] else "")
        for band, entry in facts["magnitudes"].items()
    ]
    console.print("  ".join(mags))
    if any(entry["error_assumed"] for entry in facts["magnitudes"].values()):
        console.print("[dim]* the source gives no error; this is the band's default[/dim]")
    diameter = facts["diameter"]
    if diameter is None:
        console.print("No published relation applies to its type and colours: no diameter.")
        return
    console.print()
    _diameter_line(console, diameter)
    _disk_line(console, diameter["uniform_disk_mas_by_band"])
    console.print(
        f"as a {_group(diameter)}, Teff {diameter['teff_k']:.0f} K, log g {diameter['logg']:.1f},"
        f" A_V {diameter['av_mag']:.2f} ± {diameter['av_error_mag']:.2f};"
        f" chi2 {diameter['chi_squared']:.1f} on {diameter['degrees_of_freedom']}"
    )
    if diameter["discordant"]:
        console.print(f"[bold]discordant[/bold]: {diameter['culprit']} disagrees most")
    _parts_table(console, diameter["relations"])


def _parts_table(console: Console, parts: list[dict[str, Any]]) -> None:
    """What each relation gives, weighs, and how far it lies from the mean and from the others."""
    table = Table(box=None, pad_edge=False, header_style="dim")
    for heading in ("relation", "diameter mas", "weight", "residual %", "pull"):
        table.add_column(heading, justify="left" if heading == "relation" else "right")
    for part in parts:
        pull = "–" if part["pull"] is None else f"{part['pull']:+.2f}"
        table.add_row(
            escape(part["relation"]), f"{part['diameter_mas']:.4f}", f"{part['weight']:+.3f}",
            f"{part['residual_percent']:+.1f}", pull,
        )  # fmt: skip
    console.print(table)


def _disk_line(console: Console, disks: dict[str, float] | None) -> None:
    if disks:
        console.print("as a uniform disc: " + "  ".join(f"{band} {value:.4f}" for band, value in disks.items()))


def _group(found: dict[str, Any]) -> str:
    """The luminosity group, with its probability where the type does not state it."""
    probability = found["luminosity_probabilities"][found["luminosity_group"]]
    return found["luminosity_group"] + (f" (probability {probability:.2f})" if probability < 1 else "")


def _diameter_line(console: Console, found: dict[str, Any]) -> None:
    console.print(
        f"limb-darkened diameter [bold]{found['limb_darkened_mas']:.4f} ± {found['error_mas']:.4f} mas[/bold]"
        f"  (own {found['own_error_mas']:.4f}, shared {found['shared_error_mas']:.4f})"
    )


def show_diameter(answer: dict[str, Any]) -> None:
    """A diameter from magnitudes and its parts."""
    result, console = answer["diameter"], _console()
    _diameter_line(console, result)
    console.print(f"uniform-disc diameter in {result['band']}: {result['uniform_disk_mas']:.4f} mas")
    _disk_line(console, answer["uniform_disk_mas_by_band"])
    extinction = f"A_V {answer['av_mag']:.2f} ± {answer['av_error_mag']:.2f}"
    atmosphere = "".join(
        f"{name} {answer[key]}{unit}, "
        for name, key, unit in (("Teff", "teff_k", " K"), ("log g", "logg", ""))
        if answer[key] is not None
    )
    console.print(
        f"as a {_group(answer)}, {atmosphere}{extinction};"
        f" chi2 {answer['chi_squared']:.1f} on {answer['degrees_of_freedom']}"
    )
    if result["discordant"]:
        console.print(f"[bold]discordant[/bold]: {answer['culprit']} disagrees most")
    _parts_table(console, answer["parts"])
    own = f" with those of {escape(answer['relations_file'])}" if answer["relations_file"] else ""
    console.print(f"[dim]relation set {answer['relation_set']}{own}[/dim]")


def show_diameters(answers: list[dict[str, Any]]) -> None:
    """Diameters of many stars, a line each."""
    console = _console()
    table = Table(box=None, pad_edge=False, header_style="dim")
    for heading in ("star", "limb-darkened mas", "uniform mas", "as a", "relations"):
        table.add_column(heading, justify="right" if heading.endswith("mas") else "left")
    for number, answer in enumerate(answers, start=1):
        name, found = escape(answer["name"] or f"row {number}"), answer["diameter"]
        if found is None:
            table.add_row(name, "–", "–", "", escape(answer["reason"]))
            continue
        remark = "discordant; " if found["discordant"] else ""
        table.add_row(
            name, f"{found['limb_darkened_mas']:.4f} ± {found['error_mas']:.4f}",
            f"{found['uniform_disk_mas']:.4f}", answer["luminosity_group"],
            remark + ", ".join(found["relations"]),
        )  # fmt: skip
    console.print(table)


def relation_facts(relation_set: RelationSet) -> dict[str, Any]:
    """A relation set, ready for JSON."""

    def facts(relation: Relation) -> dict[str, Any]:
        return {
            "relation": relation.name,
            "active": relation.active,
            "sample": relation.sample,
            "reference": relation.reference,
            "doi": relation.doi,
            "luminosity": list(relation.luminosity),
            "form": relation.form,
            "zero_band": relation.zero_band,
            "colour": [relation.bluer, relation.redder],
            "coefficients": list(relation.coefficients),
            "colour_min": relation.colour_min,
            "colour_max": relation.colour_max,
            "scatter_percent": relation.scatter_percent,
            "common_percent": relation.common_percent,
            "shared_percent": relation.shared_percent,
            "origin": relation.origin,
            "note": relation.note,
        }

    return {
        "relation_set": relation_set.hash,
        "relations_file": relation_set.file or None,
        "relations": [facts(relation) for relation in (*relation_set.relations, *relation_set.carried)],
    }


def show_relations(answer: dict[str, Any]) -> None:
    """The relations in use as a table, and what is only carried."""
    console = _console()
    own = f", with those of {escape(answer['relations_file'])}" if answer["relations_file"] else ""
    console.print(f"relation set {answer['relation_set']}{own}")
    table = Table(box=None, pad_edge=False, header_style="dim")
    headings = ("relation", "colour", "range", "scatter %", "shared %", "origin", "for", "reference")
    rows = [
        (
            escape(one["relation"]), " – ".join(one["colour"]),
            f"{one['colour_min']:g} to {one['colour_max']:g}", f"{one['scatter_percent']:g}",
            f"{one['shared_percent']:g}", one["origin"], ", ".join(one["luminosity"]),
            escape(one["reference"]),
        )
        for one in answer["relations"]
        if one["active"]
    ]  # fmt: skip
    for place, heading in enumerate(headings):  # only the last two fold on a narrow screen
        width = None if place >= len(headings) - 2 else max(len(row[place]) for row in rows)
        table.add_column(heading, justify="right" if heading.endswith("%") else "left", min_width=width)
    for row in rows:
        table.add_row(*row)
    console.print(table)
    carried: dict[str, list[str]] = {}
    for one in answer["relations"]:
        if not one["active"]:
            carried.setdefault(one["note"], []).append(one["relation"])
    for note, names in carried.items():
        console.print(f"[dim]not used: {escape(', '.join(names))}: {escape(note)}[/dim]")


def show_relation_checks(answer: dict[str, Any]) -> None:
    """How each relation does on measured stars, a line a class and colour bin."""
    console = _console()
    own = f", with those of {escape(answer['relations_file'])}" if answer["relations_file"] else ""
    console.print(f"relation set {answer['relation_set']}{own}: predicted less measured, per cent")
    table = Table(box=None, pad_edge=False, header_style="dim")
    for heading in ("relation", "published scatter", "class", "V - K", "stars", "bias", "spread"):
        table.add_column(heading, justify="left" if heading in ("relation", "class", "V - K") else "right")
    for check in answer["checks"]:
        lines = [
            (
                found["group"], f"{found['v_k_min']:g} to {found['v_k_max']:g}", str(found["stars"]),
                f"{found['bias_percent']:+.1f}",
                "–" if found["spread_percent"] is None else f"{found['spread_percent']:.1f}",
            )
            for found in check["bins"]
        ]  # fmt: skip
        if check["sun_percent"] is not None:
            lines.append(("the Sun", "1.5", "1", f"{check['sun_percent']:+.1f}", "–"))
        for line in lines or [("–", "no measured star", "0", "–", "–")]:
            table.add_row(escape(check["relation"]), f"{check['scatter_percent']:g}", *line)
    console.print(table)


def show_track(answer: dict[str, Any]) -> None:
    """Where a target stands, time by time."""
    console = _console()
    windows = ", ".join(f"{w['start_utc']} to {w['end_utc']}" for w in answer["windows"])
    name, array = escape(answer["target"]["name"]), escape(answer["array"])
    console.print(f"\n[bold]{name}[/bold] over {array}: in reach {windows or 'never'}")
    table = Table(box=None, pad_edge=False, header_style="dim")
    for heading in ("UTC", "alt deg", "az deg", "HA h", "shortest m", "longest m", "blocked by"):
        table.add_column(heading, justify="left" if heading in ("UTC", "blocked by") else "right")
    for row in answer["times"]:
        lengths = [baseline["projected_m"] for baseline in row["baselines"]]
        table.add_row(
            row["utc"], f"{row['altitude_deg']:.1f}", f"{row['azimuth_deg']:.1f}",
            f"{row['hour_angle_h']:+.2f}", f"{min(lengths):.1f}", f"{max(lengths):.1f}",
            escape(", ".join(row["blocked_by"])),
        )  # fmt: skip
    console.print(table)
    for note in answer["notes"]:
        console.print(f"[dim]{note}[/dim]")


def show_plan(plan: NightPlan) -> None:
    """A night of blocks as a table, and what could not be placed."""
    console = _console()
    start, end = (format_utc(time) for time in plan.span)
    setup = escape(f"{plan.setup.array_name}, {plan.setup.mode_name}")
    console.print(f"\n[bold]{setup}[/bold]  from {start} to {end}")
    table = Table(box=None, pad_edge=False, header_style="dim")
    for heading in ("UTC", "target", "error %", "looks", "coarse paths m"):
        table.add_column(heading, justify="right" if heading == "error %" else "left")
    for block in plan.blocks:
        paths = " ".join(f"{name} {path:g}" for name, path in block.coarse_paths_m.items())
        looks = " – ".join(look.name if look.role == "calibrator" else "target" for look in block.looks)
        table.add_row(
            _hours(((block.start, block.end),)),
            escape(block.target),
            f"{100 * block.calibration_error:.2f}",
            looks,
            paths,
        )
    console.print(table if plan.blocks else "No block can be placed.")
    for target, reason in plan.unscheduled:
        console.print(f"left out: {escape(target)}: {reason}")
    console.print(f"[dim]Worth {plan.objective:.3f}; no plan exceeds {plan.bound:.3f}.[/dim]")
    for note in (*plan.notes, _CAUTION):
        console.print(f"[dim]{note}[/dim]")
