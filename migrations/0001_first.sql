-- The first schema: people, batches of stars, segments, reviews with their marks, consensus runs.
-- Times of day are unix milliseconds; star times are days in the light curve's own reference.

CREATE TABLE setting (
    name TEXT PRIMARY KEY,
    value TEXT NOT NULL
) STRICT, WITHOUT ROWID;

CREATE TABLE setting_change (
    id INTEGER PRIMARY KEY,
    name TEXT NOT NULL,
    value TEXT NOT NULL,
    person INTEGER,
    changed_ms INTEGER NOT NULL
) STRICT;

CREATE TABLE secret (
    name TEXT PRIMARY KEY,
    value BLOB NOT NULL CHECK (length(value) = 32)
) STRICT, WITHOUT ROWID;

CREATE TABLE person (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    handle TEXT NOT NULL,
    handle_key TEXT UNIQUE,
    passphrase TEXT NOT NULL,
    role INTEGER NOT NULL CHECK (role BETWEEN 1 AND 3),
    suspended INTEGER NOT NULL DEFAULT 0 CHECK (suspended IN (0, 1)),
    credit INTEGER NOT NULL DEFAULT 0 CHECK (credit IN (0, 1)),
    gone INTEGER NOT NULL DEFAULT 0 CHECK (gone IN (0, 1)),
    joined_ms INTEGER NOT NULL,
    CHECK (gone = 1 OR handle_key IS NOT NULL)
) STRICT;

CREATE TABLE access (
    hash BLOB PRIMARY KEY CHECK (length(hash) = 32),
    kind INTEGER NOT NULL CHECK (kind IN (0, 1)),
    person INTEGER NOT NULL REFERENCES person (id),
    role INTEGER NOT NULL CHECK (role BETWEEN 1 AND 3),
    made_ms INTEGER NOT NULL,
    ends_ms INTEGER NOT NULL
) STRICT, WITHOUT ROWID;
CREATE INDEX access_person ON access (person);
CREATE INDEX access_ends ON access (ends_ms);

CREATE TABLE batch (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    name TEXT NOT NULL UNIQUE CHECK (name <> ''),
    source TEXT NOT NULL,
    state INTEGER NOT NULL CHECK (state BETWEEN 1 AND 3),
    begun_ms INTEGER NOT NULL,
    finished_ms INTEGER NOT NULL DEFAULT 0,
    files_loaded INTEGER NOT NULL DEFAULT 0,
    files_repeated INTEGER NOT NULL DEFAULT 0,
    files_refused INTEGER NOT NULL DEFAULT 0,
    stars INTEGER NOT NULL DEFAULT 0,
    light_curves INTEGER NOT NULL DEFAULT 0,
    segments INTEGER NOT NULL DEFAULT 0,
    settled INTEGER NOT NULL DEFAULT 0, -- of the segments
    points INTEGER NOT NULL DEFAULT 0
) STRICT;

CREATE TABLE file (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    batch INTEGER NOT NULL REFERENCES batch (id),
    label TEXT NOT NULL,
    sha256 BLOB NOT NULL CHECK (length(sha256) = 32),
    outcome INTEGER NOT NULL CHECK (outcome BETWEEN 1 AND 3),
    reason TEXT NOT NULL,
    bytes INTEGER NOT NULL,
    UNIQUE (batch, label)
) STRICT;
-- The same bytes are loaded once.
CREATE UNIQUE INDEX file_sha256 ON file (sha256) WHERE outcome = 1;

CREATE TABLE star (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    name TEXT NOT NULL UNIQUE CHECK (name <> ''),
    ra_deg REAL,
    dec_deg REAL,
    magnitude REAL,
    temperature_k REAL,
    radius_rsun REAL,
    mass_msun REAL
) STRICT;

CREATE TABLE light_curve (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    star INTEGER NOT NULL REFERENCES star (id),
    batch INTEGER NOT NULL REFERENCES batch (id),
    file INTEGER NOT NULL REFERENCES file (id),
    time_reference TEXT NOT NULL,
    count INTEGER NOT NULL CHECK (count > 0),
    starts REAL NOT NULL,
    ends REAL NOT NULL,
    median_flux REAL NOT NULL,
    cadence REAL NOT NULL,
    noise_point REAL,
    noise_1h REAL,
    noise_3h REAL,
    noise_6h REAL,
    noise_13h REAL
) STRICT;
CREATE INDEX light_curve_star ON light_curve (star);
CREATE INDEX light_curve_batch ON light_curve (batch);

-- The points stand apart, so that walking over light curves does not read them.
CREATE TABLE points (
    light_curve INTEGER PRIMARY KEY REFERENCES light_curve (id),
    has_error INTEGER NOT NULL CHECK (has_error IN (0, 1)),
    checksum INTEGER NOT NULL,
    packed BLOB NOT NULL
) STRICT;

CREATE TABLE segment (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    public_id TEXT NOT NULL UNIQUE CHECK (length(public_id) = 16),
    light_curve INTEGER NOT NULL REFERENCES light_curve (id),
    first INTEGER NOT NULL,
    count INTEGER NOT NULL CHECK (count > 0),
    starts REAL NOT NULL,
    ends REAL NOT NULL,
    looks INTEGER NOT NULL DEFAULT 0,
    settled INTEGER NOT NULL DEFAULT 0 CHECK (settled IN (0, 1)),
    CHECK (starts <= ends)
) STRICT;
CREATE INDEX segment_light_curve ON segment (light_curve);

-- Ids of reviews and marks have no holes, because none is ever deleted: the newest id is how many
-- there are.
CREATE TABLE review (
    id INTEGER PRIMARY KEY,
    person INTEGER NOT NULL REFERENCES person (id),
    segment INTEGER NOT NULL REFERENCES segment (id),
    key TEXT NOT NULL,
    body_hash BLOB NOT NULL CHECK (length(body_hash) = 32),
    lease BLOB NOT NULL UNIQUE CHECK (length(lease) = 16),
    late INTEGER NOT NULL CHECK (late IN (0, 1)),
    submitted_ms INTEGER NOT NULL,
    seconds REAL NOT NULL,
    conditions INTEGER NOT NULL CHECK (conditions BETWEEN 0 AND 3),
    UNIQUE (person, key)
) STRICT;
CREATE INDEX review_segment ON review (segment);

CREATE TABLE mark (
    id INTEGER PRIMARY KEY,
    review INTEGER NOT NULL REFERENCES review (id),
    starts REAL NOT NULL,
    ends REAL NOT NULL,
    low REAL NOT NULL,
    high REAL NOT NULL,
    sure INTEGER NOT NULL CHECK (sure IN (0, 1)),
    CHECK (starts < ends),
    CHECK (low <= high)
) STRICT;
CREATE INDEX mark_review ON mark (review);

-- Reviews and marks are never changed or deleted by the program.
CREATE TRIGGER review_stays BEFORE DELETE ON review
BEGIN
    SELECT RAISE(ABORT, 'a review is never deleted');
END;
CREATE TRIGGER mark_stays BEFORE DELETE ON mark
BEGIN
    SELECT RAISE(ABORT, 'a mark is never deleted');
END;
CREATE TRIGGER review_is_kept BEFORE UPDATE ON review
BEGIN
    SELECT RAISE(ABORT, 'a review is never changed');
END;
CREATE TRIGGER mark_is_kept BEFORE UPDATE ON mark
BEGIN
    SELECT RAISE(ABORT, 'a mark is never changed');
END;

-- A run is written in pieces and counts only once it is whole. The number of one that was never
-- finished is given again.
CREATE TABLE consensus_run (
    id INTEGER PRIMARY KEY,
    whole INTEGER NOT NULL DEFAULT 0 CHECK (whole IN (0, 1)),
    newest_review INTEGER NOT NULL,
    reviews INTEGER NOT NULL,
    people INTEGER NOT NULL,
    candidates INTEGER NOT NULL,
    begun_ms INTEGER NOT NULL,
    finished_ms INTEGER NOT NULL,
    settings TEXT NOT NULL,
    fit TEXT NOT NULL
) STRICT;

CREATE TABLE candidate (
    run INTEGER NOT NULL REFERENCES consensus_run (id),
    id INTEGER NOT NULL REFERENCES mark (id), -- the group's oldest mark
    star INTEGER NOT NULL REFERENCES star (id),
    light_curve INTEGER NOT NULL REFERENCES light_curve (id),
    batch INTEGER NOT NULL REFERENCES batch (id), -- of the light curve
    starts REAL NOT NULL,
    ends REAL NOT NULL,
    mid REAL,
    mid_error REAL,
    probability REAL NOT NULL CHECK (probability BETWEEN 0 AND 1),
    log_odds REAL NOT NULL,
    marks_only_probability REAL NOT NULL,
    term_looks REAL,
    term_time REAL,
    term_snr REAL,
    term_prior REAL,
    looks INTEGER NOT NULL,
    marks INTEGER NOT NULL,
    snr REAL,
    depth_ppm REAL,
    depth_error_ppm REAL,
    duration_h REAL,
    duration_error_h REAL,
    ingress_fraction REAL,
    covered REAL,
    gap_distance REAL,
    asymmetry REAL,
    spread_starts REAL,
    spread_ends REAL,
    period REAL,
    period_error REAL,
    epoch REAL,
    transits INTEGER NOT NULL,
    other_stars INTEGER NOT NULL,
    flags INTEGER NOT NULL,
    PRIMARY KEY (run, id)
) STRICT, WITHOUT ROWID;
-- One for each order of the list. What stands after the id lets the list be narrowed without
-- reading the candidates themselves.
CREATE INDEX candidate_probability ON candidate (run, probability, id, batch);
CREATE INDEX candidate_snr ON candidate (run, snr, id, probability, batch);
CREATE INDEX candidate_depth ON candidate (run, depth_ppm, id, probability, batch);
CREATE INDEX candidate_duration ON candidate (run, duration_h, id, probability, batch);
CREATE INDEX candidate_star ON candidate (run, star, id, probability, batch);
CREATE INDEX candidate_mid ON candidate (run, mid, id, probability, batch);
CREATE INDEX candidate_looks ON candidate (run, looks, id, probability, batch);
CREATE INDEX candidate_marks ON candidate (run, marks, id, probability, batch);

CREATE TABLE member (
    run INTEGER NOT NULL REFERENCES consensus_run (id),
    mark INTEGER NOT NULL REFERENCES mark (id),
    candidate INTEGER NOT NULL,
    PRIMARY KEY (run, mark),
    FOREIGN KEY (run, candidate) REFERENCES candidate (run, id)
) STRICT, WITHOUT ROWID;
CREATE INDEX member_candidate ON member (run, candidate);

CREATE TABLE skill (
    run INTEGER NOT NULL REFERENCES consensus_run (id),
    person INTEGER NOT NULL REFERENCES person (id),
    looks INTEGER NOT NULL,
    marks INTEGER NOT NULL,
    days_looked REAL NOT NULL,
    hit REAL,
    hit_low REAL,
    hit_high REAL,
    chance REAL,
    chance_low REAL,
    chance_high REAL,
    weight REAL NOT NULL,
    PRIMARY KEY (run, person)
) STRICT, WITHOUT ROWID;

CREATE TABLE verdict (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    candidate INTEGER NOT NULL REFERENCES mark (id),
    person INTEGER NOT NULL REFERENCES person (id),
    given_ms INTEGER NOT NULL,
    verdict TEXT NOT NULL CHECK (verdict IN ('keep', 'reject', 'unsure')),
    note TEXT NOT NULL
) STRICT;
CREATE INDEX verdict_candidate ON verdict (candidate, id);
