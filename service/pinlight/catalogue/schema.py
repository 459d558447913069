"""Bringing a database to the newest schema, and back."""

from alembic import command
from alembic.config import Config
from sqlalchemy import Connection

from pinlight.resources import migrations_folder

__all__ = ["alembic_config", "downgrade", "upgrade"]


def alembic_config(connection: Connection) -> Config:
    """Alembic's settings for an open connection."""
    config = Config()
    config.set_main_option("script_location", str(migrations_folder()))
    config.attributes["connection"] = connection
    return config


def upgrade(connection: Connection, revision: str = "head") -> None:
    """Run the migrations up to a revision."""
    command.upgrade(alembic_config(connection), revision)


def downgrade(connection: Connection, revision: str = "base") -> None:
    """Run the migrations back down to a revision."""
    command.downgrade(alembic_config(connection), revision)
