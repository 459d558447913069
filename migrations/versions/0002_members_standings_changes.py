"""Members; the change log, which every row names that it added; standings by band and mode."""

import json
import uuid
from datetime import UTC, datetime

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

ROWS = ("star", "identifier", "magnitude", "companion", "diameter")
APPEND_ONLY = ("change", "change_value", "standing")


def upgrade() -> None:
    op.create_table(
        "change",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("made_utc", sa.String(), nullable=False),
        sa.Column("made_by", sa.String(), nullable=False),
        sa.Column("action", sa.String(), nullable=False),
        sa.Column("detail", sa.String(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_change")),
    )
    op.create_table(
        "change_value",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("change_id", sa.Integer(), nullable=False),
        sa.Column("star_id", sa.Integer(), nullable=True),
        sa.Column("table_name", sa.String(), nullable=False),
        sa.Column("row_key", sa.String(), nullable=False),
        sa.Column("before", sa.String(), nullable=False),
        sa.Column("after", sa.String(), nullable=False),
        sa.ForeignKeyConstraint(["change_id"], ["change.id"], name=op.f("fk_change_value_change_id_change")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_change_value")),
    )
    with op.batch_alter_table("change_value") as batch:
        batch.create_index(batch.f("ix_change_value_change_id"), ["change_id"])
        batch.create_index(batch.f("ix_change_value_star_id"), ["star_id"])
    op.create_table(
        "member",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("name", sa.String(), nullable=False),
        sa.Column("role", sa.String(), nullable=False),
        sa.Column("token_hash", sa.String(), nullable=True),
        sa.Column("made_utc", sa.String(), nullable=False),
        sa.Column("revoked_utc", sa.String(), nullable=True),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_member")),
        sa.UniqueConstraint("name", name=op.f("uq_member_name")),
        sa.UniqueConstraint("token_hash", name=op.f("uq_member_token_hash")),
    )
    _first_changes()
    for table in ROWS:
        _add_change_id(table)
    with op.batch_alter_table("standing") as batch:
        batch.add_column(sa.Column("uid", sa.String(), nullable=True))
        batch.add_column(sa.Column("band", sa.String(), nullable=True))
        batch.add_column(sa.Column("mode", sa.String(), nullable=True))
        batch.add_column(sa.Column("evidence", sa.String(), nullable=False, server_default="[]"))
        batch.add_column(sa.Column("change_id", sa.Integer(), nullable=True))
    with op.batch_alter_table("edition") as batch:
        batch.add_column(sa.Column("change_id", sa.Integer(), nullable=True))
    _fill_standings_and_editions()
    with op.batch_alter_table("standing") as batch:
        batch.alter_column("uid", existing_type=sa.String(), nullable=False)
        batch.alter_column("evidence", existing_type=sa.String(), server_default=None)
        batch.alter_column("change_id", existing_type=sa.Integer(), nullable=False)
        batch.create_unique_constraint(op.f("uq_standing_uid"), ["uid"])
        batch.create_foreign_key(op.f("fk_standing_change_id_change"), "change", ["change_id"], ["id"])
    with op.batch_alter_table("edition") as batch:
        batch.alter_column("change_id", existing_type=sa.Integer(), nullable=False)
        batch.create_foreign_key(op.f("fk_edition_change_id_change"), "change", ["change_id"], ["id"])
    _guard()


def _add_change_id(table: str) -> None:
    with op.batch_alter_table(table) as batch:
        batch.add_column(sa.Column("change_id", sa.Integer(), nullable=False, server_default="1"))
        batch.create_foreign_key(op.f(f"fk_{table}_change_id_change"), "change", ["change_id"], ["id"])
    with op.batch_alter_table(table) as batch:
        batch.alter_column("change_id", existing_type=sa.Integer(), server_default=None)


def _precise(made_utc: str) -> str:
    """A time of whole seconds written as newer ones are."""
    return made_utc if "." in made_utc else made_utc.replace("Z", ".000000Z")


def _first_changes() -> None:
    """Where there are stars, change 1 is whatever put them there, and each standing is one more."""
    connection = op.get_bind()
    insert = sa.text(
        "INSERT INTO change (id, made_utc, made_by, action, detail) VALUES (:id, :at, :by, :what, :more)"
    )
    if not any(
        connection.execute(sa.text(f"SELECT * FROM {table} LIMIT 1")).first() for table in ("star", "edition")
    ):
        return
    first = connection.execute(sa.text("SELECT min(made_utc) FROM edition")).scalar()
    first = _precise(first or datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ"))
    last, rows = first, [{"id": 1, "at": first, "by": "Pinlight", "what": "seed", "more": "{}"}]
    standings = sa.text("SELECT id, star_id, standing, made_by, made_utc FROM standing ORDER BY id")
    for row in connection.execute(standings):
        more = json.dumps({"star_id": row.star_id, "standing": row.standing})
        last = max(_precise(row.made_utc), last)
        rows.append({"id": len(rows) + 1, "at": last, "by": row.made_by, "what": "standing", "more": more})
    connection.execute(insert, rows)
    if connection.dialect.name == "postgresql":
        connection.execute(sa.text(f"SELECT setval('change_id_seq', {len(rows)})"))


def _fill_standings_and_editions() -> None:
    connection = op.get_bind()
    update = sa.text("UPDATE standing SET uid = :uid, change_id = :change, made_utc = :at WHERE id = :id")
    rows = connection.execute(sa.text("SELECT id, made_utc FROM standing ORDER BY id")).all()
    for index, row in enumerate(rows):
        at = _precise(row.made_utc)
        connection.execute(update, {"uid": uuid.uuid4().hex, "change": index + 2, "at": at, "id": row.id})
    newest = sa.text("SELECT coalesce(max(id), 1) FROM change WHERE made_utc <= :at")
    update = sa.text("UPDATE edition SET made_utc = :at, change_id = :change WHERE name = :name")
    for name, made_utc in connection.execute(sa.text("SELECT name, made_utc FROM edition")).all():
        at = _precise(made_utc)
        change = connection.execute(newest, {"at": at}).scalar()
        connection.execute(update, {"at": at, "change": change, "name": name})


def _guard() -> None:
    """Rows of the change log and of standings can be added, not changed or removed."""
    if op.get_bind().dialect.name == "postgresql":
        op.execute(
            "CREATE FUNCTION append_only() RETURNS trigger LANGUAGE plpgsql AS"
            " $$ BEGIN RAISE EXCEPTION '% is append-only', TG_TABLE_NAME; END $$"
        )
    for table in APPEND_ONLY:
        for event in ("update", "delete"):
            name = f"{table}_no_{event}"
            if op.get_bind().dialect.name == "postgresql":
                op.execute(
                    f"CREATE TRIGGER {name} BEFORE {event} ON {table}"
                    " FOR EACH STATEMENT EXECUTE FUNCTION append_only()"
                )
            else:
                op.execute(
                    f"CREATE TRIGGER {name} BEFORE {event} ON {table}"
                    f" BEGIN SELECT RAISE(ABORT, '{table} is append-only'); END"
                )


def downgrade() -> None:
    for table in APPEND_ONLY:
        for event in ("update", "delete"):
            on = f" ON {table}" if op.get_bind().dialect.name == "postgresql" else ""
            op.execute(f"DROP TRIGGER {table}_no_{event}{on}")
    if op.get_bind().dialect.name == "postgresql":
        op.execute("DROP FUNCTION append_only()")
    # The older schema would take a judgement of one band for one of the star.
    op.execute("DELETE FROM standing WHERE band IS NOT NULL OR mode IS NOT NULL")
    with op.batch_alter_table("edition") as batch:
        batch.drop_constraint(op.f("fk_edition_change_id_change"), type_="foreignkey")
        batch.drop_column("change_id")
    with op.batch_alter_table("standing") as batch:
        batch.drop_constraint(op.f("fk_standing_change_id_change"), type_="foreignkey")
        batch.drop_constraint(op.f("uq_standing_uid"), type_="unique")
        for column in ("change_id", "evidence", "mode", "band", "uid"):
            batch.drop_column(column)
    for table in ROWS:
        with op.batch_alter_table(table) as batch:
            batch.drop_constraint(op.f(f"fk_{table}_change_id_change"), type_="foreignkey")
            batch.drop_column("change_id")
    op.drop_table("member")
    with op.batch_alter_table("change_value") as batch:
        batch.drop_index(batch.f("ix_change_value_star_id"))
        batch.drop_index(batch.f("ix_change_value_change_id"))
    op.drop_table("change_value")
    op.drop_table("change")
