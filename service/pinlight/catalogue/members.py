"""Members of the team: tokens, roles, and who may do what."""

import getpass
import hashlib
import re
import secrets
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, func, insert, select, update

from pinlight.catalogue.tables import Member
from pinlight.errors import InputError, NotAllowedError, NotFoundError, TokenError

if TYPE_CHECKING:
    from pinlight.catalogue.store import Catalogue

__all__ = [
    "ROLES",
    "Person",
    "add_member",
    "change_role",
    "has_members",
    "members",
    "person_of",
    "renew_token",
    "revoke_member",
]

# Each may do what those before it may.
ROLES = ("reader", "editor", "keeper")
_NAME = re.compile(r"[^\W_][\w .@'-]{0,79}")


@dataclass(frozen=True)
class Person:
    """Who acts: a member, or whoever works at a catalogue that has no members yet."""

    name: str
    role: str

    def require(self, role: str, doing: str) -> None:
        """Raise NotAllowedError unless this role suffices."""
        if ROLES.index(self.role) < ROLES.index(role):
            raise NotAllowedError(f"{self.name} is {_a(self.role)}; to {doing} takes {_a(role)}")


def _a(role: str) -> str:
    return f"an {role}" if role[0] in "aeiou" else f"a {role}"


def _hash(token: str) -> str:
    # A token is 256 random bits: there is nothing to guess, so a fast hash will do.
    return hashlib.sha256(token.strip().encode()).hexdigest()


def person_of(connection: Connection, token: str | None) -> Person:
    """Who acts with a token.

    A catalogue without members belongs to whoever can write to it: the person logged in is its
    keeper. From the first member on, a token is needed.

    Raises
    ------
    TokenError
        If the token is missing, unknown or revoked.
    """
    if token is None:
        if connection.execute(select(Member.id).limit(1)).first() is None:
            return Person(_login(), "keeper")
        raise TokenError("this catalogue has members; set PINLIGHT_TOKEN to your token")
    row = connection.execute(select(Member.name, Member.role).where(Member.token_hash == _hash(token))).first()
    if row is None:
        raise TokenError("the token is not known, or was revoked; ask a keeper for one")
    return Person(row.name, row.role)


def _login() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError):
        return "somebody"


def has_members(catalogue: "Catalogue") -> bool:
    """Whether the catalogue has a member, so that changing it needs a token."""
    with catalogue.reading() as connection:
        return connection.execute(select(Member.id).limit(1)).first() is not None


def members(catalogue: "Catalogue") -> list[dict[str, Any]]:
    """All members, in order of name; those revoked too.

    Raises
    ------
    TokenError, NotAllowedError
        If the one who asks is not a reader at least.
    """
    columns = (Member.name, Member.role, Member.made_utc, Member.revoked_utc)
    with catalogue.reading() as connection:
        person_of(connection, catalogue.token).require("reader", "list members")
        rows = connection.execute(select(*columns)).mappings().all()
    return sorted((dict(row) for row in rows), key=lambda row: str(row["name"]))


def _check_role(role: str) -> None:
    if role not in ROLES:
        raise InputError(f"role is {role!r}; it may be one of {', '.join(ROLES)}")


def add_member(catalogue: "Catalogue", name: str, role: str) -> str:
    """Add a member, or take one back whose token was revoked.

    Returns
    -------
    token : str
        The only time it is seen: the catalogue keeps a hash of it.

    Raises
    ------
    InputError
        If the name or role is impossible, the name taken, or the first member no keeper.
    TokenError, NotAllowedError
        If the one who adds is not a keeper.
    """
    _check_role(role)
    name = " ".join(name.split())
    if not _NAME.fullmatch(name):
        raise InputError(f"name is {name[:80]!r}; write up to 80 letters, digits, blanks and .@'-")
    token = secrets.token_urlsafe(32)
    with catalogue.changing("member", "keeper", "add a member", {"name": name, "role": role}) as change:
        known = change.connection.execute(select(Member.token_hash).where(Member.name == name)).first()
        if known and known.token_hash:
            raise InputError(f"name is {name!r}, a member already; 'pinlight member renew' gives a new token")
        if role != "keeper" and not _keepers(change.connection):
            raise InputError(f"role is {role!r}; the first member must be a keeper")
        values = {"role": role, "token_hash": _hash(token), "made_utc": change.made_utc, "revoked_utc": None}
        if known:
            change.connection.execute(update(Member).where(Member.name == name).values(values))
        else:
            change.connection.execute(insert(Member).values(name=name, **values))
    return token


def _keepers(connection: Connection) -> int:
    query = select(func.count()).where(Member.role == "keeper", Member.token_hash.is_not(None))
    return int(connection.execute(query).scalar_one())


def _present(connection: Connection, name: str) -> Any:
    row = connection.execute(select(Member.__table__).where(Member.name == name)).first()
    if row is None or row.token_hash is None:
        others = select(Member.name).where(Member.token_hash.is_not(None)).order_by(Member.name)
        known = ", ".join(connection.execute(others).scalars()) or "nobody"
        raise NotFoundError(f"name is {name!r}; members are {known}")
    return row


def _keep_a_keeper(connection: Connection, row: Any) -> None:
    if row.role == "keeper" and _keepers(connection) == 1:
        raise InputError(f"name is {row.name!r}, the only keeper; add another keeper first")


def revoke_member(catalogue: "Catalogue", name: str) -> None:
    """Make a member's token worthless; what they did stays under their name.

    Raises
    ------
    NotFoundError
        If there is no such member.
    InputError
        If it is the only keeper.
    TokenError, NotAllowedError
        If the one who revokes is not a keeper.
    """
    with catalogue.changing("member", "keeper", "revoke a member", {"name": name, "revoked": True}) as change:
        _keep_a_keeper(change.connection, _present(change.connection, name))
        change.connection.execute(
            update(Member).where(Member.name == name).values(token_hash=None, revoked_utc=change.made_utc)
        )


def renew_token(catalogue: "Catalogue", name: str) -> str:
    """A new token for a member who lost theirs; the old one is worthless from now on.

    Raises
    ------
    NotFoundError, TokenError, NotAllowedError
        As `revoke_member`.
    """
    token = secrets.token_urlsafe(32)
    with catalogue.changing("member", "keeper", "renew a token", {"name": name, "renewed": True}) as change:
        _present(change.connection, name)
        change.connection.execute(update(Member).where(Member.name == name).values(token_hash=_hash(token)))
        change.write()
    return token


def change_role(catalogue: "Catalogue", name: str, role: str) -> None:
    """Give a member another role.

    Raises
    ------
    InputError, NotFoundError, TokenError, NotAllowedError
        As `revoke_member`; also if there is no such role.
    """
    _check_role(role)
    with catalogue.changing("member", "keeper", "change a role", {"name": name, "role": role}) as change:
        row = _present(change.connection, name)
        if role != row.role:
            _keep_a_keeper(change.connection, row)
            change.connection.execute(update(Member).where(Member.name == name).values(role=role))
            change.write()
