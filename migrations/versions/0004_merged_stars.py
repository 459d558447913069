"""Entries that turned out to be one star: one stands for the other."""

import sqlalchemy as sa
from alembic import op

revision = "0004"
down_revision = "0003"
branch_labels = None
depends_on = None


def upgrade() -> None:
    with op.batch_alter_table("star") as batch:
        batch.add_column(sa.Column("merged_into", sa.Integer(), nullable=True))
        batch.create_foreign_key(op.f("fk_star_merged_into_star"), "star", ["merged_into"], ["id"])
    with op.batch_alter_table("star") as batch:
        batch.create_index(batch.f("ix_star_merged_into"), ["merged_into"])


def downgrade() -> None:
    with op.batch_alter_table("star") as batch:
        batch.drop_index(batch.f("ix_star_merged_into"))
    with op.batch_alter_table("star") as batch:
        batch.drop_constraint(op.f("fk_star_merged_into_star"), type_="foreignkey")
        batch.drop_column("merged_into")
