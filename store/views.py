"""Views that put later rows beside the earlier ones they speak of; made in the migrations."""

from __future__ import annotations

from sqlalchemy import Column, MetaData, Table

from store.columns import Uuid16, json_text, real, seq, text, whole
from store.tables import LEVEL_FIGURES, VECTOR_FIGURES, mark, mount

views = MetaData()

run_now = Table(
    "run_now",
    views,
    seq(),
    Column("id", Uuid16),
    Column("job_id", Uuid16),
    whole("number"),
    whole("unassigned_number"),
    Column("first_job_id", Uuid16),
    whole("first_number"),
    Column("mount_id", Uuid16),
    whole("mount_seq"),
    Column("set_up_id", Uuid16),
    text("origin"),
    text("operator"),
    json_text("condition"),
    text("software"),
    Column("session_id", Uuid16),
    whole("started_us"),
    text("state"),
    text("reason"),
    text("detail"),
    whole("ended_us"),
    text("void"),
)

reading_now = Table(
    "reading_now",
    views,
    seq(),
    Column("id", Uuid16),
    Column("run_id", Uuid16),
    whole("number"),
    whole("at_us"),
    real("duration_s"),
    real("speed_hz"),
    whole("revolutions"),
    whole("segment"),
    whole("first_sample"),
    json_text("steadiness"),
    json_text("flags"),
    json_text("figures"),
    whole("version"),
    text("label"),
    text("labelled_by"),
)

vector_now = Table(
    "vector_now",
    views,
    Column("reading_id", Uuid16),
    whole("version"),
    whole("place"),
    text("channel"),
    whole("harmonic"),
    *(real(name) for name in VECTOR_FIGURES),
    text("unit"),
)

level_now = Table(
    "level_now",
    views,
    Column("reading_id", Uuid16),
    whole("version"),
    whole("place"),
    text("channel"),
    *(real(name) for name in LEVEL_FIGURES),
    text("unit"),
)

mount_now = Table(
    "mount_now",
    views,
    *(Column(c.name, c.type) for c in mount.columns),
    whole("ended_us"),
)

mount_mark_now = Table(
    "mount_mark_now",
    views,
    Column("mount_id", Uuid16),
    whole("plane"),
    real("from_hole1_deg"),
    real("typed_from_hole1_deg"),
)

mark_now = Table(
    "mark_now",
    views,
    *(Column(c.name, c.type) for c in mark.columns),
    text("state"),
    text("detail"),
    Column("run_id", Uuid16),
    Column("reading_id", Uuid16),
)
