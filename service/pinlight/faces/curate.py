"""Commands of a keeper's corrections: preferred magnitudes, mergers, splits, and undoing them."""

import click

from pinlight.errors import InputError
from pinlight.faces.options import as_json, db, print_json, token

__all__ = ["merge", "prefer", "split", "undo"]


def _tell(change_id: int, what: str, as_json: bool) -> None:
    if as_json:
        print_json({"change_id": change_id})
    elif change_id:
        click.echo(f"{what}; 'pinlight undo {change_id}' takes it back")
    else:
        click.echo("it was so already")


@click.command()
@click.argument("star")
@click.argument("band")
@click.argument("source", required=False)
@db
@token
@as_json
def prefer(star: str, band: str, source: str | None, db: str | None, token: str | None, as_json: bool) -> None:
    """Let the magnitude of SOURCE count for STAR in BAND; without SOURCE what the rules say."""
    from pinlight.catalogue.curating import prefer_magnitude
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db, token=token)
    change_id = prefer_magnitude(catalogue, catalogue.find(star), band, source)
    _tell(change_id, f"{band} of {star} is that of {source or 'the rules'}", as_json)


@click.command()
@click.argument("star")
@click.argument("into")
@db
@token
@as_json
def merge(star: str, into: str, db: str | None, token: str | None, as_json: bool) -> None:
    """Say that STAR and INTO are one star; INTO stands for both. A number is a star_id."""
    from pinlight.catalogue.curating import merge_stars
    from pinlight.catalogue.store import open_catalogue

    catalogue = open_catalogue(db, token=token)
    ids = [int(one) if one.isdigit() else catalogue.find(one) for one in (star, into)]
    _tell(merge_stars(catalogue, *ids), f"{star} is part of {into} now", as_json)


@click.command()
@click.argument("star")
@click.option("--source", required=True, help="What this source brought is of another star.")
@click.option("--name", required=True, help="The other star's name.")
@click.option("--ra-deg", type=float, help="Its place; that of STAR by default.")
@click.option("--dec-deg", type=float, help="Its place.")
@db
@token
@as_json
def split(
    star: str,
    source: str,
    name: str,
    ra_deg: float | None,
    dec_deg: float | None,
    db: str | None,
    token: str | None,
    as_json: bool,
) -> None:
    """Make what one source brought to STAR an entry of its own."""
    from pinlight.catalogue.curating import split_star
    from pinlight.catalogue.store import open_catalogue

    if (ra_deg is None) != (dec_deg is None):
        raise InputError("ra-deg and dec-deg go together; give both or neither")
    place = None if ra_deg is None or dec_deg is None else (ra_deg, dec_deg)
    catalogue = open_catalogue(db, token=token)
    ids = split_star(catalogue, catalogue.find(star), source, name, place)
    if as_json:
        print_json(ids)
    else:
        click.echo(f"{name} is star {ids['star_id']}; 'pinlight undo {ids['change_id']}' takes it back")


@click.command()
@click.argument("change_id", type=int)
@db
@token
@as_json
def undo(change_id: int, db: str | None, token: str | None, as_json: bool) -> None:
    """Take back a preference, a merger or a split, by its number in 'pinlight changes'."""
    from pinlight.catalogue.curating import undo_change
    from pinlight.catalogue.store import open_catalogue

    done = undo_change(open_catalogue(db, token=token), change_id)
    if as_json:
        print_json({"change_id": done})
    else:
        click.echo(f"change {change_id} is undone")
