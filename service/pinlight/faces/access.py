"""Who asks over HTTP: the bearer token, and what it lets its member do."""

from flask import g, request

from pinlight.catalogue.store import Catalogue
from pinlight.errors import InputError, TokenError
from pinlight.faces.service import service

__all__ = ["acting_catalogue", "challenge", "check_access"]


def _token() -> str | None:
    """The request's token: a bearer's; to read, also the password of HTTP Basic, which browsers ask for.

    A browser sends a password along with whatever another site makes it send, so nothing is
    written on its strength.
    """
    given = request.authorization
    if given is None:
        if "Authorization" in request.headers:
            raise InputError("the Authorization header is not of the form 'Bearer TOKEN'")
        return None
    if given.type == "bearer" and given.token:
        return given.token
    if given.type == "basic" and request.method in ("GET", "HEAD") and given.password:
        return given.password
    raise TokenError("a member's token is needed; send 'Authorization: Bearer TOKEN'")


def check_access() -> None:
    """Before every request: a token must be a member's, and where reading is not open there must be one.

    Raises
    ------
    TokenError
        If the token is missing, unknown or revoked.
    """
    if request.endpoint == "api.alive":
        return
    g.token = _token()
    if g.token is not None:
        service().catalogue.acting(g.token).person()
    elif not service().open_reading:
        raise TokenError("reading needs a member's token here; send 'Authorization: Bearer TOKEN'")


def acting_catalogue() -> Catalogue:
    """The catalogue in the hands of the member who asks; what they may do, it checks itself.

    Raises
    ------
    TokenError
        If the request has no token: over HTTP nobody is taken for the person at the machine.
    """
    if g.token is None:
        raise TokenError("changing the catalogue needs a member's token; send 'Authorization: Bearer TOKEN'")
    return service().catalogue.acting(g.token)


def challenge() -> str:
    """The WWW-Authenticate header of a refusal."""
    to_read = ', Basic realm="Pinlight: a token as the password", charset="UTF-8"'
    return f'Bearer realm="Pinlight"{to_read if request.method in ("GET", "HEAD") else ""}'
