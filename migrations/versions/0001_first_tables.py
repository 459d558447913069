"""First tables: stars, their names, magnitudes, companions, diameters, standings; editions."""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "edition",
        sa.Column("name", sa.String(), nullable=False),
        sa.Column("made_utc", sa.String(), nullable=False),
        sa.Column("star_count", sa.Integer(), nullable=False),
        sa.Column("relation_set", sa.String(), nullable=False),
        sa.PrimaryKeyConstraint("name", name=op.f("pk_edition")),
    )
    op.create_table(
        "source",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("title", sa.String(), nullable=False),
        sa.Column("reference", sa.String(), nullable=False),
        sa.Column("licence", sa.String(), nullable=False),
        sa.Column("retrieved", sa.String(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_source")),
        sa.UniqueConstraint("title", name=op.f("uq_source_title")),
    )
    op.create_table(
        "star",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("name", sa.String(), nullable=False),
        sa.Column("ra_deg", sa.Double(), nullable=False),
        sa.Column("dec_deg", sa.Double(), nullable=False),
        sa.Column("pm_ra_mas_yr", sa.Double(), nullable=True),
        sa.Column("pm_dec_mas_yr", sa.Double(), nullable=True),
        sa.Column("parallax_mas", sa.Double(), nullable=True),
        sa.Column("radial_velocity_km_s", sa.Double(), nullable=True),
        sa.Column("spectral_type", sa.String(), nullable=False),
        sa.Column("object_type", sa.String(), nullable=False),
        sa.Column("flags", sa.String(), nullable=False),
        sa.Column("cell", sa.Integer(), nullable=False),
        sa.Column("source_id", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_star_source_id_source")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_star")),
    )
    with op.batch_alter_table("star", schema=None) as batch_op:
        batch_op.create_index(batch_op.f("ix_star_cell"), ["cell"], unique=False)

    op.create_table(
        "companion",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("star_id", sa.Integer(), nullable=False),
        sa.Column("neighbour_id", sa.Integer(), nullable=True),
        sa.Column("separation_arcsec", sa.Double(), nullable=False),
        sa.Column("delta_v_mag", sa.Double(), nullable=True),
        sa.Column("delta_ks_mag", sa.Double(), nullable=True),
        sa.Column("source_id", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(["neighbour_id"], ["star.id"], name=op.f("fk_companion_neighbour_id_star")),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_companion_source_id_source")),
        sa.ForeignKeyConstraint(["star_id"], ["star.id"], name=op.f("fk_companion_star_id_star")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_companion")),
    )
    with op.batch_alter_table("companion", schema=None) as batch_op:
        batch_op.create_index(batch_op.f("ix_companion_star_id"), ["star_id"], unique=False)

    op.create_table(
        "diameter",
        sa.Column("star_id", sa.Integer(), nullable=False),
        sa.Column("limb_darkened_mas", sa.Double(), nullable=True),
        sa.Column("own_error_mas", sa.Double(), nullable=True),
        sa.Column("shared_error_mas", sa.Double(), nullable=True),
        sa.Column("chi_squared", sa.Double(), nullable=True),
        sa.Column("degrees_of_freedom", sa.Integer(), nullable=False),
        sa.Column("probability", sa.Double(), nullable=True),
        sa.Column("discordant", sa.Boolean(), nullable=False),
        sa.Column("culprit", sa.String(), nullable=True),
        sa.Column("av_mag", sa.Double(), nullable=False),
        sa.Column("av_error_mag", sa.Double(), nullable=False),
        sa.Column("luminosity_group", sa.String(), nullable=False),
        sa.Column("spectral_code", sa.Double(), nullable=True),
        sa.Column("teff_k", sa.Double(), nullable=True),
        sa.Column("logg", sa.Double(), nullable=True),
        sa.Column("relation_set", sa.String(), nullable=False),
        sa.Column("parts", sa.String(), nullable=False),
        sa.ForeignKeyConstraint(["star_id"], ["star.id"], name=op.f("fk_diameter_star_id_star")),
        sa.PrimaryKeyConstraint("star_id", name=op.f("pk_diameter")),
    )
    op.create_table(
        "identifier",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("star_id", sa.Integer(), nullable=False),
        sa.Column("name", sa.String(), nullable=False),
        sa.Column("key", sa.String(), nullable=False),
        sa.Column("short", sa.Boolean(), nullable=False),
        sa.Column("source_id", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_identifier_source_id_source")),
        sa.ForeignKeyConstraint(["star_id"], ["star.id"], name=op.f("fk_identifier_star_id_star")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_identifier")),
    )
    with op.batch_alter_table("identifier", schema=None) as batch_op:
        batch_op.create_index(batch_op.f("ix_identifier_key"), ["key"], unique=False)
        batch_op.create_index(batch_op.f("ix_identifier_star_id"), ["star_id"], unique=False)

    op.create_table(
        "magnitude",
        sa.Column("star_id", sa.Integer(), nullable=False),
        sa.Column("band", sa.String(), nullable=False),
        sa.Column("source_id", sa.Integer(), nullable=False),
        sa.Column("value", sa.Double(), nullable=False),
        sa.Column("error", sa.Double(), nullable=False),
        sa.Column("error_assumed", sa.Boolean(), nullable=False),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_magnitude_source_id_source")),
        sa.ForeignKeyConstraint(["star_id"], ["star.id"], name=op.f("fk_magnitude_star_id_star")),
        sa.PrimaryKeyConstraint("star_id", "band", "source_id", name=op.f("pk_magnitude")),
    )
    op.create_table(
        "standing",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("star_id", sa.Integer(), nullable=False),
        sa.Column("standing", sa.String(), nullable=False),
        sa.Column("reason", sa.String(), nullable=False),
        sa.Column("made_by", sa.String(), nullable=False),
        sa.Column("made_utc", sa.String(), nullable=False),
        sa.ForeignKeyConstraint(["star_id"], ["star.id"], name=op.f("fk_standing_star_id_star")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_standing")),
    )
    with op.batch_alter_table("standing", schema=None) as batch_op:
        batch_op.create_index(batch_op.f("ix_standing_star_id"), ["star_id"], unique=False)


def downgrade() -> None:
    with op.batch_alter_table("standing", schema=None) as batch_op:
        batch_op.drop_index(batch_op.f("ix_standing_star_id"))

    op.drop_table("standing")
    op.drop_table("magnitude")
    with op.batch_alter_table("identifier", schema=None) as batch_op:
        batch_op.drop_index(batch_op.f("ix_identifier_star_id"))
        batch_op.drop_index(batch_op.f("ix_identifier_key"))

    op.drop_table("identifier")
    op.drop_table("diameter")
    with op.batch_alter_table("companion", schema=None) as batch_op:
        batch_op.drop_index(batch_op.f("ix_companion_star_id"))

    op.drop_table("companion")
    with op.batch_alter_table("star", schema=None) as batch_op:
        batch_op.drop_index(batch_op.f("ix_star_cell"))

    op.drop_table("star")
    op.drop_table("source")
    op.drop_table("edition")
