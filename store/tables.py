"""The record as tables. Source tables are append-only (triggers refuse UPDATE and DELETE).

Every source table counts its rows in ``seq``: order is the order of entry, never the wall clock. Times
are integer microseconds UTC (``_us``), speeds Hz, angles degrees, vectors 0-peak in the channel's base
unit. What may change its meaning later (run, mark, mount, label) never changes its row: the end, the
void, the assignment, the next mount or the next label is a row of its own.
The schema itself is made by the migrations; a test holds these tables against what they make.
"""

from __future__ import annotations

from sqlalchemy import (
    CheckConstraint,
    Column,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    Table,
    UniqueConstraint,
)

from store.columns import json_text, key, real, ref, seq, text, whole

metadata = MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
    }
)

store_info = Table(
    "store_info",
    metadata,
    seq(),
    key(),
    whole("made_us"),
    text("made_by"),
)

# --- the rotor and the stand -------------------------------------------------------------------------

model = Table(
    "model",
    metadata,
    seq(),
    key(),
    text("code"),
    whole("revision"),
    real("first_critical_hz", optional=True),
    whole("at_us"),
    text("who"),
    UniqueConstraint("code", "revision"),
)

weight_plane = Table(
    "weight_plane",
    metadata,
    ref("model_id", "model.id", primary=True),
    whole("number", primary=True),
    real("radius_mm"),
    whole("holes"),
    text("numbering_turn"),
    text("numbering_seen_from"),
    real("position_mm", optional=True),
)

machine = Table(
    "machine",
    metadata,
    seq(),
    key(),
    text("serial"),
    whole("revision"),
    ref("model_id", "model.id"),
    real("rotor_mass_kg"),
    real("service_hz"),
    real("grade_mm_s", optional=True),
    real("permissible_gmm", optional=True),
    json_text("bearing_loads_kg"),
    real("vibration_limit_um_pk", optional=True),
    whole("at_us"),
    text("who"),
    UniqueConstraint("serial", "revision"),
)

set_up = Table(
    "set_up",
    metadata,
    seq(),
    key(),
    text("stand"),
    whole("revision"),
    text("end_a"),
    text("end_b"),
    text("angles_seen_from"),
    text("zero"),
    text("pulse_name"),
    text("pulse_input"),
    text("pulse_edge"),
    real("pulse_level_v", optional=True),
    real("pulse_angle_deg"),
    whole("pulse_count"),
    json_text("pulse_pattern", optional=True),
    real("rate_hz"),
    text("driver"),
    text("digest"),
    whole("at_us"),
    text("software"),
    UniqueConstraint("stand", "revision"),
    UniqueConstraint("stand", "digest"),
)

set_up_channel = Table(
    "set_up_channel",
    metadata,
    ref("set_up_id", "set_up.id", primary=True),
    whole("place", primary=True),
    text("name"),
    text("kind"),
    text("unit"),
    text("input"),
    real("volts_per_unit"),
    whole("positive"),
    real("angle_deg"),
    text("coupling"),
    text("filter"),
    real("skew_s"),
    real("gap_low_v", optional=True),
    real("gap_high_v", optional=True),
    text("pair", optional=True),
)

# --- jobs, mounts, weights ---------------------------------------------------------------------------

job = Table(
    "job",
    metadata,
    seq(),
    key(),
    text("number"),
    text("machine_serial"),
    whole("opened_us"),
    text("who"),
    UniqueConstraint("number"),
    Index("ix_job_machine_serial", "machine_serial"),
)

job_speed = Table(
    "job_speed",
    metadata,
    ref("job_id", "job.id", primary=True),
    whole("place", primary=True),
    real("speed_hz"),
)

mount = Table(
    "mount",
    metadata,
    seq(),
    key(),
    # no job = nothing is mounted from here on
    ref("job_id", "job.id", optional=True),
    ref("machine_id", "machine.id", optional=True),
    ref("model_id", "model.id", optional=True),
    text("rotation_turn", optional=True),
    text("rotation_seen_from", optional=True),
    text("mark_how", optional=True),
    real("mark_width_deg", optional=True),
    text("support", optional=True),
    text("coupling", optional=True),
    whole("at_us"),
    text("who"),
    Index("ix_mount_job_id", "job_id"),
    CheckConstraint("(job_id IS NULL) = (machine_id IS NULL)", name="whole"),
)

mount_mark = Table(
    "mount_mark",
    metadata,
    ref("mount_id", "mount.id", primary=True),
    whole("plane", primary=True),
    real("from_hole1_deg"),
)

# a position that was mistyped at a mount, as a later mount told it
mount_mark_revision = Table(
    "mount_mark_revision",
    metadata,
    seq(),
    ref("mount_id", "mount.id"),
    whole("plane"),
    real("from_hole1_deg"),
    ref("told_by_id", "mount.id"),
    whole("at_us"),
    text("who"),
    Index("ix_mount_mark_revision_mount_id_plane", "mount_id", "plane"),
)

weight = Table(
    "weight",
    metadata,
    seq(),
    key(),
    ref("mount_id", "mount.id"),
    ref("after_run_id", "run.id", optional=True),
    whole("at_mount"),
    text("act"),
    whole("plane"),
    real("mass_g"),
    real("radius_mm"),
    whole("hole", optional=True),
    real("angle_deg", optional=True),
    ref("removes_id", "weight.id", optional=True),
    whole("at_us"),
    text("who"),
    Index("ix_weight_mount_id", "mount_id"),
    CheckConstraint("act IN ('fitted', 'removed', 'drilled')", name="act"),
    CheckConstraint("(act = 'removed') = (removes_id IS NOT NULL)", name="removes"),
    CheckConstraint("mass_g > 0", name="mass"),
)

weight_void = Table(
    "weight_void",
    metadata,
    seq(),
    ref("weight_id", "weight.id"),
    text("why"),
    whole("at_us"),
    text("who"),
    UniqueConstraint("weight_id"),
)

# --- runs and readings -------------------------------------------------------------------------------

run = Table(
    "run",
    metadata,
    seq(),
    key(),
    ref("job_id", "job.id", optional=True),
    whole("number", optional=True),
    whole("unassigned_number", optional=True),
    ref("mount_id", "mount.id", optional=True),
    # newest row of mount when the run began, also where it says that nothing is mounted
    whole("mount_seq"),
    ref("set_up_id", "set_up.id"),
    text("origin"),
    text("operator"),
    json_text("condition"),
    text("software"),
    ref("session_id", "session.id"),
    whole("segment"),
    whole("first_sample"),
    real("mono_s"),
    whole("started_us"),
    UniqueConstraint("job_id", "number"),
    UniqueConstraint("unassigned_number"),
    CheckConstraint("(job_id IS NULL) = (number IS NULL)", name="job_number"),
    CheckConstraint("(job_id IS NULL) = (unassigned_number IS NOT NULL)", name="unassigned"),
)

session = Table(
    "session",
    metadata,
    seq(),
    key(),
    whole("at_us"),
    real("mono_s"),
    text("software"),
)

run_end = Table(
    "run_end",
    metadata,
    ref("run_id", "run.id", primary=True),
    text("state"),
    text("reason"),
    text("detail"),
    whole("ended_us"),
    whole("at_us"),
    CheckConstraint("state IN ('complete', 'interrupted')", name="state"),
)

run_void = Table(
    "run_void",
    metadata,
    seq(),
    ref("run_id", "run.id"),
    text("why"),
    whole("at_us"),
    text("who"),
    Index("ix_run_void_run_id", "run_id"),
)

run_assign = Table(
    "run_assign",
    metadata,
    seq(),
    ref("run_id", "run.id"),
    ref("job_id", "job.id"),
    whole("number"),
    ref("mount_id", "mount.id", optional=True),
    whole("at_us"),
    text("who"),
    UniqueConstraint("job_id", "number"),
    Index("ix_run_assign_run_id", "run_id"),
)

run_revise = Table(
    "run_revise",
    metadata,
    seq(),
    ref("run_id", "run.id"),
    ref("set_up_id", "set_up.id"),
    text("why"),
    whole("at_us"),
    text("who"),
    Index("ix_run_revise_run_id", "run_id"),
)

reading = Table(
    "reading",
    metadata,
    seq(),
    key(),
    ref("run_id", "run.id"),
    whole("number"),
    whole("at_us"),
    real("duration_s"),
    real("speed_hz"),
    whole("revolutions"),
    whole("segment"),
    whole("first_sample"),
    real("mono_s"),
    json_text("steadiness"),
    json_text("flags"),
    UniqueConstraint("run_id", "number"),
)

vector = Table(
    "vector",
    metadata,
    ref("reading_id", "reading.id", primary=True),
    whole("place", primary=True),
    text("channel"),
    # "order" is a word of SQL
    whole("harmonic"),
    real("re"),
    real("im"),
    real("var_re"),
    real("var_im"),
    real("cov"),
    real("noise_floor"),
    text("unit"),
    UniqueConstraint("reading_id", "channel", "harmonic"),
    sqlite_with_rowid=False,
)

# one row each time a reading's arithmetic was done: version 1 live, the newest stands
measured = Table(
    "measured",
    metadata,
    seq(),
    ref("reading_id", "reading.id"),
    whole("version"),
    ref("set_up_id", "set_up.id"),
    text("why"),
    real("speed_hz"),
    whole("revolutions"),
    real("duration_s"),
    json_text("flags"),
    json_text("figures"),
    json_text("setting"),
    text("software"),
    text("numpy"),
    text("processor"),
    whole("at_us"),
    text("who"),
    UniqueConstraint("reading_id", "version"),
)

VECTOR_FIGURES = ("re", "im", "var_re", "var_im", "cov", "noise_floor")

# vectors of versions 2 and later; those of version 1 are in vector
measured_vector = Table(
    "measured_vector",
    metadata,
    ref("reading_id", "reading.id", primary=True),
    whole("version", primary=True),
    whole("place", primary=True),
    text("channel"),
    whole("harmonic"),
    *(real(name) for name in VECTOR_FIGURES),
    text("unit"),
    sqlite_with_rowid=False,
)

LEVEL_FIGURES = ("gap_v", "residual_sd", "peak_to_peak", "ac_rms")

level = Table(
    "level",
    metadata,
    ref("reading_id", "reading.id", primary=True),
    whole("version", primary=True),
    whole("place", primary=True),
    text("channel"),
    *(real(name) for name in LEVEL_FIGURES),
    text("unit"),
    sqlite_with_rowid=False,
)

# one stretch of a run in which the speed went one way, and 1X of each channel at each of its steps
trace = Table(
    "trace",
    metadata,
    seq(),
    ref("run_id", "run.id"),
    whole("number"),
    text("direction"),
    whole("started_us"),
    real("duration_s"),
    UniqueConstraint("run_id", "number"),
    CheckConstraint("direction IN ('up', 'down')", name="direction"),
)

trace_vector = Table(
    "trace_vector",
    metadata,
    Column("trace_seq", Integer, ForeignKey("trace.seq"), primary_key=True),
    whole("step", primary=True),
    whole("place", primary=True),
    text("channel"),
    real("t_s"),
    real("speed_hz"),
    whole("revolutions"),
    real("re"),
    real("im"),
    real("se"),
    real("gap_v"),
    text("unit"),
    sqlite_with_rowid=False,
)

raw = Table(
    "raw",
    metadata,
    ref("reading_id", "reading.id", primary=True),
    text("codec"),
    whole("version"),
    whole("frames"),
    whole("channels"),
    text("dtype"),
    json_text("volts_per_count"),
    real("rate_hz"),
    whole("first_sample"),
    whole("crc32"),
    whole("stored_bytes"),
    Column("samples", LargeBinary, nullable=False),
    Index("ix_raw_stored_bytes", "stored_bytes"),
)

raw_aged = Table(
    "raw_aged",
    metadata,
    seq(),
    ref("reading_id", "reading.id"),
    whole("freed_bytes"),
    whole("crc32"),
    text("rule"),
    whole("at_us"),
    UniqueConstraint("reading_id"),
)

label = Table(
    "label",
    metadata,
    seq(),
    ref("reading_id", "reading.id"),
    text("label"),
    text("mark_key", optional=True),
    whole("at_us"),
    text("who"),
    Index("ix_label_reading_id", "reading_id"),
    CheckConstraint("label IN ('O', 'O+T', 'check', 'trim', 'slow-roll')", name="label"),
)

# --- marks, requests, events -------------------------------------------------------------------------

mark = Table(
    "mark",
    metadata,
    seq(),
    text("key"),
    text("label"),
    ref("job_id", "job.id"),
    ref("mount_id", "mount.id"),
    ref("session_id", "session.id", optional=True),
    # the run that was open at the question
    ref("asked_run_id", "run.id", optional=True),
    whole("from_sample", optional=True),
    whole("asked_us"),
    text("who"),
    UniqueConstraint("key"),
)

mark_end = Table(
    "mark_end",
    metadata,
    Column("mark_seq", Integer, ForeignKey("mark.seq"), primary_key=True),
    text("state"),
    text("detail"),
    ref("run_id", "run.id", optional=True),
    ref("reading_id", "reading.id", optional=True),
    whole("at_us"),
    CheckConstraint("state IN ('labelled', 'missed', 'cancelled')", name="state"),
)

request = Table(
    "request",
    metadata,
    seq(),
    text("key"),
    text("verb"),
    text("body_sha256"),
    json_text("answer"),
    whole("at_us"),
    UniqueConstraint("key"),
)

event = Table(
    "event",
    metadata,
    seq(),
    ref("session_id", "session.id", optional=True),
    text("kind"),
    text("text"),
    whole("at_us"),
)

# --- derived: may be rebuilt at any time from the rest ------------------------------------------------

coefficient = Table(
    "coefficient",
    metadata,
    seq(),
    ref("job_id", "job.id"),
    text("job_number"),
    text("machine_serial"),
    text("model_code"),
    whole("plane"),
    text("channel"),
    real("speed_hz"),
    real("re"),
    real("im"),
    real("se"),
    real("var_re", optional=True),
    real("var_im", optional=True),
    real("cov", optional=True),
    json_text("run_names"),
    text("origin"),
    ref("mount_id", "mount.id"),
    ref("set_up_id", "set_up.id"),
    whole("at_us"),
    real("largest_effect_ratio"),
    Index("ix_coefficient_job_id", "job_id"),
    # equality first, the range of speeds after it, then all that is read: SQLite never opens the table
    Index(
        "ix_coefficient_covering",
        "model_code",
        "plane",
        "channel",
        "speed_hz",
        "at_us",
        "job_number",
        "machine_serial",
        "re",
        "im",
        "se",
        "run_names",
        "origin",
        "mount_id",
        "set_up_id",
        "largest_effect_ratio",
    ),
)

SOURCE_TABLES = tuple(t for t in metadata.tables.values() if t.name not in {"coefficient", "raw"})
