"""What commands share: common options, and how answers are printed."""

import json
from collections.abc import Callable
from typing import Any

import click

__all__ = ["as_json", "db", "print_json", "say", "token"]

Command = Callable[..., Any]


def db(function: Command) -> Command:
    """``--db``: which catalogue."""
    text = "The catalogue: sqlite:///FILE, a file name, or postgresql+psycopg://…"
    return click.option("--db", envvar="PINLIGHT_DB", metavar="URL", help=text)(function)


def token(function: Command) -> Command:
    """``--token``: who acts, where the catalogue has members."""
    text = "Your token as a member; better in PINLIGHT_TOKEN, where other users of the machine do not see it."
    return click.option("--token", envvar="PINLIGHT_TOKEN", metavar="TOKEN", help=text)(function)


def as_json(function: Command) -> Command:
    """``--json``: print JSON."""
    return click.option("--json", "as_json", is_flag=True, help="Print JSON.")(function)


def print_json(answer: Any) -> None:
    """Print an answer as JSON."""
    click.echo(json.dumps(answer, indent=1, ensure_ascii=False, allow_nan=False))


def say(step: str) -> None:
    """Tell on standard error what is being done."""
    click.echo(f"… {step}", err=True)
