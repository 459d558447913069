"""Every exception that Pinlight raises on purpose."""

__all__ = ["CatalogueError", "InputError", "NotFoundError", "PinlightError", "SeedFileError"]


class PinlightError(Exception):
    """Base of all; its text is one line that says what to do."""


class InputError(PinlightError, ValueError):
    """The caller asked for something impossible."""


class NotFoundError(PinlightError, LookupError):
    """No star, array, mode or edition by that name."""


class CatalogueError(PinlightError):
    """The catalogue is missing, out of date, or cannot be written."""


class SeedFileError(CatalogueError):
    """A bad row in the file that a catalogue is filled from, with its file and row."""
