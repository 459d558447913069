"""The command line: read the options, make one call, show the answer."""

import json
import math
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from pinlight.errors import InputError, NotFoundError, PinlightError
from pinlight.version import __version__

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue
    from pinlight.ranking.result import Ranking

__all__ = ["main"]

_SHORT = {"diameter": "diam.", "brightness": "bright.", "companion": "comp."}
# The flags that a reader of a ranking wants to see beside a star that passed the gates.
_REMARKS = ("component", "variable", "fast_rotator", "peculiar")

# Heavy libraries are imported inside the commands: 'pinlight --help' has to answer at once.


class _Group(click.Group):
    """Turns the library's errors into one line and an exit code: 2 for bad input, 1 for the rest."""

    def invoke(self, context: click.Context) -> Any:
        try:
            return super().invoke(context)
        except PinlightError as error:
            click.echo(f"pinlight: {error}", err=True)
            context.exit(2 if isinstance(error, InputError | NotFoundError) else 1)
        except BrokenPipeError:
            sys.stderr.close()
            context.exit(1)


def _db(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option(
        "--db", envvar="PINLIGHT_DB", metavar="URL", help="The catalogue: sqlite:///FILE or a file name."
    )(function)


def _as_json(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--json", "as_json", is_flag=True, help="Print JSON.")(function)


def _print_json(answer: Any) -> None:
    click.echo(json.dumps(answer, indent=1, ensure_ascii=False, allow_nan=False))


def _console() -> Any:
    from rich.console import Console

    return Console(width=None if sys.stdout.isatty() else 140, highlight=False)


def _say(step: str) -> None:
    click.echo(f"… {step}", err=True)


def _names(text: str | None) -> list[str] | None:
    return None if text is None else [name.strip() for name in text.split(",") if name.strip()]


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="pinlight")
def main() -> None:
    """Calibrator stars for optical and infrared interferometry, ranked by what they cost.

    The calibration error of a star is the percent error that it puts into the target's
    calibrated squared visibility.
    """


@main.command()
@_db
@click.option("--empty", is_flag=True, help="Leave a new catalogue without the stars that Pinlight ships.")
def init(db: str | None, empty: bool) -> None:
    """Make the catalogue, or bring it to the newest schema."""
    from pinlight.catalogue.store import make_catalogue

    catalogue = make_catalogue(db, seed=not empty, progress=_say)
    editions = catalogue.editions()
    stars = f"{editions[0]['star_count']} stars, edition {editions[0]['name']}" if editions else "no stars yet"
    click.echo(f"catalogue {catalogue.path}: {stars}")


@main.command()
@click.argument("target")
@_db
@click.option("--array", metavar="FILE|NAME", help="An array file, or north or south (invented ones).")
@click.option("--stations", metavar="A,B,…", help="Stations to use; all by default.")
@click.option("--mode", help="The camera's mode.")
@click.option("--baseline-m", type=float, help="Quick answer without an array: the baseline.")
@click.option("--wavelength-um", type=float, help="Quick answer without an array: the wavelength.")
@click.option("--separation-max-deg", type=float, help="In place of the array's limit.")
@click.option("--magnitude-max", type=float, help="In place of the mode's limit.")
@click.option("--v2-min", type=float, help="Floor of the calibrator's squared visibility.")
@click.option("--judge", default="rms", show_default=True, help="rms or worst, over baselines and channels.")
@click.option("--best", default=20, show_default=True, help="How many to list.")
@click.option("--edition", help="An older edition of the catalogue.")
@_as_json
def rank(target: str, db: str | None, as_json: bool, stations: str | None, **options: Any) -> None:
    """Rank calibrators for TARGET: a star's name, coordinates, or a CSV file of targets."""
    from pinlight.catalogue.store import open_catalogue
    from pinlight.faces.library import rank as rank_target
    from pinlight.faces.library import read_targets

    catalogue = open_catalogue(db)
    in_file = Path(target).suffix.lower() == ".csv" or Path(target).is_file()
    targets = read_targets(Path(target)) if in_file else [target]
    rankings = [rank_target(catalogue, one, stations=_names(stations), **options) for one in targets]
    if as_json:
        _print_json(_several(rankings) if in_file else rankings[0].to_dict())
    else:
        for ranking in rankings:
            _show_ranking(ranking)


def _several(rankings: "list[Ranking]") -> dict[str, Any]:
    return {
        "edition": rankings[0].edition,
        "pinlight": __version__,
        "rankings": [ranking.to_dict() for ranking in rankings],
    }


def _show_ranking(ranking: "Ranking", most: int | None = None) -> None:
    from rich.table import Table

    from pinlight.ranking.budget import TERMS

    console, setup = _console(), ranking.setup
    with_what = f"{setup.array_name}, {setup.mode.name}" if setup.mode else "one baseline"
    longest = f"baselines to {setup.baselines_m.max():.0f} m, {setup.wavelength_um:g} um"
    console.print(f"\n[bold]{ranking.target.name or 'Target'}[/bold]  {with_what}, {longest}")
    # Every term has its column where there is room; on a narrow screen only the largest is named.
    wide = console.width >= 130
    table = Table(box=None, pad_edge=False, header_style="dim")
    term_headings = [*(_SHORT.get(name, name) for name in TERMS), "V2 min"] if wide else ["mostly"]
    headings = ["", "star", "error %", *term_headings, "sep deg", "type", setup.band, "diameter mas"]
    for heading in headings:
        left = heading in ("star", "type", "mostly")
        bold = "bold" if heading == "error %" else ""
        table.add_column(heading, justify="left" if left else "right", style=bold, no_wrap=True)
    table.add_column("remarks" if wide else "", style="dim", no_wrap=True, max_width=18 if wide else 1)
    for star in ranking.calibrators[:most]:
        total_mas = math.hypot(star.own_error_mas, star.shared_error_mas)
        terms = {name: term for name, term in star.budget.items() if term is not None}
        shown = (
            [f"{100 * terms[name]:.2f}" if name in terms else "–" for name in TERMS] + [f"{star.v2_min:.2f}"]
            if wide
            else [max(terms, key=lambda name: terms[name])]
        )
        remarks = ", ".join(flag for flag in star.flags if flag in _REMARKS).replace("_", " ")
        table.add_row(
            str(star.rank), star.name, f"{100 * star.calibration_error:.2f}", *shown,
            f"{star.separation_deg:.1f}", star.spectral_type, f"{star.magnitudes[setup.band][0]:.2f}",
            f"{star.limb_darkened_mas:.3f} ± {total_mas:.3f}", remarks if wide else "*" if remarks else "",
        )  # fmt: skip
    if ranking.calibrators:
        console.print(table)
    else:
        console.print("No star passes every gate.")
    counts = [f"{count} {reason.replace('_', ' ')}" for reason, count in ranking.excluded.items()]
    console.print(f"[dim]{ranking.ranked} stars rank. Left out: {', '.join(counts) or 'none'}.[/dim]")
    for note in ranking.notes:
        console.print(f"[dim]{note}[/dim]")


@main.command()
@click.argument("name")
@_db
@_as_json
def star(name: str, db: str | None, as_json: bool) -> None:
    """Everything known of the star NAME, and how its diameter came about."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db)
    facts = catalogue.star(catalogue.find(name))
    if as_json:
        _print_json(facts)
    else:
        _show_star(facts)


def _show_star(facts: dict[str, Any]) -> None:
    from rich.table import Table

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
    _show_diameter(console, diameter)
    console.print(
        f"as a {diameter['luminosity_group']}, Teff {diameter['teff_k']:.0f} K, log g {diameter['logg']:.1f},"
        f" A_V {diameter['av_mag']:.2f} ± {diameter['av_error_mag']:.2f};"
        f" chi2 {diameter['chi_squared']:.1f} on {diameter['degrees_of_freedom']}"
    )
    if diameter["discordant"]:
        console.print(f"[bold]discordant[/bold]: {diameter['culprit']} disagrees most")
    table = Table(box=None, pad_edge=False, header_style="dim")
    for heading in ("relation", "diameter mas", "weight", "pull"):
        table.add_column(heading, justify="left" if heading == "relation" else "right")
    for part in diameter["relations"]:
        pull = "–" if part["pull"] is None else f"{part['pull']:+.2f}"
        table.add_row(part["relation"], f"{part['diameter_mas']:.4f}", f"{part['weight']:+.3f}", pull)
    console.print(table)


def _show_diameter(console: Any, found: dict[str, Any]) -> None:
    console.print(
        f"limb-darkened diameter [bold]{found['limb_darkened_mas']:.4f} ± {found['error_mas']:.4f} mas[/bold]"
        f"  (own {found['own_error_mas']:.4f}, shared {found['shared_error_mas']:.4f})"
    )


def _magnitude_options(function: Callable[..., Any]) -> Callable[..., Any]:
    for band in ("Ks", "H", "J", "V", "B"):
        error_help = f"Error of {band}; the band's default if not given."
        function = click.option(f"--{band}-error", f"{band}_error", type=float, help=error_help)(function)
        function = click.option(f"--{band}", band, type=float, help=f"Magnitude in {band}.")(function)
    return function


@main.command()
@_magnitude_options
@click.option("--spectral-type", default="", help="Such as K1III.")
@click.option("--parallax-mas", type=float)
@click.option("--ra-deg", type=float)
@click.option("--dec-deg", type=float)
@click.option("--av-mag", type=float, help="Extinction, in place of what is expected at its distance.")
@click.option("--band", default="Ks", show_default=True, help="Where the uniform-disc diameter is wanted.")
@_as_json
def diameter(
    spectral_type: str,
    parallax_mas: float | None,
    ra_deg: float | None,
    dec_deg: float | None,
    av_mag: float | None,
    band: str,
    as_json: bool,
    **magnitudes: float | None,
) -> None:
    """A diameter from magnitudes: two bands or more."""
    from pinlight.faces.library import predict_diameter

    if (ra_deg is None) != (dec_deg is None):
        raise InputError(f"{'dec_deg' if dec_deg is None else 'ra_deg'} is missing; give both or neither")
    given = {key: value for key, value in magnitudes.items() if value is not None}
    answer = predict_diameter(
        {key: value for key, value in given.items() if not key.endswith("_error")},
        {key.removesuffix("_error"): value for key, value in given.items() if key.endswith("_error")},
        spectral_type=spectral_type,
        parallax_mas=parallax_mas,
        position_deg=None if ra_deg is None or dec_deg is None else (ra_deg, dec_deg),
        av_mag=av_mag,
        band=band,
    )
    if as_json:
        _print_json(answer)
        return
    result, console = answer["diameter"], _console()
    _show_diameter(console, result)
    console.print(f"uniform-disc diameter in {band}: {result['uniform_disk_mas']:.4f} mas")
    console.print(f"as a {answer['luminosity_group']}, Teff {answer['teff_k']} K, A_V {answer['av_mag']:.2f}")
    if result["discordant"]:
        console.print("[bold]discordant[/bold]: its colours disagree about its diameter")
    for part in answer["parts"]:
        console.print(f"  {part['relation']:<14}{part['diameter_mas']:8.4f} mas   weight {part['weight']:+.3f}")


@main.group()
def array() -> None:
    """Array files."""


@array.command()
@click.argument("file")
@_as_json
def check(file: str, as_json: bool) -> None:
    """Check an array FILE and say what it holds."""
    from pinlight.arrays.geometry import baselines
    from pinlight.faces.library import find_array
    from pinlight.fringes.visibility import resolution_mas

    found = find_array(file)
    pairs = baselines(found.station)
    if as_json:
        _print_json(
            {
                "array": found.name,
                "stations": [station.name for station in found.station],
                "baselines": [{"stations": list(p.stations), "length_m": round(p.length_m, 3)} for p in pairs],
                "modes": [mode.model_dump() for mode in found.mode],
            }
        )
        return
    click.echo(f"{found.name}: {len(found.station)} stations, {len(pairs)} baselines, all keys in order")
    for pair in pairs:
        click.echo(f"  {' – '.join(pair.stations):<20}{pair.length_m:8.1f} m")
    for mode in found.mode:
        resolved_mas = resolution_mas(pairs[0].length_m, mode.wavelength_um)
        band = f"{mode.wavelength_um:g} um, {mode.channels} channels"
        click.echo(f"  mode {mode.name}: {band}, resolves {resolved_mas:.2f} mas")


@main.command()
@_db
@click.option("--host", default="127.0.0.1", show_default=True)
@click.option("--port", default=8765, show_default=True, type=click.IntRange(1, 65535))
@click.option("--arrays", type=click.Path(path_type=Path), help="A folder of array files to offer.")
@click.option("--open", "open_reading", is_flag=True, help="Let anyone who reaches the address read.")
def serve(db: str | None, host: str, port: int, arrays: Path | None, open_reading: bool) -> None:
    """Serve the API and the page."""
    from pinlight.catalogue.store import open_catalogue

    _serve(open_catalogue(db), host, port, arrays, open_reading)


def _serve(catalogue: "Catalogue", host: str, port: int, arrays: Path | None, open_reading: bool) -> None:
    import waitress

    from pinlight.faces.http import create_app

    if host not in ("127.0.0.1", "localhost", "::1") and not open_reading:
        raise InputError(f"host is {host}, which others can reach; add --open to let anyone there read")
    app = create_app(catalogue, arrays)
    try:
        server = waitress.create_server(app, host=host, port=port, threads=8, ident="pinlight")
    except OSError as error:
        reason = f"cannot serve on {host} port {port}: {error.strerror}"
        raise InputError(f"{reason}; choose another --port") from error
    click.echo(f"Pinlight is at http://{'[::1]' if host == '::1' else host}:{port}/ – Ctrl-C ends it", err=True)
    server.run()


@main.command()
@_db
@click.option("--once", is_flag=True, help="End after printing; do not serve the page.")
@click.option("--port", default=8765, show_default=True, type=click.IntRange(1, 65535))
@_as_json
def demo(db: str | None, once: bool, port: int, as_json: bool) -> None:
    """See it work: real stars ranked for invented targets on two invented arrays, then the page."""
    from pinlight.catalogue.store import make_catalogue
    from pinlight.faces.library import known_arrays, read_targets
    from pinlight.faces.library import rank as rank_target
    from pinlight.resources import seed_folder

    catalogue = make_catalogue(db, progress=_say)
    arrays = known_arrays().values()
    rankings = []
    for target in read_targets(seed_folder() / "targets.csv"):
        # Each target goes to the array where it climbs higher.
        site = min(arrays, key=lambda site: abs(site.latitude_deg - target.dec_deg))
        rankings.append(rank_target(catalogue, target, array=site, mode="H", best=10))
    if as_json:
        _print_json(_several(rankings))
    else:
        for ranking in rankings:
            _show_ranking(ranking, most=5)
    if not once:
        _serve(catalogue, "127.0.0.1", port, None, False)
