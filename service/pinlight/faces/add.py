"""Commands of the intake: stars from a table file."""

from pathlib import Path
from typing import Any

import click

from pinlight.errors import InputError
from pinlight.faces.options import as_json, db, print_json, token

__all__ = ["add", "pairs"]


def pairs(name: str, given: tuple[str, ...]) -> dict[str, str]:
    """``key=value`` options as a mapping.

    Raises
    ------
    InputError
        If one has no '=', or a key is given twice.
    """
    found: dict[str, str] = {}
    for one in given:
        key, equals, value = one.partition("=")
        if not equals or not key.strip():
            raise InputError(f"{name} is {one!r}; write it as KEY=VALUE")
        if key.strip() in found:
            raise InputError(f"{name} has {key.strip()} twice; give it once")
        found[key.strip()] = value.strip()
    return found


@click.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--source", required=True, metavar="TITLE", help="What the table is called in the catalogue.")
@click.option("--reference", required=True, metavar="BIBCODE", help="Where it was published.")
@click.option("--licence", default="", help="Its licence.")
@click.option("--map", "mapped", multiple=True, metavar="CANONICAL=COLUMN", help="May be repeated.")
@click.option("--epoch", default=2000.0, show_default=True, help="Of the positions, where no column has it.")
@click.option("--zero-point", multiple=True, metavar="BAND=JY", help="Flux of magnitude 0, for columns in Jy.")
@click.option("--match-arcsec", default=1.5, show_default=True, help="How near a row is the same star.")
@click.option("--rejects", type=click.Path(path_type=Path), help="Where refused rows go; FILE.rejects.csv.")
@click.option("--dry-run", is_flag=True, help="Only show what the columns are taken for, and ten rows.")
@db
@token
@as_json
def add(
    file: Path,
    mapped: tuple[str, ...],
    epoch: float,
    zero_point: tuple[str, ...],
    rejects: Path | None,
    dry_run: bool,
    db: str | None,
    token: str | None,
    as_json: bool,
    **options: Any,
) -> None:
    """Take in the stars of a table FILE: CSV, ECSV, VOTable, FITS or Parquet.

    Columns are found by name, UCD and unit. A star that the catalogue has already, by name or
    place, gets this source's magnitudes beside what it had. An intake that was interrupted goes
    on where it stopped; one that is complete changes nothing.
    """
    from pinlight.catalogue.intake import IntakeOptions, preview_file, take_in
    from pinlight.catalogue.store import open_catalogue

    try:
        zero_points = {band: float(flux) for band, flux in pairs("zero-point", zero_point).items()}
    except ValueError as error:
        raise InputError(f"zero-point is no number: {error}") from error
    asked = IntakeOptions(**options, columns=pairs("map", mapped), epoch_yr=epoch, zero_points_jy=zero_points)
    if dry_run:
        _show_preview(preview_file(file, asked), as_json)
        return
    rejects = rejects or file.with_name(f"{file.name}.rejects.csv")
    catalogue = open_catalogue(db, token=token)

    def progress(done: int, total: int | None) -> None:
        click.echo(f"… {done}{f' of {total}' if total else ''} rows", err=True)

    report = take_in(catalogue, file, asked, rejects=rejects, progress=progress)
    if as_json:
        print_json(report.to_dict() | {"rejects": str(rejects)})
        return
    counts = f"{report.added} stars added, {report.matched} known, {report.rejected} refused"
    click.echo(f"{report.rows} rows: {counts}{'; it was in already' if report.already else ''}")
    if report.rejected:
        click.echo(f"what was refused and why is in {rejects}")
    if report.added or report.matched:
        click.echo("rankings see them after 'pinlight edition freeze'")


def _show_preview(preview: dict[str, Any], as_json: bool) -> None:
    if as_json:
        print_json(preview)
        return
    click.echo(f"{preview['file']} as {preview['format']}, positions at {preview['mapping']['epoch_yr']:g}")
    for key, one in preview["mapping"]["columns"].items():
        unit = f" [{one['unit']}]" if one["unit"] else ""
        click.echo(f"  {key:<22}from {one['column']}{unit}, by {one['how']}")
    if preview["unused"]:
        click.echo(f"  not used: {', '.join(preview['unused'])}")
    for row in preview["rows"]:
        values = ", ".join(f"{key} {value}" for key, value in row["values"].items())
        click.echo(f"line {row['line']}: {'refused: ' + row['reason'] if row['reason'] else values}")
