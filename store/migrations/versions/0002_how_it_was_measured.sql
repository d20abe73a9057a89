-- How each reading was measured, what beside vectors it holds, and traces of run-ups and coast-downs.
-- Frozen: a change is a new migration, never an edit here. Units as in 0001.

ALTER TABLE set_up ADD COLUMN pulse_pattern TEXT;
ALTER TABLE set_up_channel ADD COLUMN pair TEXT;

-- One row each time a reading's arithmetic was done; version 1 is the live one, later ones stand for it.
CREATE TABLE measured (
    seq INTEGER NOT NULL,
    reading_id BLOB NOT NULL,
    version INTEGER NOT NULL,
    set_up_id BLOB NOT NULL,
    why TEXT NOT NULL,
    speed_hz REAL NOT NULL,
    revolutions INTEGER NOT NULL,
    duration_s REAL NOT NULL,
    flags TEXT NOT NULL,
    figures TEXT NOT NULL,
    setting TEXT NOT NULL,
    software TEXT NOT NULL,
    numpy TEXT NOT NULL,
    processor TEXT NOT NULL,
    at_us INTEGER NOT NULL,
    who TEXT NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT uq_measured_reading_id_version UNIQUE (reading_id, version),
    FOREIGN KEY(reading_id) REFERENCES reading (id),
    FOREIGN KEY(set_up_id) REFERENCES set_up (id)
);

-- Vectors of versions 2 and later; those of version 1 are in vector.
CREATE TABLE measured_vector (
    reading_id BLOB NOT NULL,
    version INTEGER NOT NULL,
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
    PRIMARY KEY (reading_id, version, place),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
) WITHOUT ROWID;

CREATE TABLE level (
    reading_id BLOB NOT NULL,
    version INTEGER NOT NULL,
    place INTEGER NOT NULL,
    channel TEXT NOT NULL,
    gap_v REAL NOT NULL,
    residual_sd REAL NOT NULL,
    peak_to_peak REAL NOT NULL,
    ac_rms REAL NOT NULL,
    unit TEXT NOT NULL,
    PRIMARY KEY (reading_id, version, place),
    FOREIGN KEY(reading_id) REFERENCES reading (id)
) WITHOUT ROWID;

-- One stretch of a run in which the speed went one way.
CREATE TABLE trace (
    seq INTEGER NOT NULL,
    run_id BLOB NOT NULL,
    number INTEGER NOT NULL,
    direction TEXT NOT NULL,
    started_us INTEGER NOT NULL,
    duration_s REAL NOT NULL,
    PRIMARY KEY (seq),
    CONSTRAINT ck_trace_direction CHECK (direction IN ('up', 'down')),
    CONSTRAINT uq_trace_run_id_number UNIQUE (run_id, number),
    FOREIGN KEY(run_id) REFERENCES run (id)
);

-- 1X of one channel at one step of a trace.
CREATE TABLE trace_vector (
    trace_seq INTEGER NOT NULL,
    step INTEGER NOT NULL,
    place INTEGER NOT NULL,
    channel TEXT NOT NULL,
    t_s REAL NOT NULL,
    speed_hz REAL NOT NULL,
    revolutions INTEGER NOT NULL,
    re REAL NOT NULL,
    im REAL NOT NULL,
    se REAL NOT NULL,
    gap_v REAL NOT NULL,
    unit TEXT NOT NULL,
    PRIMARY KEY (trace_seq, step, place),
    FOREIGN KEY(trace_seq) REFERENCES trace (seq)
) WITHOUT ROWID;

CREATE TRIGGER measured_no_update BEFORE UPDATE ON measured
BEGIN SELECT RAISE(ABORT, 'measured is append-only'); END;
CREATE TRIGGER measured_no_delete BEFORE DELETE ON measured
BEGIN SELECT RAISE(ABORT, 'measured is append-only'); END;
CREATE TRIGGER measured_vector_no_update BEFORE UPDATE ON measured_vector
BEGIN SELECT RAISE(ABORT, 'measured_vector is append-only'); END;
CREATE TRIGGER measured_vector_no_delete BEFORE DELETE ON measured_vector
BEGIN SELECT RAISE(ABORT, 'measured_vector is append-only'); END;
CREATE TRIGGER level_no_update BEFORE UPDATE ON level
BEGIN SELECT RAISE(ABORT, 'level is append-only'); END;
CREATE TRIGGER level_no_delete BEFORE DELETE ON level
BEGIN SELECT RAISE(ABORT, 'level is append-only'); END;
CREATE TRIGGER trace_no_update BEFORE UPDATE ON trace
BEGIN SELECT RAISE(ABORT, 'trace is append-only'); END;
CREATE TRIGGER trace_no_delete BEFORE DELETE ON trace
BEGIN SELECT RAISE(ABORT, 'trace is append-only'); END;
CREATE TRIGGER trace_vector_no_update BEFORE UPDATE ON trace_vector
BEGIN SELECT RAISE(ABORT, 'trace_vector is append-only'); END;
CREATE TRIGGER trace_vector_no_delete BEFORE DELETE ON trace_vector
BEGIN SELECT RAISE(ABORT, 'trace_vector is append-only'); END;

-- What stands now: the newest version of each reading.

CREATE VIEW vector_now AS
SELECT v.reading_id, 1 AS version, v.place, v.channel, v.harmonic, v.re, v.im, v.var_re, v.var_im, v.cov,
    v.noise_floor, v.unit
FROM vector v
WHERE NOT EXISTS (SELECT 1 FROM measured m WHERE m.reading_id = v.reading_id AND m.version > 1)
UNION ALL
SELECT w.reading_id, w.version, w.place, w.channel, w.harmonic, w.re, w.im, w.var_re, w.var_im, w.cov,
    w.noise_floor, w.unit
FROM measured_vector w
WHERE w.version = (SELECT max(version) FROM measured WHERE reading_id = w.reading_id);

CREATE VIEW level_now AS
SELECT l.* FROM level l WHERE l.version = (SELECT max(version) FROM measured WHERE reading_id = l.reading_id);

DROP VIEW reading_now;
CREATE VIEW reading_now AS
SELECT reading.seq, reading.id, reading.run_id, reading.number, reading.at_us,
    coalesce(m.duration_s, reading.duration_s) AS duration_s, coalesce(m.speed_hz, reading.speed_hz) AS speed_hz,
    coalesce(m.revolutions, reading.revolutions) AS revolutions, reading.segment, reading.first_sample,
    reading.steadiness, coalesce(m.flags, reading.flags) AS flags, coalesce(m.figures, '{}') AS figures,
    coalesce(m.version, 1) AS version, label.label, coalesce(label.who, '') AS labelled_by
FROM reading
LEFT JOIN measured m ON m.seq = (SELECT max(seq) FROM measured WHERE reading_id = reading.id)
LEFT JOIN label ON label.seq = (SELECT max(seq) FROM label WHERE reading_id = reading.id);

DROP VIEW v_set_up;
CREATE VIEW v_set_up AS
SELECT lower(hex(s.id)) AS set_up_id, s.stand, s.revision, s.angles_seen_from, s.zero, s.pulse_name,
    s.pulse_edge, s.pulse_level_v, s.pulse_angle_deg, s.pulse_count, s.pulse_pattern, s.rate_hz, s.driver,
    c.name AS channel, c.kind, c.unit, c.volts_per_unit, c.positive, c.angle_deg, c.pair, c.coupling, c.filter,
    c.skew_s, c.gap_low_v, c.gap_high_v
FROM set_up s JOIN set_up_channel c ON c.set_up_id = s.id;

DROP VIEW v_reading;
CREATE VIEW v_reading AS
SELECT lower(hex(d.id)) AS reading_id, lower(hex(d.run_id)) AS run_id, d.number AS reading, d.at_us,
    d.duration_s, d.speed_hz, d.revolutions, d.label, d.labelled_by, d.steadiness, d.flags, d.figures, d.version
FROM reading_now d;

DROP VIEW v_vector;
CREATE VIEW v_vector AS
SELECT lower(hex(reading_id)) AS reading_id, version, channel, harmonic, unit AS base_unit,
    re AS re_base_unit_pk, im AS im_base_unit_pk, var_re AS var_re_base_unit_pk2, var_im AS var_im_base_unit_pk2,
    cov AS cov_base_unit_pk2, noise_floor AS noise_floor_base_unit_pk
FROM vector_now;

CREATE VIEW v_level AS
SELECT lower(hex(reading_id)) AS reading_id, version, channel, unit AS base_unit, gap_v,
    residual_sd AS residual_sd_base_unit, peak_to_peak AS peak_to_peak_base_unit, ac_rms AS ac_rms_base_unit
FROM level_now;

CREATE VIEW v_measured AS
SELECT lower(hex(reading_id)) AS reading_id, version, lower(hex(set_up_id)) AS set_up_id, why, speed_hz,
    revolutions, duration_s, flags, figures, setting, software, numpy, processor, at_us, who
FROM measured;

CREATE VIEW v_trace AS
SELECT lower(hex(t.run_id)) AS run_id, t.number AS trace, t.direction, t.started_us, t.duration_s, p.step, p.t_s,
    p.speed_hz, p.revolutions, p.channel, p.unit AS base_unit, p.re AS re_base_unit_pk, p.im AS im_base_unit_pk,
    p.se AS se_base_unit_pk, p.gap_v
FROM trace t JOIN trace_vector p ON p.trace_seq = t.seq;

PRAGMA user_version = 2;
