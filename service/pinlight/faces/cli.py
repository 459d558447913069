"""The command line: read the options, make one call, show the answer."""

import signal
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from pinlight.errors import InputError, NotFoundError, PinlightError
from pinlight.faces import curate, team
from pinlight.faces.add import add
from pinlight.faces.options import as_json as _as_json
from pinlight.faces.options import db as _db
from pinlight.faces.options import print_json as _print_json
from pinlight.faces.options import say as _say
from pinlight.faces.relations import relations, relations_file_option
from pinlight.version import __version__

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue
    from pinlight.ranking.result import Ranking

__all__ = ["main"]

# The bands of photometry/systems.py; a test holds them together.
_BANDS = (
    "B", "V", "J", "H", "Ks", "R", "I", "J_BB", "H_BB", "K_BB", "L", "W3", "W4", "BT", "VT", "G", "BP", "RP",
)  # fmt: skip

# Heavy libraries are imported inside the commands: 'pinlight --help' has to answer at once.


class _Group(click.Group):
    """Turns every error into one line and an exit code: 2 for bad input, 1 for the rest."""

    def invoke(self, context: click.Context) -> Any:
        # A polite end: what is half made is put away, as for Ctrl-C.
        if threading.current_thread() is threading.main_thread():
            signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
        try:
            return super().invoke(context)
        except PinlightError as error:
            click.echo(f"pinlight: {error}", err=True)
            context.exit(2 if isinstance(error, InputError | NotFoundError) else 1)
        except click.UsageError as error:
            click.echo(f"pinlight: {' '.join(error.format_message().split())}", err=True)
            context.exit(2)
        except BrokenPipeError:
            sys.stderr.close()
            context.exit(1)
        except OSError as error:
            click.echo(f"pinlight: cannot write the answer: {error.strerror}", err=True)
            context.exit(1)


def _span(function: Callable[..., Any]) -> Callable[..., Any]:
    function = click.option("--to", metavar="UTC", help="End of the span.")(function)
    function = click.option("--from", "from_", metavar="UTC", help="Begin of a span, in place of a night.")(
        function
    )
    night_help = "The dark hours after that date's noon at the array."
    return click.option("--night", metavar="YYYY-MM-DD", help=night_help)(function)


def _question(function: Callable[..., Any]) -> Callable[..., Any]:
    """The options of a ranking."""
    function = click.option(
        "--with", "with_", metavar="NAME,NAME", help="A set of stars to evaluate beside the best ones."
    )(function)
    function = click.option("--at", metavar="UTC", help="One time, in place of a night.")(function)
    function = _span(function)
    function = click.option("--edition", help="An older edition of the catalogue.")(function)
    function = click.option("--best", default=20, show_default=True, help="How many to list.")(function)
    function = click.option(
        "--judge", default="rms", show_default=True, help="rms or worst, over baselines and channels."
    )(function)
    function = click.option("--v2-min", type=float, help="Floor of the calibrator's squared visibility.")(
        function
    )
    function = click.option("--magnitude-max", type=float, help="In place of the mode's limit.")(function)
    function = click.option("--separation-max-deg", type=float, help="In place of the array's limit.")(function)
    function = click.option(
        "--wavelength-um", type=float, help="Quick answer without an array: the wavelength."
    )(function)
    function = click.option("--baseline-m", type=float, help="Quick answer without an array: the baseline.")(
        function
    )
    function = click.option("--mode", help="The camera's mode.")(function)
    function = click.option("--stations", metavar="A,B,…", help="Stations to use; all by default.")(function)
    return click.option(
        "--array", metavar="FILE|NAME", help="An array file, or north or south (invented ones)."
    )(function)


def _names(text: str | None) -> list[str] | None:
    return None if text is None else [name.strip() for name in text.split(",") if name.strip()]


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="pinlight")
def main() -> None:
    """Calibrator stars for optical and infrared interferometry, ranked by what they cost.

    The calibration error of a star is the percent error that it puts into the target's
    calibrated squared visibility.
    """


for _command in (
    add,
    team.member,
    team.standing,
    team.edition,
    team.changes,
    team.copy,
    curate.prefer,
    curate.merge,
    curate.split,
    curate.undo,
    relations,
):
    main.add_command(_command)


@main.command()
@_db
@click.option("--empty", is_flag=True, help="Leave a new catalogue without the stars that Pinlight ships.")
def init(db: str | None, empty: bool) -> None:
    """Make the catalogue, or bring it to the newest schema."""
    from pinlight.catalogue.making import make_catalogue

    catalogue = make_catalogue(db, seed=not empty, progress=_say)
    editions = catalogue.editions()
    stars = f"{editions[0]['star_count']} stars, edition {editions[0]['name']}" if editions else "no stars yet"
    click.echo(f"catalogue {catalogue.place}: {stars}")


@main.command()
@click.argument("target")
@_db
@_question
@click.option("--report", type=click.Path(path_type=Path), help="Write a printable page with charts here.")
@_as_json
def rank(
    target: str,
    db: str | None,
    as_json: bool,
    stations: str | None,
    with_: str | None,
    report: Path | None,
    **options: Any,
) -> None:
    """Rank calibrators for TARGET: a star's name, coordinates, or a CSV file of targets."""
    from pinlight.catalogue.store import open_catalogue
    from pinlight.faces.library import rank as rank_target
    from pinlight.faces.setups import is_file
    from pinlight.faces.targets import read_targets

    catalogue = open_catalogue(db)
    in_file = target.lower().endswith(".csv") or is_file(target)
    targets = read_targets(Path(target), catalogue) if in_file else [target]
    options |= {"stations": _names(stations), "with_": _names(with_)}
    rankings = [rank_target(catalogue, one, **options) for one in targets]
    if report is not None:
        if in_file and report.resolve() == Path(target).resolve():
            raise InputError(f"--report is {report}, which is also TARGET; name another file")
        from pinlight.faces.papers import ranking_page

        _write(report, ranking_page(rankings))
    if as_json:
        _print_json(_several(rankings) if in_file else rankings[0].to_dict())
    else:
        from pinlight.faces.show import show_ranking

        for ranking in rankings:
            show_ranking(ranking)


def _several(rankings: "list[Ranking]") -> dict[str, Any]:
    return {
        "edition": rankings[0].edition,
        "pinlight": __version__,
        "rankings": [ranking.to_dict() for ranking in rankings],
    }


@main.command()
@click.argument("target")
@_db
@_question
def send(target: str, db: str | None, stations: str | None, with_: str | None, **options: Any) -> None:
    """Rank calibrators for TARGET and send them to the table and sky viewers that are running (SAMP)."""
    from platformdirs import user_cache_path

    from pinlight.catalogue.store import open_catalogue
    from pinlight.faces.library import rank as rank_target
    from pinlight.faces.samp import send_ranking

    options |= {"stations": _names(stations), "with_": _names(with_)}
    ranking = rank_target(open_catalogue(db), target, **options)
    folder = user_cache_path("pinlight") / "sent"
    folder.mkdir(parents=True, exist_ok=True)
    names = send_ranking(ranking, folder)
    click.echo(f"sent {len(ranking.calibrators)} stars to {', '.join(names)}", err=True)


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
        from pinlight.faces.show import show_star

        show_star(facts)


def _magnitude_options(function: Callable[..., Any]) -> Callable[..., Any]:
    for band in reversed(_BANDS):
        name = band.replace("_", "-")
        error_help = f"Error of {name}; the band's default if not given."
        function = click.option(f"--{name}-error", f"{band}_error", type=float, help=error_help)(function)
        function = click.option(f"--{name}", band, type=float, help=f"Magnitude in {name}.")(function)
    return function


@main.command()
@_magnitude_options
@click.option("--spectral-type", default="", help="Such as K1III.")
@click.option("--parallax-mas", type=float, help="For the extinction, and to tell a dwarf from a giant.")
@click.option("--ra-deg", type=float, help="For the extinction.")
@click.option("--dec-deg", type=float, help="For the extinction.")
@click.option("--av-mag", type=float, help="Extinction, in place of what is expected at its distance.")
@click.option("--av-error-mag", type=float, help="Its error.")
@click.option("--band", default="Ks", show_default=True, help="Where the uniform-disc diameter is wanted.")
@click.option(
    "--from", "file", type=click.Path(path_type=Path), help="Stars of a CSV, ECSV, VOTable or FITS file."
)
@relations_file_option
@_as_json
def diameter(file: Path | None, band: str, relations_file: Path | None, as_json: bool, **options: Any) -> None:
    """A diameter from magnitudes, two bands or more, or the diameters of a table of stars.

    B V Johnson, R I Cousins, J H Ks 2MASS, J-BB H-BB K-BB Bessell & Brett, L Johnson, W3 W4 WISE,
    BT VT Tycho-2, G BP RP Gaia. A magnitude without an error is taken to be the survey's.
    """
    from pinlight.diameters.relations import load_relations
    from pinlight.faces.diameter import StarRow, predict_diameter, predict_rows, read_stars

    relation_set = load_relations(relations_file)
    given = {key: value for key, value in options.items() if value not in (None, "")}
    if file is not None:
        if given:
            raise InputError(f"from and {next(iter(given))} are both given; give one or the other")
        rows = read_stars(file)
        found = iter(predict_rows([row for row in rows if isinstance(row, StarRow)], band, relation_set))
        answers = [
            next(found) if isinstance(row, StarRow) else {"name": row[0], "diameter": None, "reason": row[1]}
            for row in rows
        ]
    else:
        errors = {key.removesuffix("_error"): given.pop(key) for key in list(given) if key.endswith("_error")}
        magnitudes = {key: given.pop(key) for key in list(given) if key in _BANDS}
        place = (given.pop("ra_deg", None), given.pop("dec_deg", None))
        if (place[0] is None) != (place[1] is None):
            raise InputError(f"{'dec_deg' if place[1] is None else 'ra_deg'} is missing; give both or neither")
        position = None if place[0] is None else place
        answers = [
            predict_diameter(
                magnitudes, errors, position_deg=position, band=band, relations=relation_set, **given
            )
        ]
    if as_json:
        _print_json(answers if file is not None else answers[0])
        return
    from pinlight.faces.show import show_diameter, show_diameters

    if file is None:
        show_diameter(answers[0])
    else:
        show_diameters(answers)


@main.group()
def array() -> None:
    """Array files."""


@array.command()
@click.argument("file")
@_as_json
def check(file: str, as_json: bool) -> None:
    """Check an array FILE and say what it holds."""
    from pinlight.arrays.geometry import baselines
    from pinlight.faces.setups import find_array
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


@array.command("import")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--output", type=click.Path(path_type=Path), help="Write the array file here; printed by default."
)
def import_(file: Path, output: Path | None) -> None:
    """Make an array file from the OI_ARRAY table of an OIFITS FILE; blanks are marked "?"."""
    from pinlight.arrays.oifits import array_file_from_oifits

    text = array_file_from_oifits(file)
    if output is None:
        click.echo(text, nl=False)
    else:
        _write(output, text)


@array.command()
@click.argument("array_file", metavar="ARRAY")
@click.argument("target")
@_db
@click.option("--stations", metavar="A,B,…", help="Stations to use; all by default.")
@_span
@click.option("--step-min", default=10.0, show_default=True, help="Minutes between times.")
@_as_json
def track(
    array_file: str, target: str, db: str | None, stations: str | None, as_json: bool, **options: Any
) -> None:
    """Where TARGET stands over ARRAY, its baselines, and when it is in reach."""
    from pinlight.catalogue.store import open_catalogue
    from pinlight.faces.library import track_target
    from pinlight.sky.positions import looks_like_coordinates

    catalogue = None if looks_like_coordinates(target) else open_catalogue(db)
    answer = track_target(catalogue, target, array_file, stations=_names(stations), **options)
    if as_json:
        _print_json(answer)
    else:
        from pinlight.faces.show import show_track

        show_track(answer)


@main.command()
@click.argument("targets", type=click.Path(path_type=Path))
@_db
@click.option("--array", metavar="FILE|NAME", required=True, help="An array file, or north or south.")
@click.option("--stations", metavar="A,B,…", help="Stations to use; all by default.")
@click.option("--mode", help="The camera's mode.")
@_span
@click.option("--edition", help="An older edition of the catalogue.")
@click.option("--time-limit-s", default=5.0, show_default=True, help="For placing the blocks.")
@click.option("--csv", "csv_file", type=click.Path(path_type=Path), help="Write one line a look here.")
@click.option("--ics", "ics_file", type=click.Path(path_type=Path), help="Write an iCalendar here.")
@click.option("--report", "report_file", type=click.Path(path_type=Path), help="Write a printable page here.")
@_as_json
def plan(
    targets: Path,
    db: str | None,
    stations: str | None,
    csv_file: Path | None,
    ics_file: Path | None,
    report_file: Path | None,
    as_json: bool,
    **options: Any,
) -> None:
    """Plan a night for the TARGETS of a CSV file."""
    from pinlight.catalogue.store import open_catalogue
    from pinlight.faces.library import plan_night
    from pinlight.faces.targets import read_requests

    papers_asked = {"--csv": csv_file, "--ics": ics_file, "--report": report_file}
    taken = {targets.resolve(): "TARGETS"}
    for option, path in papers_asked.items():
        if path is not None and (other := taken.setdefault(path.resolve(), option)) != option:
            raise InputError(f"{option} is {path}, which is also {other}; name another file")
    catalogue = open_catalogue(db)
    night = plan_night(catalogue, read_requests(targets, catalogue), stations=_names(stations), **options)
    if any(papers_asked.values()):
        from pinlight.faces import papers

        made = {"--csv": papers.plan_csv, "--ics": papers.plan_ics, "--report": papers.plan_page}
        for option, path in papers_asked.items():
            if path is not None:
                _write(path, made[option](night))
    if as_json:
        _print_json(night.to_dict())
    else:
        from pinlight.faces.show import show_plan

        show_plan(night)


def _write(path: Path, text: str) -> None:
    """Write a file whole or not at all."""
    place = path.resolve()
    if place.exists() and not place.is_file():
        raise PinlightError(f"cannot write {path}: it is no ordinary file")
    aside = place.with_name(f".{place.name}.unfinished")
    try:
        aside.write_text(text, encoding="utf-8", newline="")
        aside.replace(place)
    except OSError as error:
        aside.unlink(missing_ok=True)
        raise PinlightError(f"cannot write {path}: {error.strerror}") from error
    click.echo(f"wrote {path}", err=True)


@main.command()
@_db
@click.option("--host", default="127.0.0.1", show_default=True)
@click.option("--port", default=8765, show_default=True, type=click.IntRange(1, 65535))
@click.option("--arrays", type=click.Path(path_type=Path), help="A folder of array files to offer.")
@click.option("--open", "open_reading", is_flag=True, help="Let anyone who reaches the address read.")
@click.option("--members-only", is_flag=True, help="Reading needs a token here too, as behind a proxy.")
@click.option(
    "--access-log", type=click.Path(path_type=Path), help="Add a line of JSON a request to it; - is stderr."
)
def serve(
    db: str | None,
    host: str,
    port: int,
    arrays: Path | None,
    open_reading: bool,
    members_only: bool,
    access_log: Path | None,
) -> None:
    """Serve the API and the page.

    Anyone may read where only this machine reaches the address; elsewhere reading needs a
    member's token, unless --open is given. Writing always needs one.
    """
    from pinlight.catalogue.members import has_members
    from pinlight.catalogue.store import open_catalogue

    if open_reading and members_only:
        raise InputError("open and members-only are both given; give one or neither")
    catalogue = open_catalogue(db)
    closed = members_only or (host not in ("127.0.0.1", "localhost", "::1") and not open_reading)
    if closed and not has_members(catalogue):
        where = "others can reach" if not members_only else "is for members only"
        raise InputError(f"host is {host}, which {where}; add --open to let anyone there read, or a member")
    _serve(catalogue, host, port, arrays, not closed, access_log)


def _serve(
    catalogue: "Catalogue",
    host: str,
    port: int,
    arrays: Path | None,
    open_reading: bool,
    access_log: Path | None = None,
) -> None:
    from pinlight.faces.http import create_app
    from pinlight.faces.serving import serve_app

    app = create_app(catalogue, arrays, open_reading=open_reading)

    def ready(address: str) -> None:
        click.echo(f"Pinlight is at {address} – Ctrl-C ends it", err=True)

    serve_app(app, host, port, access_log=access_log, ready=ready)


@main.command()
@_db
@click.option("--once", is_flag=True, help="End after printing; do not serve the page.")
@click.option("--port", default=8765, show_default=True, type=click.IntRange(1, 65535))
@_as_json
def demo(db: str | None, once: bool, port: int, as_json: bool) -> None:
    """See it work: real stars ranked for invented targets on two invented arrays, then the page."""
    from pinlight.catalogue.making import make_catalogue
    from pinlight.faces.library import rank as rank_target
    from pinlight.faces.setups import known_arrays
    from pinlight.faces.targets import read_targets
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
        from pinlight.faces.show import show_ranking

        for ranking in rankings:
            show_ranking(ranking, most=5)
    if not once:
        _serve(catalogue, "127.0.0.1", port, None, True)
