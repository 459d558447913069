"""Every exception that Pinlight raises on purpose."""

__all__ = [
    "CatalogueError",
    "InputError",
    "NotAllowedError",
    "NotFoundError",
    "PinlightError",
    "SeedFileError",
    "ServiceError",
    "TokenError",
]


class PinlightError(Exception):
    """Base of all; its text is one line that says what to do."""


class InputError(PinlightError, ValueError):
    """The caller asked for something impossible."""


class NotFoundError(PinlightError, LookupError):
    """No star, array, mode or edition by that name."""


class TokenError(PinlightError):
    """A member's token is needed and there is none, or it is unknown or revoked."""


class NotAllowedError(PinlightError):
    """The member's role does not suffice."""


class CatalogueError(PinlightError):
    """The catalogue is missing, out of date, or cannot be written."""


class SeedFileError(CatalogueError):
    """A bad row in the file that a catalogue is filled from, with its file and row."""


class ServiceError(PinlightError):
    """A remote Pinlight cannot be reached in time, or answered badly."""
