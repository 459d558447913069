"""The tables of the catalogue."""

from sqlalchemy import ForeignKey, Index, MetaData
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column

__all__ = [
    "SCHEMA",
    "Base",
    "Change",
    "ChangeValue",
    "Companion",
    "Diameter",
    "Edition",
    "Identifier",
    "Intake",
    "Magnitude",
    "Member",
    "Reject",
    "Source",
    "Standing",
    "Star",
]

# The newest migration; a test holds it against the migrations folder.
SCHEMA = "0004"


class Base(DeclarativeBase):
    """All tables; the convention names every constraint, so that migrations can."""

    metadata = MetaData(
        naming_convention={
            "ix": "ix_%(table_name)s_%(column_0_N_name)s",
            "uq": "uq_%(table_name)s_%(column_0_N_name)s",
            "ck": "ck_%(table_name)s_%(constraint_name)s",
            "fk": "fk_%(table_name)s_%(column_0_name)s_%(referred_table_name)s",
            "pk": "pk_%(table_name)s",
        }
    )


class Change(Base):
    """One act of one person: who, when and what; `detail` is JSON. Never changed, never removed."""

    __tablename__ = "change"

    id: Mapped[int] = mapped_column(primary_key=True)
    made_utc: Mapped[str]
    made_by: Mapped[str]
    action: Mapped[str]
    detail: Mapped[str]


class ChangeValue(Base):
    """What a change overwrote: JSON of a row's columns before and after. Never changed, never removed.

    Rows that a change added are not repeated here; they name it by their own `change_id`.
    """

    __tablename__ = "change_value"
    __table_args__ = (Index(None, "change_id"), Index(None, "star_id"))

    id: Mapped[int] = mapped_column(primary_key=True)
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))
    star_id: Mapped[int | None]
    table_name: Mapped[str]
    row_key: Mapped[str]
    before: Mapped[str]
    after: Mapped[str]


class Member(Base):
    """A person with a role; of the token only a hash is kept, and nothing once it is revoked."""

    __tablename__ = "member"

    id: Mapped[int] = mapped_column(primary_key=True)
    name: Mapped[str] = mapped_column(unique=True)
    role: Mapped[str]
    token_hash: Mapped[str | None] = mapped_column(unique=True)
    made_utc: Mapped[str]
    revoked_utc: Mapped[str | None]


class Source(Base):
    """Where values come from."""

    __tablename__ = "source"

    id: Mapped[int] = mapped_column(primary_key=True)
    title: Mapped[str] = mapped_column(unique=True)
    reference: Mapped[str]
    licence: Mapped[str]
    retrieved: Mapped[str]


class Star(Base):
    """One star; position in ICRS at epoch 2000, `flags` words separated by blanks.

    `merged_into` is the entry that stands for this one, where the two turned out to be one star;
    an entry that stands for others is itself part of none.
    """

    __tablename__ = "star"

    id: Mapped[int] = mapped_column(primary_key=True)
    name: Mapped[str]
    ra_deg: Mapped[float]
    dec_deg: Mapped[float]
    pm_ra_mas_yr: Mapped[float | None]
    pm_dec_mas_yr: Mapped[float | None]
    parallax_mas: Mapped[float | None]
    radial_velocity_km_s: Mapped[float | None]
    spectral_type: Mapped[str]
    object_type: Mapped[str]
    flags: Mapped[str]
    cell: Mapped[int] = mapped_column(index=True)
    merged_into: Mapped[int | None] = mapped_column(ForeignKey("star.id"), index=True)
    source_id: Mapped[int] = mapped_column(ForeignKey("source.id"))
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))


class Identifier(Base):
    """A name of a star and the key it is found by; `short` marks keys that say less than the name."""

    __tablename__ = "identifier"
    __table_args__ = (Index(None, "key"), Index(None, "star_id"))

    id: Mapped[int] = mapped_column(primary_key=True)
    star_id: Mapped[int] = mapped_column(ForeignKey("star.id"))
    name: Mapped[str]
    key: Mapped[str]
    short: Mapped[bool]
    source_id: Mapped[int] = mapped_column(ForeignKey("source.id"))
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))


class Magnitude(Base):
    """A star's magnitude in one band from one source; `error_assumed` where the source gave no error.

    `quality` is the source's own letter, '' where it gives none; `chosen` where a keeper has
    preferred this source to what the rules say.
    """

    __tablename__ = "magnitude"

    star_id: Mapped[int] = mapped_column(ForeignKey("star.id"), primary_key=True)
    band: Mapped[str] = mapped_column(primary_key=True)
    source_id: Mapped[int] = mapped_column(ForeignKey("source.id"), primary_key=True)
    value: Mapped[float]
    error: Mapped[float]
    error_assumed: Mapped[bool]
    quality: Mapped[str]
    chosen: Mapped[bool]
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))


class Companion(Base):
    """A neighbour on the sky; differences are neighbour minus star, positive when it is fainter."""

    __tablename__ = "companion"
    __table_args__ = (Index(None, "star_id"),)

    id: Mapped[int] = mapped_column(primary_key=True)
    star_id: Mapped[int] = mapped_column(ForeignKey("star.id"))
    neighbour_id: Mapped[int | None] = mapped_column(ForeignKey("star.id"))
    separation_arcsec: Mapped[float]
    delta_v_mag: Mapped[float | None]
    delta_ks_mag: Mapped[float | None]
    source_id: Mapped[int] = mapped_column(ForeignKey("source.id"))
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))


class Diameter(Base):
    """A star's predicted diameter; `parts` is JSON: relation -> [log theta, weight, pull]."""

    __tablename__ = "diameter"

    star_id: Mapped[int] = mapped_column(ForeignKey("star.id"), primary_key=True)
    limb_darkened_mas: Mapped[float | None]
    own_error_mas: Mapped[float | None]
    shared_error_mas: Mapped[float | None]
    chi_squared: Mapped[float | None]
    degrees_of_freedom: Mapped[int]
    probability: Mapped[float | None]
    discordant: Mapped[bool]
    culprit: Mapped[str | None]
    av_mag: Mapped[float]
    av_error_mag: Mapped[float]
    luminosity_group: Mapped[str]
    spectral_code: Mapped[float | None]
    teff_k: Mapped[float | None]
    logg: Mapped[float | None]
    relation_set: Mapped[str]
    parts: Mapped[str]
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))


class Standing(Base):
    """A judgement of a star, of one band or mode where these are given; rows are only ever added.

    `uid` is the same wherever the standing is carried, `evidence` a JSON list.
    """

    __tablename__ = "standing"
    __table_args__ = (Index(None, "star_id"),)

    id: Mapped[int] = mapped_column(primary_key=True)
    uid: Mapped[str] = mapped_column(unique=True)
    star_id: Mapped[int] = mapped_column(ForeignKey("star.id"))
    standing: Mapped[str]
    band: Mapped[str | None]
    mode: Mapped[str | None]
    reason: Mapped[str]
    evidence: Mapped[str]
    made_by: Mapped[str]
    made_utc: Mapped[str]
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))


class Intake(Base):
    """One table taken in, batch by batch; `key` is the hash of its content and of how it was read.

    `rows_done` rows are in the catalogue or in the rejects; `finished_utc` is None until all are.
    """

    __tablename__ = "intake"

    id: Mapped[int] = mapped_column(primary_key=True)
    key: Mapped[str] = mapped_column(unique=True)
    file: Mapped[str]
    mapping: Mapped[str]
    source_id: Mapped[int] = mapped_column(ForeignKey("source.id"))
    rows_done: Mapped[int]
    added: Mapped[int]
    matched: Mapped[int]
    rejected: Mapped[int]
    started_utc: Mapped[str]
    finished_utc: Mapped[str | None]


class Reject(Base):
    """A row that an intake refused: its line in the file, why, and what it held as JSON."""

    __tablename__ = "reject"
    __table_args__ = (Index(None, "intake_id"),)

    id: Mapped[int] = mapped_column(primary_key=True)
    intake_id: Mapped[int] = mapped_column(ForeignKey("intake.id"))
    line: Mapped[int]
    reason: Mapped[str]
    content: Mapped[str]


class Edition(Base):
    """A frozen state of the catalogue, after the change `change_id`; named by its content's hash."""

    __tablename__ = "edition"

    name: Mapped[str] = mapped_column(primary_key=True)
    made_utc: Mapped[str]
    star_count: Mapped[int]
    relation_set: Mapped[str]
    change_id: Mapped[int] = mapped_column(ForeignKey("change.id"))
