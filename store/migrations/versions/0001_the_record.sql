-- The record, whole, as of its first migration. Frozen: a change is a new migration, never an edit here.
-- Times: integer microseconds UTC (_us). Speeds: Hz. Angles: degrees. Vectors: 0-peak, base unit by channel.

CREATE TABLE job (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    number TEXT NOT NULL,
    machine_serial TEXT NOT NULL,
    opened_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_job_number UNIQUE (number),
    CONSTRAINT uq_job_id UNIQUE (id)
);
CREATE INDEX ix_job_machine_serial ON job (machine_serial);

CREATE TABLE model (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    code TEXT NOT NULL,
    revision INTEGER NOT NULL,
    first_critical_hz REAL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_model_code_revision UNIQUE (code, revision),
    CONSTRAINT uq_model_id UNIQUE (id)
);

CREATE TABLE request (
    seq INTEGER NOT NULL,
    "key" TEXT NOT NULL,
    verb TEXT NOT NULL,
    body_sha256 TEXT NOT NULL,
    answer TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_request_key UNIQUE ("key")
);

CREATE TABLE session (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    at_us INTEGER NOT NULL,
    mono_s REAL NOT NULL,
    software TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_session_id UNIQUE (id)
);

CREATE TABLE set_up (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    stand TEXT NOT NULL,
    revision INTEGER NOT NULL,
    end_a TEXT NOT NULL,
    end_b TEXT NOT NULL,
    angles_seen_from TEXT NOT NULL,
    zero TEXT NOT NULL,
    pulse_name TEXT NOT NULL,
    pulse_input TEXT NOT NULL,
    pulse_edge TEXT NOT NULL,
    pulse_level_v REAL,
    pulse_angle_deg REAL NOT NULL,
    pulse_count INTEGER NOT NULL,
    rate_hz REAL NOT NULL,
    driver TEXT NOT NULL,
    digest TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    software TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_set_up_stand_revision UNIQUE (stand, revision),
    CONSTRAINT uq_set_up_stand_digest UNIQUE (stand, digest),
    CONSTRAINT uq_set_up_id UNIQUE (id)
);

CREATE TABLE store_info (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    made_us INTEGER NOT NULL,
    made_by TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_store_info_id UNIQUE (id)
);

CREATE TABLE event (
    seq INTEGER NOT NULL,
    session_id BLOB,
    kind TEXT NOT NULL,
    text TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    PRIMARY KEY (seq),
    FOREIGN KEY(session_id) REFERENCES session (id)
);

CREATE TABLE job_speed (
    job_id BLOB NOT NULL,
    place INTEGER NOT NULL,
    speed_hz REAL NOT NULL,
    PRIMARY KEY (job_id, place),
    FOREIGN KEY(job_id) REFERENCES job (id)
);

CREATE TABLE machine (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    serial TEXT NOT NULL,
    revision INTEGER NOT NULL,
    model_id BLOB NOT NULL,
    rotor_mass_kg REAL NOT NULL,
    service_hz REAL NOT NULL,
    grade_mm_s REAL,
    permissible_gmm REAL,
    bearing_loads_kg TEXT NOT NULL,
    vibration_limit_um_pk REAL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_machine_serial_revision UNIQUE (serial, revision),
    CONSTRAINT uq_machine_id UNIQUE (id),
    FOREIGN KEY(model_id) REFERENCES model (id)
);

CREATE TABLE set_up_channel (
    set_up_id BLOB NOT NULL,
    place INTEGER NOT NULL,
    name TEXT NOT NULL,
    kind TEXT NOT NULL,
    unit TEXT NOT NULL,
    input TEXT NOT NULL,
    volts_per_unit REAL NOT NULL,
    positive INTEGER NOT NULL,
    angle_deg REAL NOT NULL,
    coupling TEXT NOT NULL,
    filter TEXT NOT NULL,
    skew_s REAL NOT NULL,
    gap_low_v REAL,
    gap_high_v REAL,
    PRIMARY KEY (set_up_id, place),
    FOREIGN KEY(set_up_id) REFERENCES set_up (id)
);

CREATE TABLE weight_plane (
    model_id BLOB NOT NULL,
    number INTEGER NOT NULL,
    radius_mm REAL NOT NULL,
    holes INTEGER NOT NULL,
    numbering_turn TEXT NOT NULL,
    numbering_seen_from TEXT NOT NULL,
    position_mm REAL,
    PRIMARY KEY (model_id, number),
    FOREIGN KEY(model_id) REFERENCES model (id)
);

CREATE TABLE mount (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    job_id BLOB,
    machine_id BLOB,
    model_id BLOB,
    rotation_turn TEXT,
    rotation_seen_from TEXT,
    mark_how TEXT,
    mark_width_deg REAL,
    support TEXT,
    coupling TEXT,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT ck_mount_whole CHECK ((job_id IS NULL) = (machine_id IS NULL)),
    CONSTRAINT uq_mount_id UNIQUE (id),
    FOREIGN KEY(job_id) REFERENCES job (id),
    FOREIGN KEY(machine_id) REFERENCES machine (id),
    FOREIGN KEY(model_id) REFERENCES model (id)
);
CREATE INDEX ix_mount_job_id ON mount (job_id);

CREATE TABLE coefficient (
    seq INTEGER NOT NULL,
    job_id BLOB NOT NULL,
    job_number TEXT NOT NULL,
    machine_serial TEXT NOT NULL,
    model_code TEXT NOT NULL,
    plane INTEGER NOT NULL,
    channel TEXT NOT NULL,
    speed_hz REAL NOT NULL,
    re REAL NOT NULL,
    im REAL NOT NULL,
    se REAL NOT NULL,
    var_re REAL,
    var_im REAL,
    cov REAL,
    run_names TEXT NOT NULL,
    origin TEXT NOT NULL,
    mount_id BLOB NOT NULL,
    set_up_id BLOB NOT NULL,
    at_us INTEGER NOT NULL,
    largest_effect_ratio REAL NOT NULL,
    PRIMARY KEY (seq),
    FOREIGN KEY(job_id) REFERENCES job (id),
    FOREIGN KEY(mount_id) REFERENCES mount (id),
    FOREIGN KEY(set_up_id) REFERENCES set_up (id)
);
CREATE INDEX ix_coefficient_covering ON coefficient (
    model_code, plane, channel, speed_hz, at_us, job_number, machine_serial, re, im, se, run_names, origin, mount_id, set_up_id, largest_effect_ratio
);
CREATE INDEX ix_coefficient_job_id ON coefficient (job_id);

CREATE TABLE mount_mark (
    mount_id BLOB NOT NULL,
    plane INTEGER NOT NULL,
    from_hole1_deg REAL NOT NULL,
    PRIMARY KEY (mount_id, plane),
    FOREIGN KEY(mount_id) REFERENCES mount (id)
);

CREATE TABLE run (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    job_id BLOB,
    number INTEGER,
    unassigned_number INTEGER,
    mount_id BLOB,
    mount_seq INTEGER NOT NULL,
    set_up_id BLOB NOT NULL,
    origin TEXT NOT NULL,
    operator TEXT NOT NULL,
    condition TEXT NOT NULL,
    software TEXT NOT NULL,
    session_id BLOB NOT NULL,
    segment INTEGER NOT NULL,
    first_sample INTEGER NOT NULL,
    mono_s REAL NOT NULL,
    started_us INTEGER NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_run_job_id_number UNIQUE (job_id, number),
    CONSTRAINT uq_run_unassigned_number UNIQUE (unassigned_number),
    CONSTRAINT ck_run_job_number CHECK ((job_id IS NULL) = (number IS NULL)),
    CONSTRAINT ck_run_unassigned CHECK ((job_id IS NULL) = (unassigned_number IS NOT NULL)),
    CONSTRAINT uq_run_id UNIQUE (id),
    FOREIGN KEY(job_id) REFERENCES job (id),
    FOREIGN KEY(mount_id) REFERENCES mount (id),
    FOREIGN KEY(set_up_id) REFERENCES set_up (id),
    FOREIGN KEY(session_id) REFERENCES session (id)
);

CREATE TABLE mark (
    seq INTEGER NOT NULL,
    "key" TEXT NOT NULL,
    label TEXT NOT NULL,
    job_id BLOB NOT NULL,
    mount_id BLOB NOT NULL,
    session_id BLOB,
    asked_run_id BLOB,
    from_sample INTEGER,
    asked_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_mark_key UNIQUE ("key"),
    FOREIGN KEY(job_id) REFERENCES job (id),
    FOREIGN KEY(mount_id) REFERENCES mount (id),
    FOREIGN KEY(session_id) REFERENCES session (id),
    FOREIGN KEY(asked_run_id) REFERENCES run (id)
);

CREATE TABLE reading (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    run_id BLOB NOT NULL,
    number INTEGER NOT NULL,
    at_us INTEGER NOT NULL,
    duration_s REAL NOT NULL,
    speed_hz REAL NOT NULL,
    revolutions INTEGER NOT NULL,
    segment INTEGER NOT NULL,
    first_sample INTEGER NOT NULL,
    mono_s REAL NOT NULL,
    steadiness TEXT NOT NULL,
    flags TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_reading_run_id_number UNIQUE (run_id, number),
    CONSTRAINT uq_reading_id UNIQUE (id),
    FOREIGN KEY(run_id) REFERENCES run (id)
);

CREATE TABLE run_assign (
    seq INTEGER NOT NULL,
    run_id BLOB NOT NULL,
    job_id BLOB NOT NULL,
    number INTEGER NOT NULL,
    mount_id BLOB,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_run_assign_job_id_number UNIQUE (job_id, number),
    FOREIGN KEY(run_id) REFERENCES run (id),
    FOREIGN KEY(job_id) REFERENCES job (id),
    FOREIGN KEY(mount_id) REFERENCES mount (id)
);
CREATE INDEX ix_run_assign_run_id ON run_assign (run_id);

CREATE TABLE run_end (
    run_id BLOB NOT NULL,
    state TEXT NOT NULL,
    reason TEXT NOT NULL,
    detail TEXT NOT NULL,
    ended_us INTEGER NOT NULL,
    at_us INTEGER NOT NULL,
    PRIMARY KEY (run_id),
    CONSTRAINT ck_run_end_state CHECK (state IN ('complete', 'interrupted')),
    FOREIGN KEY(run_id) REFERENCES run (id)
);

CREATE TABLE run_revise (
    seq INTEGER NOT NULL,
    run_id BLOB NOT NULL,
    set_up_id BLOB NOT NULL,
    why TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    FOREIGN KEY(run_id) REFERENCES run (id),
    FOREIGN KEY(set_up_id) REFERENCES set_up (id)
);
CREATE INDEX ix_run_revise_run_id ON run_revise (run_id);

CREATE TABLE run_void (
    seq INTEGER NOT NULL,
    run_id BLOB NOT NULL,
    why TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    FOREIGN KEY(run_id) REFERENCES run (id)
);
CREATE INDEX ix_run_void_run_id ON run_void (run_id);

CREATE TABLE weight (
    seq INTEGER NOT NULL,
    id BLOB NOT NULL,
    mount_id BLOB NOT NULL,
    after_run_id BLOB,
    at_mount INTEGER NOT NULL,
    act TEXT NOT NULL,
    plane INTEGER NOT NULL,
    mass_g REAL NOT NULL,
    radius_mm REAL NOT NULL,
    hole INTEGER,
    angle_deg REAL,
    removes_id BLOB,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT ck_weight_act CHECK (act IN ('fitted', 'removed', 'drilled')),
    CONSTRAINT ck_weight_removes CHECK ((act = 'removed') = (removes_id IS NOT NULL)),
    CONSTRAINT ck_weight_mass CHECK (mass_g > 0),
    CONSTRAINT uq_weight_id UNIQUE (id),
    FOREIGN KEY(mount_id) REFERENCES mount (id),
    FOREIGN KEY(after_run_id) REFERENCES run (id),
    FOREIGN KEY(removes_id) REFERENCES weight (id)
);
CREATE INDEX ix_weight_mount_id ON weight (mount_id);

CREATE TABLE weight_void (
    seq INTEGER NOT NULL,
    weight_id BLOB NOT NULL,
    why TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_weight_void_weight_id UNIQUE (weight_id),
    FOREIGN KEY(weight_id) REFERENCES weight (id)
);

CREATE TABLE mount_mark_revision (
    seq INTEGER NOT NULL,
    mount_id BLOB NOT NULL,
    plane INTEGER NOT NULL,
    from_hole1_deg REAL NOT NULL,
    told_by_id BLOB NOT NULL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    FOREIGN KEY(mount_id) REFERENCES mount (id),
    FOREIGN KEY(told_by_id) REFERENCES mount (id)
);
CREATE INDEX ix_mount_mark_revision_mount_id_plane ON mount_mark_revision (mount_id, plane);

CREATE TABLE label (
    seq INTEGER NOT NULL,
    reading_id BLOB NOT NULL,
    label TEXT NOT NULL,
    mark_key TEXT,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT ck_label_label CHECK (label IN ('O', 'O+T', 'check', 'trim', 'slow-roll')),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
);
CREATE INDEX ix_label_reading_id ON label (reading_id);

CREATE TABLE mark_end (
    mark_seq INTEGER NOT NULL,
    state TEXT NOT NULL,
    detail TEXT NOT NULL,
    run_id BLOB,
    reading_id BLOB,
    at_us INTEGER NOT NULL,
    PRIMARY KEY (mark_seq),
    CONSTRAINT ck_mark_end_state CHECK (state IN ('labelled', 'missed', 'cancelled')),
    FOREIGN KEY(mark_seq) REFERENCES mark (seq),
    FOREIGN KEY(run_id) REFERENCES run (id),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
);

CREATE TABLE raw (
    reading_id BLOB NOT NULL,
    codec TEXT NOT NULL,
    version INTEGER NOT NULL,
    frames INTEGER NOT NULL,
    channels INTEGER NOT NULL,
    dtype TEXT NOT NULL,
    volts_per_count TEXT NOT NULL,
    rate_hz REAL NOT NULL,
    first_sample INTEGER NOT NULL,
    crc32 INTEGER NOT NULL,
    stored_bytes INTEGER NOT NULL,
    samples BLOB NOT NULL,
    PRIMARY KEY (reading_id),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
);
CREATE INDEX ix_raw_stored_bytes ON raw (stored_bytes);

CREATE TABLE raw_aged (
    seq INTEGER NOT NULL,
    reading_id BLOB NOT NULL,
    freed_bytes INTEGER NOT NULL,
    crc32 INTEGER NOT NULL,
    rule TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_raw_aged_reading_id UNIQUE (reading_id),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
);

CREATE TABLE vector (
    reading_id BLOB NOT NULL,
    place INTEGER NOT NULL,
    channel TEXT NOT NULL,
    harmonic INTEGER NOT NULL,
    re REAL NOT NULL,
    im REAL NOT NULL,
    var_re REAL NOT NULL,
    var_im REAL NOT NULL,
    cov REAL NOT NULL,
    noise_floor REAL NOT NULL,
    unit TEXT NOT NULL,
    PRIMARY KEY (reading_id, place),
    CONSTRAINT uq_vector_reading_id_channel_harmonic UNIQUE (reading_id, channel, harmonic),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
) WITHOUT ROWID;

-- Source tables are append-only.

CREATE TRIGGER store_info_no_update BEFORE UPDATE ON store_info
BEGIN SELECT RAISE(ABORT, 'store_info is append-only'); END;
CREATE TRIGGER store_info_no_delete BEFORE DELETE ON store_info
BEGIN SELECT RAISE(ABORT, 'store_info is append-only'); END;
CREATE TRIGGER model_no_update BEFORE UPDATE ON model
BEGIN SELECT RAISE(ABORT, 'model is append-only'); END;
CREATE TRIGGER model_no_delete BEFORE DELETE ON model
BEGIN SELECT RAISE(ABORT, 'model is append-only'); END;
CREATE TRIGGER weight_plane_no_update BEFORE UPDATE ON weight_plane
BEGIN SELECT RAISE(ABORT, 'weight_plane is append-only'); END;
CREATE TRIGGER weight_plane_no_delete BEFORE DELETE ON weight_plane
BEGIN SELECT RAISE(ABORT, 'weight_plane is append-only'); END;
CREATE TRIGGER machine_no_update BEFORE UPDATE ON machine
BEGIN SELECT RAISE(ABORT, 'machine is append-only'); END;
CREATE TRIGGER machine_no_delete BEFORE DELETE ON machine
BEGIN SELECT RAISE(ABORT, 'machine is append-only'); END;
CREATE TRIGGER set_up_no_update BEFORE UPDATE ON set_up
BEGIN SELECT RAISE(ABORT, 'set_up is append-only'); END;
CREATE TRIGGER set_up_no_delete BEFORE DELETE ON set_up
BEGIN SELECT RAISE(ABORT, 'set_up is append-only'); END;
CREATE TRIGGER set_up_channel_no_update BEFORE UPDATE ON set_up_channel
BEGIN SELECT RAISE(ABORT, 'set_up_channel is append-only'); END;
CREATE TRIGGER set_up_channel_no_delete BEFORE DELETE ON set_up_channel
BEGIN SELECT RAISE(ABORT, 'set_up_channel is append-only'); END;
CREATE TRIGGER job_no_update BEFORE UPDATE ON job
BEGIN SELECT RAISE(ABORT, 'job is append-only'); END;
CREATE TRIGGER job_no_delete BEFORE DELETE ON job
BEGIN SELECT RAISE(ABORT, 'job is append-only'); END;
CREATE TRIGGER job_speed_no_update BEFORE UPDATE ON job_speed
BEGIN SELECT RAISE(ABORT, 'job_speed is append-only'); END;
CREATE TRIGGER job_speed_no_delete BEFORE DELETE ON job_speed
BEGIN SELECT RAISE(ABORT, 'job_speed is append-only'); END;
CREATE TRIGGER mount_no_update BEFORE UPDATE ON mount
BEGIN SELECT RAISE(ABORT, 'mount is append-only'); END;
CREATE TRIGGER mount_no_delete BEFORE DELETE ON mount
BEGIN SELECT RAISE(ABORT, 'mount is append-only'); END;
CREATE TRIGGER mount_mark_no_update BEFORE UPDATE ON mount_mark
BEGIN SELECT RAISE(ABORT, 'mount_mark is append-only'); END;
CREATE TRIGGER mount_mark_no_delete BEFORE DELETE ON mount_mark
BEGIN SELECT RAISE(ABORT, 'mount_mark is append-only'); END;
CREATE TRIGGER weight_no_update BEFORE UPDATE ON weight
BEGIN SELECT RAISE(ABORT, 'weight is append-only'); END;
CREATE TRIGGER weight_no_delete BEFORE DELETE ON weight
BEGIN SELECT RAISE(ABORT, 'weight is append-only'); END;
CREATE TRIGGER weight_void_no_update BEFORE UPDATE ON weight_void
BEGIN SELECT RAISE(ABORT, 'weight_void is append-only'); END;
CREATE TRIGGER weight_void_no_delete BEFORE DELETE ON weight_void
BEGIN SELECT RAISE(ABORT, 'weight_void is append-only'); END;
CREATE TRIGGER mount_mark_revision_no_update BEFORE UPDATE ON mount_mark_revision
BEGIN SELECT RAISE(ABORT, 'mount_mark_revision is append-only'); END;
CREATE TRIGGER mount_mark_revision_no_delete BEFORE DELETE ON mount_mark_revision
BEGIN SELECT RAISE(ABORT, 'mount_mark_revision is append-only'); END;
CREATE TRIGGER run_no_update BEFORE UPDATE ON run
BEGIN SELECT RAISE(ABORT, 'run is append-only'); END;
CREATE TRIGGER run_no_delete BEFORE DELETE ON run
BEGIN SELECT RAISE(ABORT, 'run is append-only'); END;
CREATE TRIGGER session_no_update BEFORE UPDATE ON session
BEGIN SELECT RAISE(ABORT, 'session is append-only'); END;
CREATE TRIGGER session_no_delete BEFORE DELETE ON session
BEGIN SELECT RAISE(ABORT, 'session is append-only'); END;
CREATE TRIGGER run_end_no_update BEFORE UPDATE ON run_end
BEGIN SELECT RAISE(ABORT, 'run_end is append-only'); END;
CREATE TRIGGER run_end_no_delete BEFORE DELETE ON run_end
BEGIN SELECT RAISE(ABORT, 'run_end is append-only'); END;
CREATE TRIGGER run_void_no_update BEFORE UPDATE ON run_void
BEGIN SELECT RAISE(ABORT, 'run_void is append-only'); END;
CREATE TRIGGER run_void_no_delete BEFORE DELETE ON run_void
BEGIN SELECT RAISE(ABORT, 'run_void is append-only'); END;
CREATE TRIGGER run_assign_no_update BEFORE UPDATE ON run_assign
BEGIN SELECT RAISE(ABORT, 'run_assign is append-only'); END;
CREATE TRIGGER run_assign_no_delete BEFORE DELETE ON run_assign
BEGIN SELECT RAISE(ABORT, 'run_assign is append-only'); END;
CREATE TRIGGER run_revise_no_update BEFORE UPDATE ON run_revise
BEGIN SELECT RAISE(ABORT, 'run_revise is append-only'); END;
CREATE TRIGGER run_revise_no_delete BEFORE DELETE ON run_revise
BEGIN SELECT RAISE(ABORT, 'run_revise is append-only'); END;
CREATE TRIGGER reading_no_update BEFORE UPDATE ON reading
BEGIN SELECT RAISE(ABORT, 'reading is append-only'); END;
CREATE TRIGGER reading_no_delete BEFORE DELETE ON reading
BEGIN SELECT RAISE(ABORT, 'reading is append-only'); END;
CREATE TRIGGER vector_no_update BEFORE UPDATE ON vector
BEGIN SELECT RAISE(ABORT, 'vector is append-only'); END;
CREATE TRIGGER vector_no_delete BEFORE DELETE ON vector
BEGIN SELECT RAISE(ABORT, 'vector is append-only'); END;
CREATE TRIGGER raw_aged_no_update BEFORE UPDATE ON raw_aged
BEGIN SELECT RAISE(ABORT, 'raw_aged is append-only'); END;
CREATE TRIGGER raw_aged_no_delete BEFORE DELETE ON raw_aged
BEGIN SELECT RAISE(ABORT, 'raw_aged is append-only'); END;
CREATE TRIGGER label_no_update BEFORE UPDATE ON label
BEGIN SELECT RAISE(ABORT, 'label is append-only'); END;
CREATE TRIGGER label_no_delete BEFORE DELETE ON label
BEGIN SELECT RAISE(ABORT, 'label is append-only'); END;
CREATE TRIGGER mark_no_update BEFORE UPDATE ON mark
BEGIN SELECT RAISE(ABORT, 'mark is append-only'); END;
CREATE TRIGGER mark_no_delete BEFORE DELETE ON mark
BEGIN SELECT RAISE(ABORT, 'mark is append-only'); END;
CREATE TRIGGER mark_end_no_update BEFORE UPDATE ON mark_end
BEGIN SELECT RAISE(ABORT, 'mark_end is append-only'); END;
CREATE TRIGGER mark_end_no_delete BEFORE DELETE ON mark_end
BEGIN SELECT RAISE(ABORT, 'mark_end is append-only'); END;
CREATE TRIGGER request_no_update BEFORE UPDATE ON request
BEGIN SELECT RAISE(ABORT, 'request is append-only'); END;
CREATE TRIGGER request_no_delete BEFORE DELETE ON request
BEGIN SELECT RAISE(ABORT, 'request is append-only'); END;
CREATE TRIGGER event_no_update BEFORE UPDATE ON event
BEGIN SELECT RAISE(ABORT, 'event is append-only'); END;
CREATE TRIGGER event_no_delete BEFORE DELETE ON event
BEGIN SELECT RAISE(ABORT, 'event is append-only'); END;

-- Raw samples never change; they may go once raw_aged says so.

CREATE TRIGGER raw_no_update BEFORE UPDATE ON raw
BEGIN SELECT RAISE(ABORT, 'raw never changes'); END;
CREATE TRIGGER raw_no_delete BEFORE DELETE ON raw
WHEN NOT EXISTS (SELECT 1 FROM raw_aged WHERE reading_id = OLD.reading_id)
BEGIN SELECT RAISE(ABORT, 'raw goes only after a row in raw_aged'); END;

-- Later rows beside the earlier ones they speak of.

CREATE VIEW run_now AS
SELECT run.seq, run.id,
    coalesce(a.job_id, run.job_id) AS job_id, coalesce(a.number, run.number) AS number,
    run.unassigned_number, run.job_id AS first_job_id, run.number AS first_number,
    CASE WHEN a.seq IS NULL THEN run.mount_id ELSE a.mount_id END AS mount_id, run.mount_seq,
    coalesce(r.set_up_id, run.set_up_id) AS set_up_id,
    run.origin, run.operator, run.condition, run.software, run.session_id, run.started_us,
    coalesce(e.state, 'open') AS state, coalesce(e.reason, '') AS reason, coalesce(e.detail, '') AS detail,
    e.ended_us, v.why AS void
FROM run
LEFT JOIN run_assign a ON a.seq = (SELECT max(seq) FROM run_assign WHERE run_id = run.id)
LEFT JOIN run_revise r ON r.seq = (SELECT max(seq) FROM run_revise WHERE run_id = run.id)
LEFT JOIN run_void v ON v.seq = (SELECT max(seq) FROM run_void WHERE run_id = run.id)
LEFT JOIN run_end e ON e.run_id = run.id;

CREATE VIEW reading_now AS
SELECT reading.seq, reading.id, reading.run_id, reading.number, reading.at_us, reading.duration_s,
    reading.speed_hz, reading.revolutions, reading.segment, reading.first_sample, reading.steadiness,
    reading.flags, label.label, coalesce(label.who, '') AS labelled_by
FROM reading
LEFT JOIN label ON label.seq = (SELECT max(seq) FROM label WHERE reading_id = reading.id);

CREATE VIEW mount_now AS
SELECT mount.*, (SELECT at_us FROM mount AS later WHERE later.seq > mount.seq ORDER BY later.seq LIMIT 1)
    AS ended_us
FROM mount;

CREATE VIEW mount_mark_now AS
SELECT k.mount_id, k.plane, coalesce(r.from_hole1_deg, k.from_hole1_deg) AS from_hole1_deg,
    k.from_hole1_deg AS typed_from_hole1_deg
FROM mount_mark k LEFT JOIN mount_mark_revision r ON r.seq =
    (SELECT max(seq) FROM mount_mark_revision WHERE mount_id = k.mount_id AND plane = k.plane);

CREATE VIEW mark_now AS
SELECT mark.*, coalesce(e.state, 'pending') AS state, coalesce(e.detail, '') AS detail,
    e.run_id, e.reading_id
FROM mark LEFT JOIN mark_end e ON e.mark_seq = mark.seq;

-- For other programs: units in the names, ids as text, no blobs.

CREATE VIEW v_machine AS
SELECT machine.serial, machine.revision, model.code AS model, model.revision AS model_revision,
    model.first_critical_hz, machine.rotor_mass_kg, machine.service_hz, machine.grade_mm_s,
    machine.permissible_gmm, machine.bearing_loads_kg, machine.vibration_limit_um_pk,
    machine.at_us AS entered_us, machine.who
FROM machine JOIN model ON model.id = machine.model_id;

CREATE VIEW v_plane AS
SELECT model.code AS model, model.revision AS model_revision, p.number AS plane, p.radius_mm, p.holes,
    p.numbering_turn, p.numbering_seen_from, p.position_mm
FROM weight_plane p JOIN model ON model.id = p.model_id;

CREATE VIEW v_job AS
SELECT job.number AS job, job.machine_serial AS machine, job_speed.place AS speed_place, job_speed.speed_hz,
    job.opened_us, job.who
FROM job LEFT JOIN job_speed ON job_speed.job_id = job.id;

CREATE VIEW v_mount AS
SELECT lower(hex(m.id)) AS mount_id, job.number AS job, machine.serial AS machine, m.rotation_turn,
    m.rotation_seen_from, k.plane, k.from_hole1_deg AS mark_from_hole1_deg,
    k.typed_from_hole1_deg AS mark_typed_from_hole1_deg, m.mark_how, m.mark_width_deg, m.support, m.coupling, m.at_us AS mounted_us, m.ended_us, m.who
FROM mount_now m LEFT JOIN job ON job.id = m.job_id LEFT JOIN machine ON machine.id = m.machine_id
LEFT JOIN mount_mark_now k ON k.mount_id = m.id;

CREATE VIEW v_set_up AS
SELECT lower(hex(s.id)) AS set_up_id, s.stand, s.revision, s.angles_seen_from, s.zero, s.pulse_name,
    s.pulse_edge, s.pulse_level_v, s.pulse_angle_deg, s.pulse_count, s.rate_hz, s.driver, c.name AS channel,
    c.kind, c.unit, c.volts_per_unit, c.positive, c.angle_deg, c.coupling, c.filter, c.skew_s, c.gap_low_v,
    c.gap_high_v
FROM set_up s JOIN set_up_channel c ON c.set_up_id = s.id;

CREATE VIEW v_run AS
SELECT lower(hex(r.id)) AS run_id,
    CASE WHEN r.job_id IS NULL THEN 'U/' || r.unassigned_number ELSE job.number || '/' || r.number END AS run,
    job.number AS job, job.machine_serial AS machine, lower(hex(r.mount_id)) AS mount_id,
    lower(hex(r.set_up_id)) AS set_up_id, r.origin, r.operator, r.condition, r.software, r.started_us,
    r.ended_us, r.state, r.reason, r.void
FROM run_now r LEFT JOIN job ON job.id = r.job_id;

CREATE VIEW v_reading AS
SELECT lower(hex(d.id)) AS reading_id, lower(hex(d.run_id)) AS run_id, d.number AS reading, d.at_us,
    d.duration_s, d.speed_hz, d.revolutions, d.label, d.labelled_by, d.steadiness, d.flags
FROM reading_now d;

CREATE VIEW v_vector AS
SELECT lower(hex(reading_id)) AS reading_id, channel, harmonic, unit AS base_unit, re AS re_base_unit_pk,
    im AS im_base_unit_pk, var_re AS var_re_base_unit_pk2, var_im AS var_im_base_unit_pk2,
    cov AS cov_base_unit_pk2, noise_floor AS noise_floor_base_unit_pk
FROM vector;

CREATE VIEW v_label AS
SELECT seq, lower(hex(reading_id)) AS reading_id, label, mark_key, at_us, who FROM label;

CREATE VIEW v_mark AS
SELECT m.key, m.label, job.number AS job, m.asked_us, m.who, m.state, m.detail,
    lower(hex(m.run_id)) AS run_id, lower(hex(m.reading_id)) AS reading_id
FROM mark_now m JOIN job ON job.id = m.job_id;

CREATE VIEW v_weight AS
SELECT w.seq, lower(hex(w.id)) AS weight_id, lower(hex(w.mount_id)) AS mount_id, job.number AS job,
    machine.serial AS machine, lower(hex(w.after_run_id)) AS after_run_id, w.at_mount, w.act, w.plane, w.mass_g,
    w.radius_mm, w.hole, w.angle_deg AS angle_against_rotation_deg, lower(hex(w.removes_id)) AS removes_id,
    w.at_us, w.who, x.why AS void
FROM weight w JOIN mount m ON m.id = w.mount_id JOIN job ON job.id = m.job_id
JOIN machine ON machine.id = m.machine_id LEFT JOIN weight_void x ON x.weight_id = w.id;

CREATE VIEW v_coefficient AS
SELECT model_code AS model, machine_serial AS machine, job_number AS job, plane, channel, speed_hz,
    re AS re_base_unit_pk_per_gmm, im AS im_base_unit_pk_per_gmm, se AS se_base_unit_pk_per_gmm,
    largest_effect_ratio, run_names, origin, lower(hex(mount_id)) AS mount_id,
    lower(hex(set_up_id)) AS set_up_id, at_us
FROM coefficient;

CREATE VIEW v_event AS
SELECT seq, kind, text, at_us FROM event;

-- A store is known by its header: application id "RVMK", user version = number of the migration.

PRAGMA application_id = 1381387595;
PRAGMA user_version = 1;
