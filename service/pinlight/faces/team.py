"""Commands of the team: members, standings, editions, the change log."""

import json
from pathlib import Path
from typing import Any

import click

from pinlight.errors import InputError, PinlightError
from pinlight.faces.options import as_json, db, print_json, say, token

__all__ = ["changes", "copy", "edition", "member", "standing"]


@click.group()
def member() -> None:
    """Members, their roles and tokens.

    A catalogue without members belongs to whoever can write to it. The first member must be a
    keeper; from then on every change needs a token.
    """


@member.command("add")
@click.argument("name")
@click.option("--role", required=True, help="reader, editor or keeper.")
@db
@token
@as_json
def add_(name: str, role: str, db: str | None, token: str | None, as_json: bool) -> None:
    """Add the member NAME and print their token: the only time that it is seen."""
    from pinlight.catalogue.members import add_member
    from pinlight.catalogue.store import open_catalogue

    _show_token(name, add_member(open_catalogue(db, token=token), name, role), as_json)


def _show_token(name: str, new: str, as_json: bool) -> None:
    if as_json:
        print_json({"name": name, "token": new})
        return
    click.echo(new)
    click.echo(f"This is the token of {name}. It is not shown again; keep it as PINLIGHT_TOKEN.", err=True)


@member.command("list")
@db
@token
@as_json
def list_members(db: str | None, token: str | None, as_json: bool) -> None:
    """All members and their roles."""
    from pinlight.catalogue.members import members
    from pinlight.catalogue.store import open_catalogue

    rows = members(open_catalogue(db, token=token))
    if as_json:
        print_json(rows)
        return
    for row in rows:
        gone = f"  revoked {row['revoked_utc'][:10]}" if row["revoked_utc"] else ""
        click.echo(f"{row['name']:<24}{row['role']:<8}since {row['made_utc'][:10]}{gone}")
    if not rows:
        click.echo("no members: whoever can write to the catalogue may change it")


@member.command()
@click.argument("name")
@db
@token
def revoke(name: str, db: str | None, token: str | None) -> None:
    """Make the token of NAME worthless; what they did stays under their name."""
    from pinlight.catalogue.members import revoke_member
    from pinlight.catalogue.store import open_catalogue

    revoke_member(open_catalogue(db, token=token), name)
    click.echo(f"the token of {name} is revoked")


@member.command()
@click.argument("name")
@db
@token
@as_json
def renew(name: str, db: str | None, token: str | None, as_json: bool) -> None:
    """A new token for NAME; the old one is worthless from now on."""
    from pinlight.catalogue.members import renew_token
    from pinlight.catalogue.store import open_catalogue

    _show_token(name, renew_token(open_catalogue(db, token=token), name), as_json)


@member.command("role")
@click.argument("name")
@click.argument("role")
@db
@token
def role_(name: str, role: str, db: str | None, token: str | None) -> None:
    """Give NAME another ROLE: reader, editor or keeper."""
    from pinlight.catalogue.members import change_role
    from pinlight.catalogue.store import open_catalogue

    change_role(open_catalogue(db, token=token), name, role)
    click.echo(f"{name} is {role} now")


@click.group()
def standing() -> None:
    """What members think of stars."""


@standing.command("set")
@click.argument("star")
@click.argument("judgement", metavar="STANDING")
@click.option("--reason", required=True, help="Why.")
@click.option("--band", help="Only in this band.")
@click.option("--mode", help="Only in this mode: MODE or ARRAY/MODE.")
@click.option("--evidence", multiple=True, help="A reference, link, note or JSON; may be repeated.")
@db
@token
@as_json
def set_(
    star: str,
    judgement: str,
    evidence: tuple[str, ...],
    db: str | None,
    token: str | None,
    as_json: bool,
    **options: Any,
) -> None:
    """Judge the STAR of that name: vouched, unproven, doubted or barred."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db, token=token)
    star_id = catalogue.find(star)
    row = catalogue.set_standing(star_id, judgement, evidence=[_evidence(one) for one in evidence], **options)
    if as_json:
        print_json(row | {"star_id": star_id})
    else:
        click.echo(_standing_line(row | {"name": star}))


def _evidence(given: str) -> Any:
    if not given.lstrip().startswith("{"):
        return given
    try:
        return json.loads(given)
    except ValueError as error:
        raise InputError(f"evidence is {given[:60]!r}, which is no JSON: {error}") from error


def _standing_line(row: dict[str, Any]) -> str:
    where = "".join(f" [{what} {row[what]}]" for what in ("band", "mode") if row[what])
    more = f" ({len(row['evidence'])} evidence)" if row["evidence"] else ""
    said = f"{row['standing']}{where} by {row['made_by']}: {row['reason']}{more}"
    return f"{row['made_utc'][:16]}Z  {row['name']:<20}{said}"


@standing.command("list")
@click.option("--band", help="As a ranking in this band sees it.")
@click.option("--mode", help="As a ranking in this mode sees it.")
@db
@as_json
def list_standings(band: str | None, mode: str | None, db: str | None, as_json: bool) -> None:
    """The standing that counts of every star that has one."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db)
    found = catalogue.standings(band, mode)
    names = catalogue.names(found)
    rows = [{"star_id": key, "name": names[key], "standing": value} for key, value in sorted(found.items())]
    if as_json:
        print_json(rows)
        return
    for row in rows:
        click.echo(f"{row['name']:<24}{row['standing']}")
    if not rows:
        click.echo("no star has a standing yet")


@standing.command()
@click.argument("star")
@db
@as_json
def history(star: str, db: str | None, as_json: bool) -> None:
    """Every judgement of the STAR of that name, oldest first."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db)
    found = catalogue.star_standings(catalogue.find(star))
    if as_json:
        print_json(found)
        return
    for row in found["standings"]:
        click.echo(_standing_line(row | {"name": star}))
        for one in row["evidence"]:
            click.echo(f"    {one if isinstance(one, str) else json.dumps(one, ensure_ascii=False)}")
    click.echo(f"what counts: {found['standing'] or 'no general standing'}")


@standing.command("export")
@click.option("--output", type=click.Path(path_type=Path), help="Write the bundle here; printed by default.")
@click.option("--all-stars", is_flag=True, help="With all stars that were added, judged or not.")
@db
def export_(output: Path | None, all_stars: bool, db: str | None) -> None:
    """A bundle of all standings, to carry to another site."""
    from pinlight.catalogue.bundles import export_bundle
    from pinlight.catalogue.store import open_catalogue

    text = export_bundle(open_catalogue(db), all_stars=all_stars)
    if output is None:
        click.echo(text, nl=False)
        return
    try:
        output.write_text(text, encoding="utf-8", newline="")
    except OSError as error:
        raise PinlightError(f"cannot write {output}: {error.strerror}") from error
    click.echo(f"wrote {output}", err=True)


@standing.command("import")
@click.argument("file", type=click.Path(path_type=Path))
@db
@token
@as_json
def import_(file: Path, db: str | None, token: str | None, as_json: bool) -> None:
    """Take in the bundle FILE of another site; twice changes nothing, and any order will do."""
    from pinlight.catalogue.bundles import import_bundle
    from pinlight.catalogue.store import open_catalogue

    try:
        text = file.read_bytes().decode()
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"cannot read {file}: {error}") from error
    report = import_bundle(open_catalogue(db, token=token), text)
    if as_json:
        print_json(report)
        return
    click.echo(f"{report['standings_added']} standings added, {report['standings_known']} known")
    if report["stars_added"] or report["magnitudes_added"]:
        click.echo(f"{report['stars_added']} stars and {report['magnitudes_added']} magnitudes added")
    for one in report["unknown"]:
        click.echo(f"left out: line {one['line']}, {one['name']}: {one['reason']}")
    for one in report["conflicts"]:
        click.echo(f"{one['name']}: both are kept, {one['counts']} counts")
        for whose in ("ours", "theirs"):
            click.echo(f"  {whose:<8}{_standing_line(one[whose] | {'name': ''})}")


@click.group()
def edition() -> None:
    """Frozen states of the catalogue, which rankings run on."""


@edition.command()
@db
@token
@as_json
def freeze(db: str | None, token: str | None, as_json: bool) -> None:
    """Freeze the present state; the same content gives the same edition."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db, token=token)
    name = catalogue.freeze()
    row = next(row for row in catalogue.editions() if row["name"] == name)
    if as_json:
        print_json(row)
    else:
        click.echo(f"edition {name}: {row['star_count']} stars")


@edition.command("list")
@db
@as_json
def list_editions(db: str | None, as_json: bool) -> None:
    """All editions, newest first."""
    from pinlight.catalogue.store import open_catalogue

    rows = open_catalogue(db).editions()
    if as_json:
        print_json(rows)
        return
    for row in rows:
        click.echo(f"{row['name']}  {row['made_utc'][:16]}Z  {row['star_count']} stars")
    if not rows:
        click.echo("no edition yet; 'pinlight edition freeze' makes one")


@edition.command()
@click.argument("one")
@click.argument("other", required=False)
@click.option("--most", default=20, show_default=True, help="How many stars to name of each kind.")
@db
@as_json
def compare(one: str, other: str | None, most: int, db: str | None, as_json: bool) -> None:
    """Which stars, diameters and standings differ between the editions ONE and OTHER (the newest)."""
    from pinlight.catalogue.store import open_catalogue

    found = open_catalogue(db).compare(one, other, most)
    if as_json:
        print_json(found)
        return
    click.echo(f"{found['one']} → {found['other']}")
    for kind in ("added", "removed", "changed", "diameters", "standings"):
        part = found[kind]
        click.echo(f"  {kind}: {part['count']}")
        for star in part["stars"]:
            values = [f"{key} {old} → {new}" for key, (old, new) in star.get("values", {}).items()]
            click.echo(f"    {star['name']:<24}{'; '.join(values)}")
        if part["count"] > len(part["stars"]):
            click.echo("    …")


@edition.command("check")
@click.argument("name", required=False)
@db
@as_json
def check_edition(name: str | None, db: str | None, as_json: bool) -> None:
    """Whether an edition's files are what its hash says; all editions by default."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db)
    rows = [catalogue.check(one) for one in ([name] if name else [row["name"] for row in catalogue.editions()])]
    if as_json:
        print_json(rows)
    else:
        for row in rows:
            click.echo(f"{row['name']}  {'as its hash says' if row['sound'] else row['problem']}")
    if not all(row["sound"] for row in rows):
        raise click.exceptions.Exit(1)


@click.command()
@click.argument("source", metavar="FROM")
@click.argument("target", metavar="TO")
@as_json
def copy(source: str, target: str, as_json: bool) -> None:
    """Copy the whole catalogue at FROM to TO, between files and servers either way.

    Nothing is left out: ids, the change log, members and editions come along.
    """
    from pinlight.catalogue.copying import copy_catalogue

    counts = copy_catalogue(source, target, say)
    if as_json:
        print_json(counts)
    else:
        click.echo(f"copied {counts['star']} stars, {counts['change']} changes, {counts['edition']} editions")


@click.command()
@click.argument("star", required=False)
@click.option("--at", metavar="UTC", help="The star as it stood then, each value with who set it.")
@click.option("--most", default=50, show_default=True, help="Without a star: how many changes to list.")
@db
@as_json
def changes(star: str | None, at: str | None, most: int, db: str | None, as_json: bool) -> None:
    """Who changed what: the newest changes, or all of one STAR, or how it stood at a past time."""
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db)
    found = catalogue.changes(catalogue.find(star) if star else None, at, most)
    if as_json:
        print_json(found)
    elif at is not None:
        for table, rows in found["rows"].items():
            for row in rows:
                click.echo(table)
                for column, cell in row.items():
                    who = f"{cell['made_by']}, {cell['made_utc'][:16]}Z, {cell['action']}"
                    click.echo(f"  {column:<24}{cell['value']!s:<28}{who}")
    else:
        for change in found:
            detail = ", ".join(f"{key} {value}" for key, value in change["detail"].items())
            number = f"{change['change_id']:>6}  {change['made_utc'][:19]}Z"
            click.echo(f"{number}  {change['made_by']:<16}{change['action']:<12}{detail}")
            for line in change.get("overwritten", []):
                for column, old in line["before"].items():
                    click.echo(f"    {line['table']} {line['row']} {column}: {old} → {line['after'][column]}")
