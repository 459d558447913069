"""Intakes and the rows that they refused; quality of magnitudes and a keeper's choice among them."""

import sqlalchemy as sa
from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "intake",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("key", sa.String(), nullable=False),
        sa.Column("file", sa.String(), nullable=False),
        sa.Column("mapping", sa.String(), nullable=False),
        sa.Column("source_id", sa.Integer(), nullable=False),
        sa.Column("rows_done", sa.Integer(), nullable=False),
        sa.Column("added", sa.Integer(), nullable=False),
        sa.Column("matched", sa.Integer(), nullable=False),
        sa.Column("rejected", sa.Integer(), nullable=False),
        sa.Column("started_utc", sa.String(), nullable=False),
        sa.Column("finished_utc", sa.String(), nullable=True),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_intake_source_id_source")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_intake")),
        sa.UniqueConstraint("key", name=op.f("uq_intake_key")),
    )
    op.create_table(
        "reject",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("intake_id", sa.Integer(), nullable=False),
        sa.Column("line", sa.Integer(), nullable=False),
        sa.Column("reason", sa.String(), nullable=False),
        sa.Column("content", sa.String(), nullable=False),
        sa.ForeignKeyConstraint(["intake_id"], ["intake.id"], name=op.f("fk_reject_intake_id_intake")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_reject")),
    )
    with op.batch_alter_table("reject") as batch:
        batch.create_index(batch.f("ix_reject_intake_id"), ["intake_id"])
    with op.batch_alter_table("magnitude") as batch:
        batch.add_column(sa.Column("quality", sa.String(), nullable=False, server_default=""))
        batch.add_column(sa.Column("chosen", sa.Boolean(), nullable=False, server_default=sa.false()))
    with op.batch_alter_table("magnitude") as batch:
        batch.alter_column("quality", existing_type=sa.String(), server_default=None)
        batch.alter_column("chosen", existing_type=sa.Boolean(), server_default=None)


def downgrade() -> None:
    with op.batch_alter_table("magnitude") as batch:
        batch.drop_column("chosen")
        batch.drop_column("quality")
    with op.batch_alter_table("reject") as batch:
        batch.drop_index(batch.f("ix_reject_intake_id"))
    op.drop_table("reject")
    op.drop_table("intake")
