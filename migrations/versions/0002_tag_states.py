"""What a loop's tags last said, which tags an export was asked for, and what pruning needs.

Revision: 0002, after 0001.
"""

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

CURRENT = sa.text("superseded_at IS NULL")
REPLACED = sa.text("superseded_at IS NOT NULL")


def upgrade() -> None:
    op.create_table(
        "tag_state",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("role", sa.Text(), nullable=False),
        sa.Column("newest_us", sa.BigInteger(), nullable=False),
        sa.Column("value", sa.Double(), nullable=False),
        sa.Column("held_since_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_tag_state_loop_id_loop")),
        sa.PrimaryKeyConstraint("loop_id", "role", name=op.f("pk_tag_state")),
    )
    op.create_table(
        "closed",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("until_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_closed_loop_id_loop")),
        sa.PrimaryKeyConstraint("loop_id", name=op.f("pk_closed")),
    )
    op.create_index(
        op.f("ix_measurement_loop_id_at_us_superseded_at_usable_kind"),
        "measurement",
        ["loop_id", "at_us", "superseded_at", "usable", "kind"],
        sqlite_where=CURRENT,
        postgresql_where=CURRENT,
    )
    op.create_index(
        op.f("ix_measurement_superseded_at"),
        "measurement",
        ["superseded_at"],
        sqlite_where=REPLACED,
        postgresql_where=REPLACED,
    )
    with op.batch_alter_table("export") as batch:
        batch.add_column(sa.Column("asked_set_id", sa.Integer()))
        batch.create_foreign_key(
            op.f("fk_export_asked_set_id_tag_set"), "tag_set", ["asked_set_id"], ["id"]
        )


def downgrade() -> None:
    with op.batch_alter_table("export") as batch:
        batch.drop_constraint(op.f("fk_export_asked_set_id_tag_set"), type_="foreignkey")
        batch.drop_column("asked_set_id")
    op.drop_index(op.f("ix_measurement_superseded_at"), "measurement")
    op.drop_index(op.f("ix_measurement_loop_id_at_us_superseded_at_usable_kind"), "measurement")
    op.drop_table("closed")
    op.drop_table("tag_state")
