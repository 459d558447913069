"""Where the files are that live beside the package in a checkout and inside it in a wheel."""

from pathlib import Path

__all__ = ["measured_file", "migrations_folder", "seed_folder"]

_PACKAGE = Path(__file__).parent


def _beside_or_inside(name: str) -> Path:
    inside = _PACKAGE / name
    return inside if inside.is_dir() else _PACKAGE.parents[1] / name


def migrations_folder() -> Path:
    """The folder of the Alembic environment."""
    return _beside_or_inside("migrations")


def seed_folder() -> Path:
    """The folder of the seed catalogue, the invented arrays and the invented targets."""
    return _beside_or_inside("seed_catalog")


def measured_file() -> Path:
    """The file of stars with measured diameters."""
    inside = _PACKAGE / "measured_diameters.csv"
    return inside if inside.is_file() else _PACKAGE.parents[1] / "tests" / "data" / inside.name
