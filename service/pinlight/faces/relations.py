"""The commands about surface-brightness–colour relations: list, check, re-compute with them."""

from pathlib import Path

import click

from pinlight.faces.options import Command, as_json, print_json
from pinlight.faces.options import db as db_option
from pinlight.faces.options import token as token_option

__all__ = ["check", "recompute", "relations", "relations_file_option"]


def relations_file_option(function: Command) -> Command:
    """``--relations``: relations of one's own."""
    return click.option(
        "--relations", "relations_file", type=click.Path(path_type=Path), metavar="FILE",
        help="Relations of your own, a CSV file like relations.csv; a shipped one's name takes its place.",
    )(function)  # fmt: skip


@click.group(invoke_without_command=True)
@relations_file_option
@as_json
@click.pass_context
def relations(context: click.Context, relations_file: Path | None, as_json: bool) -> None:
    """List the surface-brightness–colour relations: those in use, and those only carried."""
    if context.invoked_subcommand is not None:
        if relations_file or as_json:
            raise click.UsageError(f"write the options after '{context.invoked_subcommand}'")
        return
    from pinlight.diameters.relations import load_relations
    from pinlight.faces.show import relation_facts, show_relations

    relation_set = load_relations(relations_file)
    if as_json:
        print_json(relation_facts(relation_set))
    else:
        show_relations(relation_facts(relation_set))


@relations.command("check")
@relations_file_option
@click.option("--measured", type=click.Path(path_type=Path), metavar="FILE", help="Measured stars of your own.")
@as_json
def check(relations_file: Path | None, measured: Path | None, as_json: bool) -> None:
    """Hold each relation against measured stars and the Sun: bias and spread by class and colour."""
    from pinlight.diameters.relations import load_relations
    from pinlight.diameters.validation import check_relations, read_measured
    from pinlight.faces.show import show_relation_checks
    from pinlight.resources import measured_file

    relation_set = load_relations(relations_file)
    answer = {
        "relation_set": relation_set.hash,
        "relations_file": relation_set.file or None,
        "checks": check_relations(relation_set, read_measured(measured or measured_file())),
    }
    if as_json:
        print_json(answer)
    else:
        show_relation_checks(answer)


@relations.command()
@db_option
@relations_file_option
@token_option
@as_json
def recompute(db: str | None, relations_file: Path | None, token: str | None, as_json: bool) -> None:
    """Predict all diameters of the catalogue anew where another relation set was used, and freeze them.

    May be stopped at any time; run again, it goes on from there. Old values stay in the change log.
    """
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    from pinlight.catalogue.recompute import recompute_diameters
    from pinlight.catalogue.store import open_catalogue
    from pinlight.diameters.relations import load_relations

    relation_set = load_relations(relations_file)
    catalogue = open_catalogue(db, token=token)
    columns = (TextColumn("diameters"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True)) as bar:
        task = bar.add_task("", total=None)
        count = recompute_diameters(
            catalogue, relation_set, lambda done, total: bar.update(task, completed=done, total=total)
        )
    edition = catalogue.freeze()
    if as_json:
        print_json({"stars": count, "relation_set": relation_set.hash, "edition": edition})
    else:
        click.echo(f"{count} stars predicted with relation set {relation_set.hash}, edition {edition}")
