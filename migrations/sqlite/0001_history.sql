-- +goose Up
-- The tables of the registry. Times are integer microseconds since 1970 UTC.
-- Class of each table: history (INSERT only), derived (rebuildable from
-- history), working (may change or vanish without any number moving).

-- history ------------------------------------------------------------------

CREATE TABLE versions (
    laboratory  TEXT    NOT NULL,
    kind        TEXT    NOT NULL,
    code        TEXT    NOT NULL,
    version     INTEGER NOT NULL CHECK (version >= 1),
    recorded_at INTEGER NOT NULL,
    recorded_by TEXT    NOT NULL,
    valid_from  INTEGER,
    position    INTEGER NOT NULL CHECK (position >= 0),
    form        TEXT    NOT NULL,
    hash        BLOB    NOT NULL CHECK (length(hash) = 32),
    body        TEXT, -- NULL: stored as content parts under its hash
    PRIMARY KEY (laboratory, kind, code, version)
) STRICT;
CREATE UNIQUE INDEX versions_position ON versions (laboratory, position);
-- Reached only by asking for kind || '': a lookup of one record by its key must
-- never be led through a whole kind, which planners without statistics choose.
CREATE INDEX versions_recorded ON versions (laboratory, (kind || ''), recorded_at, position);

CREATE TABLE readings (
    laboratory  TEXT    NOT NULL,
    session     TEXT    NOT NULL,
    number      INTEGER NOT NULL CHECK (number >= 1),
    analysis    TEXT    NOT NULL,
    preparation TEXT    NOT NULL,
    position    INTEGER,
    peak        INTEGER,
    quantity    TEXT    NOT NULL,
    role        TEXT    NOT NULL,
    material    TEXT    NOT NULL,
    unit        TEXT    NOT NULL,
    sample      TEXT    NOT NULL,
    compound    TEXT    NOT NULL,
    grouping    TEXT    NOT NULL,
    measured_at INTEGER,
    raw         REAL    NOT NULL,
    u           REAL,
    size        REAL,
    extra       TEXT    CHECK (extra <> ''), -- rare fields as one canonical JSON object
    PRIMARY KEY (laboratory, session, number)
) STRICT, WITHOUT ROWID;

CREATE TABLE uploads (
    laboratory  TEXT    NOT NULL,
    sha256      BLOB    NOT NULL CHECK (length(sha256) = 32),
    name        TEXT    NOT NULL,
    media_type  TEXT    NOT NULL,
    size        INTEGER NOT NULL CHECK (size >= 0),
    PRIMARY KEY (laboratory, sha256)
) STRICT;

CREATE TABLE content (
    laboratory  TEXT    NOT NULL,
    sha256      BLOB    NOT NULL CHECK (length(sha256) = 32),
    part        INTEGER NOT NULL CHECK (part >= 0),
    data        BLOB    NOT NULL, -- 256 KiB of the bytes, compressed, with a check
    PRIMARY KEY (laboratory, sha256, part)
) STRICT;

CREATE TABLE entries (
    laboratory     TEXT    NOT NULL,
    position       INTEGER NOT NULL CHECK (position >= 0),
    entry          TEXT    NOT NULL, -- canonical JSON, the datum of the leaf
    transaction_id BLOB    NOT NULL CHECK (length(transaction_id) = 32),
    PRIMARY KEY (laboratory, position)
) STRICT, WITHOUT ROWID;

CREATE TABLE tree_hashes (
    laboratory TEXT    NOT NULL,
    node       INTEGER NOT NULL CHECK (node >= 0),
    hash       BLOB    NOT NULL CHECK (length(hash) = 32),
    PRIMARY KEY (laboratory, node)
) STRICT, WITHOUT ROWID;

CREATE TABLE checkpoints (
    laboratory TEXT    NOT NULL,
    size       INTEGER NOT NULL CHECK (size >= 0),
    signer     TEXT    NOT NULL, -- <origin>+<key hash>
    note       TEXT    NOT NULL,
    PRIMARY KEY (laboratory, size, signer)
) STRICT;

-- derived ------------------------------------------------------------------

CREATE TABLE edges (
    laboratory    TEXT    NOT NULL,
    from_kind     TEXT    NOT NULL,
    from_code     TEXT    NOT NULL,
    from_version  INTEGER NOT NULL,
    to_laboratory TEXT    NOT NULL,
    to_kind       TEXT    NOT NULL,
    to_code       TEXT    NOT NULL,
    to_version    INTEGER NOT NULL,
    part          TEXT    NOT NULL,
    recorded_at   INTEGER NOT NULL,
    PRIMARY KEY (laboratory, from_kind, from_code, from_version, part, to_laboratory, to_kind, to_code, to_version)
) STRICT, WITHOUT ROWID;
CREATE INDEX edges_to ON edges (laboratory, to_laboratory, to_kind, to_code, from_kind, from_code, from_version, to_version, part);

CREATE TABLE results (
    laboratory  TEXT    NOT NULL,
    calibration TEXT    NOT NULL,
    version     INTEGER NOT NULL,
    line        INTEGER NOT NULL CHECK (line >= 0), -- index in the body's results
    subject     TEXT    NOT NULL,
    role        TEXT    NOT NULL,
    session     TEXT    NOT NULL,
    scale       TEXT    NOT NULL,
    measurand   TEXT    NOT NULL,
    instrument  TEXT    NOT NULL,
    measured_at INTEGER NOT NULL, -- start of the session; 0 where it is not known
    value       REAL    NOT NULL, -- per mil
    u           REAL    NOT NULL,
    flags       TEXT    NOT NULL, -- codes, separated by spaces
    recorded_at INTEGER NOT NULL,
    PRIMARY KEY (laboratory, calibration, version, line)
) STRICT;
CREATE INDEX results_subject ON results (laboratory, subject, measured_at, calibration, version, line);
CREATE INDEX results_scale ON results (laboratory, scale, measured_at, calibration, version, line);

CREATE TABLE sensitivities (
    laboratory  TEXT    NOT NULL,
    calibration TEXT    NOT NULL,
    version     INTEGER NOT NULL,
    parameters  BLOB    NOT NULL, -- packed float64, little endian
    results     BLOB    NOT NULL,
    PRIMARY KEY (laboratory, calibration, version)
) STRICT;

CREATE TABLE reported (
    code          TEXT    NOT NULL PRIMARY KEY, -- unique in the registry
    laboratory    TEXT    NOT NULL,
    report        TEXT    NOT NULL,
    version       INTEGER NOT NULL,
    line          INTEGER NOT NULL,
    final         TEXT    NOT NULL,
    final_version INTEGER NOT NULL,
    value         REAL    NOT NULL, -- per mil
    u             REAL    NOT NULL,
    hash          BLOB    NOT NULL CHECK (length(hash) = 32)
) STRICT;
CREATE UNIQUE INDEX reported_line ON reported (laboratory, report, version, line);

CREATE TABLE names (
    laboratory  TEXT    NOT NULL,
    kind        TEXT    NOT NULL,
    name        TEXT    NOT NULL, -- folded
    code        TEXT    NOT NULL,
    version     INTEGER NOT NULL,
    recorded_at INTEGER NOT NULL,
    PRIMARY KEY (laboratory, kind, code, version, name)
) STRICT, WITHOUT ROWID;
CREATE INDEX names_name ON names (laboratory, kind, name, code, version);

CREATE TABLE uses (
    laboratory TEXT    NOT NULL,
    session    TEXT    NOT NULL,
    unit       TEXT    NOT NULL,
    readings   INTEGER NOT NULL CHECK (readings >= 1),
    PRIMARY KEY (laboratory, session, unit)
) STRICT, WITHOUT ROWID;
CREATE INDEX uses_unit ON uses (laboratory, unit, session);

CREATE TABLE currents (
    laboratory TEXT    NOT NULL,
    kind       TEXT    NOT NULL,
    code       TEXT    NOT NULL,
    newest     INTEGER NOT NULL CHECK (newest >= 1),
    state      TEXT    NOT NULL, -- of the newest version
    in_force   INTEGER NOT NULL CHECK (in_force >= 0), -- 0: none
    held       TEXT    NOT NULL, -- state of the version in force
    until      INTEGER, -- from then on the row is wrong by the mere passing of time
    PRIMARY KEY (laboratory, kind, code)
) STRICT, WITHOUT ROWID;
-- Codes are unique without regard to case.
CREATE UNIQUE INDEX currents_code ON currents (laboratory, kind, lower(code));

CREATE TABLE ledger_heads (
    laboratory  TEXT    NOT NULL PRIMARY KEY,
    size        INTEGER NOT NULL CHECK (size >= 0),
    recorded_at INTEGER NOT NULL,
    checkpoints INTEGER NOT NULL CHECK (checkpoints >= 0)
) STRICT;

-- working ------------------------------------------------------------------

CREATE TABLE credentials (
    laboratory    TEXT    NOT NULL,
    person        TEXT    NOT NULL,
    password_hash TEXT    NOT NULL,
    temporary     INTEGER NOT NULL CHECK (temporary IN (0, 1)), -- to be changed at the next sign-in
    changed_at    INTEGER NOT NULL,
    PRIMARY KEY (laboratory, person)
) STRICT;

CREATE TABLE sign_ins (
    laboratory TEXT    NOT NULL,
    hash       BLOB    NOT NULL CHECK (length(hash) = 32), -- SHA-256 of the secret
    person     TEXT    NOT NULL,
    created_at INTEGER NOT NULL,
    seen_at    INTEGER NOT NULL,
    expires_at INTEGER NOT NULL,
    data       TEXT    NOT NULL,
    PRIMARY KEY (laboratory, hash)
) STRICT;

CREATE TABLE tokens (
    laboratory TEXT    NOT NULL,
    hash       BLOB    NOT NULL CHECK (length(hash) = 32), -- SHA-256 of the secret
    code       TEXT    NOT NULL,
    person     TEXT    NOT NULL,
    used_at    INTEGER,
    PRIMARY KEY (laboratory, hash)
) STRICT;
CREATE UNIQUE INDEX tokens_code ON tokens (laboratory, code);

CREATE TABLE idempotency (
    laboratory   TEXT    NOT NULL,
    person       TEXT    NOT NULL,
    request_key  TEXT    NOT NULL,
    request_hash BLOB    NOT NULL CHECK (length(request_hash) = 32),
    answer       BLOB    NOT NULL,
    created_at   INTEGER NOT NULL,
    PRIMARY KEY (laboratory, person, request_key)
) STRICT;
CREATE INDEX idempotency_created ON idempotency (laboratory, created_at);

CREATE TABLE jobs (
    laboratory   TEXT    NOT NULL,
    code         TEXT    NOT NULL,
    kind         TEXT    NOT NULL,
    arguments    TEXT    NOT NULL,
    state        TEXT    NOT NULL CHECK (state IN ('waiting', 'running', 'done', 'failed', 'cancelled')),
    cursor       TEXT    NOT NULL,
    done         INTEGER NOT NULL,
    total        INTEGER NOT NULL,
    message      TEXT    NOT NULL,
    created_by   TEXT    NOT NULL,
    created_at   INTEGER NOT NULL,
    updated_at   INTEGER NOT NULL,
    lease_holder TEXT    NOT NULL,
    lease_until  INTEGER NOT NULL,
    PRIMARY KEY (laboratory, code)
) STRICT;
CREATE INDEX jobs_state ON jobs (laboratory, state, created_at, code);

CREATE TABLE leases (
    laboratory TEXT    NOT NULL,
    name       TEXT    NOT NULL,
    holder     TEXT    NOT NULL,
    until      INTEGER NOT NULL,
    PRIMARY KEY (laboratory, name)
) STRICT;

-- History is inserted only. No promise rests on these triggers: the ledger
-- shows what an owner who drops them does.

-- +goose StatementBegin
CREATE TRIGGER versions_no_update BEFORE UPDATE ON versions BEGIN
    SELECT raise(ABORT, 'versions are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER versions_no_delete BEFORE DELETE ON versions BEGIN
    SELECT raise(ABORT, 'versions are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER readings_no_update BEFORE UPDATE ON readings BEGIN
    SELECT raise(ABORT, 'readings are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER readings_no_delete BEFORE DELETE ON readings BEGIN
    SELECT raise(ABORT, 'readings are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER uploads_no_update BEFORE UPDATE ON uploads BEGIN
    SELECT raise(ABORT, 'uploads are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER uploads_no_delete BEFORE DELETE ON uploads BEGIN
    SELECT raise(ABORT, 'uploads are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER content_no_update BEFORE UPDATE ON content BEGIN
    SELECT raise(ABORT, 'content are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER content_no_delete BEFORE DELETE ON content BEGIN
    SELECT raise(ABORT, 'content are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER entries_no_update BEFORE UPDATE ON entries BEGIN
    SELECT raise(ABORT, 'entries are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER entries_no_delete BEFORE DELETE ON entries BEGIN
    SELECT raise(ABORT, 'entries are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER tree_hashes_no_update BEFORE UPDATE ON tree_hashes BEGIN
    SELECT raise(ABORT, 'tree_hashes are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER tree_hashes_no_delete BEFORE DELETE ON tree_hashes BEGIN
    SELECT raise(ABORT, 'tree_hashes are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER checkpoints_no_update BEFORE UPDATE ON checkpoints BEGIN
    SELECT raise(ABORT, 'checkpoints are history: inserted only');
END;
-- +goose StatementEnd
-- +goose StatementBegin
CREATE TRIGGER checkpoints_no_delete BEFORE DELETE ON checkpoints BEGIN
    SELECT raise(ABORT, 'checkpoints are history: inserted only');
END;
-- +goose StatementEnd
