"""The first schema: register, exports, steps, nights, run log and lease.

Revision: 0001, after none.
"""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

CURRENT = sa.text("superseded_at IS NULL")


def upgrade() -> None:
    _register()
    _exports()
    _steps()
    _nights()
    _running()
    op.execute(
        "INSERT INTO lease (id, fence, holder, taken_us, expires_us) VALUES (1, 0, NULL, 0, 0)"
    )


def downgrade() -> None:
    op.drop_table("lease")
    op.drop_table("run")
    op.drop_table("standing")
    op.drop_table("night_list")
    op.drop_table("day_record")
    op.drop_table("edge")
    op.drop_table("verdict")
    op.drop_table("measurement")
    op.drop_table("curve")
    op.drop_table("export")
    op.drop_table("tag_of_set")
    op.drop_table("tag_set")
    op.drop_table("spec_version")
    op.drop_table("loop_version")
    op.drop_table("loop")
    op.drop_table("site_file")
    op.drop_table("site")


def _register() -> None:
    op.create_table(
        "site",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.CheckConstraint("id = 1", name=op.f("ck_site_one_row")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_site")),
    )
    op.create_table(
        "site_file",
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("content_hash", sa.Text(), nullable=False),
        sa.Column("seen_at", sa.DateTime(timezone=True), nullable=False),
        sa.CheckConstraint(
            "kind IN ('settings', 'loops', 'specs')", name=op.f("ck_site_file_kind")
        ),
        sa.PrimaryKeyConstraint("kind", "number", name=op.f("pk_site_file")),
    )
    op.create_table(
        "loop",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_loop")),
        sa.UniqueConstraint("tag", name=op.f("uq_loop_tag")),
    )
    op.create_table(
        "loop_version",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("entered_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("superseded_at", sa.DateTime(timezone=True)),
        sa.Column("retired_at", sa.DateTime(timezone=True)),
        sa.Column("process_unit", sa.Text(), nullable=False),
        sa.Column("service", sa.Text(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("pv", sa.Text(), nullable=False),
        sa.Column("sp", sa.Text(), nullable=False),
        sa.Column("output", sa.Text()),
        sa.Column("mode", sa.Text()),
        sa.Column("eu", sa.Text(), nullable=False),
        sa.Column("range_low", sa.Double()),
        sa.Column("range_high", sa.Double()),
        sa.Column("output_low", sa.Double(), nullable=False),
        sa.Column("output_high", sa.Double(), nullable=False),
        sa.Column("auto_modes", sa.JSON(), nullable=False),
        sa.Column("criticality", sa.Integer(), nullable=False),
        sa.Column("cascade_primary", sa.Text()),
        sa.Column("averaging", sa.Boolean(), nullable=False),
        sa.Column("before_us", sa.BigInteger(), nullable=False),
        sa.Column("after_us", sa.BigInteger(), nullable=False),
        sa.Column("join_us", sa.BigInteger(), nullable=False),
        sa.Column("notes", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["loop_id"], ["loop.id"], name=op.f("fk_loop_version_loop_id_loop")
        ),
        sa.PrimaryKeyConstraint("loop_id", "version", name=op.f("pk_loop_version")),
    )
    op.create_index(
        "uq_loop_version_current",
        "loop_version",
        ["loop_id"],
        unique=True,
        sqlite_where=CURRENT,
        postgresql_where=CURRENT,
    )
    op.create_table(
        "spec_version",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("valid_from", sa.DateTime(timezone=True), nullable=False),
        sa.Column("entered_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("withdrawn_at", sa.DateTime(timezone=True)),
        sa.Column("limits", sa.JSON(), nullable=False),
        sa.Column("settling_band_pct", sa.Double(), nullable=False),
        sa.Column("min_step_eu", sa.Double()),
        sa.Column("set_by", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["loop_id"], ["loop.id"], name=op.f("fk_spec_version_loop_id_loop")
        ),
        sa.PrimaryKeyConstraint("loop_id", "version", name=op.f("pk_spec_version")),
    )


def _exports() -> None:
    op.create_table(
        "tag_set",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_tag_set")),
        sa.UniqueConstraint("digest", name=op.f("uq_tag_set_digest")),
    )
    op.create_table(
        "tag_of_set",
        sa.Column("tag_set_id", sa.Integer(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["tag_set_id"], ["tag_set.id"], name=op.f("fk_tag_of_set_tag_set_id_tag_set")
        ),
        sa.PrimaryKeyConstraint("tag_set_id", "tag", name=op.f("pk_tag_of_set")),
    )
    op.create_index(op.f("ix_tag_of_set_tag"), "tag_of_set", ["tag"], unique=False)
    op.create_table(
        "export",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("source", sa.Text(), nullable=False),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("content_hash", sa.Text()),
        sa.Column("size", sa.BigInteger(), nullable=False),
        sa.Column("stamp", sa.Text(), nullable=False),
        sa.Column("revision", sa.BigInteger(), nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text()),
        sa.Column("first_us", sa.BigInteger()),
        sa.Column("last_us", sa.BigInteger()),
        sa.Column("tag_set_id", sa.Integer()),
        sa.Column("newest_good_us", sa.BigInteger()),
        sa.Column("future_stamps", sa.BigInteger(), nullable=False),
        sa.Column("file_rows", sa.BigInteger(), nullable=False),
        sa.Column("cells_read", sa.BigInteger(), nullable=False),
        sa.Column("cells_taken", sa.BigInteger(), nullable=False),
        sa.Column("cells_duplicate", sa.BigInteger(), nullable=False),
        sa.Column("cells_replaced", sa.BigInteger(), nullable=False),
        sa.Column("cells_blank", sa.BigInteger(), nullable=False),
        sa.Column("cells_bad_quality", sa.BigInteger(), nullable=False),
        sa.Column("cells_unregistered", sa.BigInteger(), nullable=False),
        sa.Column("cells_refused", sa.JSON(), nullable=False),
        sa.Column("read_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("superseded_at", sa.DateTime(timezone=True)),
        sa.CheckConstraint(
            "state IN ('reading', 'taken', 'refused')", name=op.f("ck_export_state")
        ),
        sa.CheckConstraint("first_us <= last_us", name=op.f("ck_export_span")),
        sa.ForeignKeyConstraint(
            ["tag_set_id"], ["tag_set.id"], name=op.f("fk_export_tag_set_id_tag_set")
        ),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_export")),
        sa.UniqueConstraint("path", "content_hash", name=op.f("uq_export_path_content_hash")),
    )
    op.create_index(
        "uq_export_current",
        "export",
        ["path"],
        unique=True,
        sqlite_where=CURRENT,
        postgresql_where=CURRENT,
    )


def _steps() -> None:
    op.create_table(
        "curve",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("from_us", sa.BigInteger(), nullable=False),
        sa.Column("to_us", sa.BigInteger(), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.Column("data", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_curve_loop_id_loop")),
        sa.PrimaryKeyConstraint("loop_id", "at_us", "number", name=op.f("pk_curve")),
    )
    op.create_index(op.f("ix_curve_loop_id_to_us"), "curve", ["loop_id", "to_us"], unique=False)
    op.create_table(
        "measurement",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("curve_number", sa.Integer(), nullable=False),
        sa.Column("fingerprint", sa.LargeBinary(), nullable=False),
        sa.Column("measured_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("superseded_at", sa.DateTime(timezone=True)),
        sa.Column("sp_from", sa.Double(), nullable=False),
        sa.Column("sp_to", sa.Double(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("moves", sa.JSON(), nullable=False),
        sa.Column("window_end_us", sa.BigInteger(), nullable=False),
        sa.Column("complete", sa.Boolean(), nullable=False),
        sa.Column("cut", sa.Text()),
        sa.Column("change_set_aside", sa.JSON(), nullable=False),
        sa.Column("sp_noise_eu", sa.Double(), nullable=False),
        sa.Column("measured", sa.JSON(), nullable=False),
        sa.Column("method_version", sa.Text(), nullable=False),
        sa.Column("spec_band_pct", sa.Double(), nullable=False),
        sa.Column("y0_eu", sa.Double()),
        sa.Column("y_end_eu", sa.Double()),
        sa.Column("noise_eu", sa.Double()),
        sa.Column("usable", sa.Boolean(), nullable=False),
        sa.Column("set_aside", sa.JSON(), nullable=False),
        sa.Column("depends_from_us", sa.BigInteger()),
        sa.Column("depends_to_us", sa.BigInteger()),
        sa.ForeignKeyConstraint(
            ["loop_id", "at_us", "curve_number"],
            ["curve.loop_id", "curve.at_us", "curve.number"],
            name=op.f("fk_measurement_loop_id_at_us_curve_number_curve"),
        ),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_measurement_loop_id_loop")),
        sa.PrimaryKeyConstraint("loop_id", "at_us", "number", name=op.f("pk_measurement")),
    )
    op.create_index(
        op.f("ix_measurement_loop_id_depends_to_us"),
        "measurement",
        ["loop_id", "depends_to_us"],
        unique=False,
        sqlite_where=CURRENT,
        postgresql_where=CURRENT,
    )
    op.create_index(
        "uq_measurement_current",
        "measurement",
        ["loop_id", "at_us"],
        unique=True,
        sqlite_where=CURRENT,
        postgresql_where=CURRENT,
    )
    op.create_table(
        "verdict",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("quantity", sa.Text(), nullable=False),
        sa.Column("spec_version", sa.Integer(), nullable=False),
        sa.Column("limit_value", sa.Double(), nullable=False),
        sa.Column("outcome", sa.Text(), nullable=False),
        sa.Column("why", sa.Text()),
        sa.ForeignKeyConstraint(
            ["loop_id", "at_us", "number"],
            ["measurement.loop_id", "measurement.at_us", "measurement.number"],
            name=op.f("fk_verdict_loop_id_at_us_number_measurement"),
        ),
        sa.ForeignKeyConstraint(
            ["loop_id", "spec_version"],
            ["spec_version.loop_id", "spec_version.version"],
            name=op.f("fk_verdict_loop_id_spec_version_spec_version"),
        ),
        sa.PrimaryKeyConstraint("loop_id", "at_us", "number", "quantity", name=op.f("pk_verdict")),
    )
    op.create_table(
        "edge",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("border_us", sa.BigInteger(), nullable=False),
        sa.Column("side", sa.Text(), nullable=False),
        sa.Column("from_us", sa.BigInteger(), nullable=False),
        sa.Column("to_us", sa.BigInteger(), nullable=False),
        sa.Column("data", sa.LargeBinary(), nullable=False),
        sa.CheckConstraint("side IN ('from', 'to')", name=op.f("ck_edge_side")),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_edge_loop_id_loop")),
        sa.PrimaryKeyConstraint("loop_id", "border_us", "side", name=op.f("pk_edge")),
    )
    op.create_table(
        "day_record",
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("day", sa.Date(), nullable=False),
        sa.Column("span_us", sa.BigInteger(), nullable=False),
        sa.Column("auto_us", sa.BigInteger(), nullable=False),
        sa.Column("mode_us", sa.BigInteger(), nullable=False),
        sa.Column("saturated_us", sa.BigInteger(), nullable=False),
        sa.Column("output_us", sa.BigInteger(), nullable=False),
        sa.Column("pv_bad_us", sa.BigInteger(), nullable=False),
        sa.Column("runs", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_day_record_loop_id_loop")),
        sa.PrimaryKeyConstraint("loop_id", "day", name=op.f("pk_day_record")),
    )


def _nights() -> None:
    op.create_table(
        "night_list",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("night", sa.Date(), nullable=False),
        sa.Column("revision", sa.Integer(), nullable=False),
        sa.Column("cutoff", sa.DateTime(timezone=True), nullable=False),
        sa.Column("computed_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_night_list")),
        sa.UniqueConstraint("night", "revision", name=op.f("uq_night_list_night_revision")),
    )
    op.create_table(
        "standing",
        sa.Column("night_list_id", sa.Integer(), nullable=False),
        sa.Column("rank", sa.Integer(), nullable=False),
        sa.Column("loop_id", sa.Integer(), nullable=False),
        sa.Column("list_group", sa.Text(), nullable=False),
        sa.Column("standing", sa.Text(), nullable=False),
        sa.Column("degraded", sa.Boolean(), nullable=False),
        sa.Column("since", sa.Date()),
        sa.Column("usable_steps", sa.Integer(), nullable=False),
        sa.Column("criticality", sa.Integer(), nullable=False),
        sa.Column("distance", sa.Double()),
        sa.Column("reference", sa.Double()),
        sa.Column("reference_kind", sa.Text()),
        sa.Column("order_quantity", sa.Text()),
        sa.Column("order_value", sa.Double()),
        sa.Column("detail", sa.JSON(), nullable=False),
        sa.ForeignKeyConstraint(["loop_id"], ["loop.id"], name=op.f("fk_standing_loop_id_loop")),
        sa.ForeignKeyConstraint(
            ["night_list_id"], ["night_list.id"], name=op.f("fk_standing_night_list_id_night_list")
        ),
        sa.PrimaryKeyConstraint("night_list_id", "rank", name=op.f("pk_standing")),
        sa.UniqueConstraint(
            "night_list_id", "loop_id", name=op.f("uq_standing_night_list_id_loop_id")
        ),
    )
    op.create_index(op.f("ix_standing_loop_id"), "standing", ["loop_id"], unique=False)


def _running() -> None:
    op.create_table(
        "run",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("started_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("ended_at", sa.DateTime(timezone=True)),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("counts", sa.JSON(), nullable=False),
        sa.Column("error", sa.Text()),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_run")),
    )
    op.create_table(
        "lease",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("fence", sa.BigInteger(), nullable=False),
        sa.Column("holder", sa.Text()),
        sa.Column("taken_us", sa.BigInteger(), nullable=False),
        sa.Column("expires_us", sa.BigInteger(), nullable=False),
        sa.CheckConstraint("id = 1", name=op.f("ck_lease_one_row")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_lease")),
    )
