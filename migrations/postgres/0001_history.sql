-- +goose Up
-- The tables of the registry. Times are integer microseconds since 1970 UTC.
-- Text is compared by bytes (COLLATE "C"), as SQLite compares it, so that lists
-- come in one order on both engines.
-- Class of each table: history (INSERT only), derived (rebuildable from
-- history), working (may change or vanish without any number moving).

-- history ------------------------------------------------------------------

CREATE TABLE versions (
    laboratory  text COLLATE "C" NOT NULL,
    kind        text COLLATE "C" NOT NULL,
    code        text COLLATE "C" NOT NULL,
    version     bigint NOT NULL CHECK (version >= 1),
    recorded_at bigint NOT NULL,
    recorded_by text COLLATE "C" NOT NULL,
    valid_from  bigint,
    position    bigint NOT NULL CHECK (position >= 0),
    form        text COLLATE "C" NOT NULL,
    hash        bytea NOT NULL CHECK (octet_length(hash) = 32),
    body        text COLLATE "C", -- NULL: stored as content parts under its hash
    PRIMARY KEY (laboratory, kind, code, version)
);
CREATE UNIQUE INDEX versions_position ON versions (laboratory, position);
-- Reached only by asking for kind || '': a lookup of one record by its key must
-- never be led through a whole kind, which planners without statistics choose.
CREATE INDEX versions_recorded ON versions (laboratory, (kind || ''), recorded_at, position);

CREATE TABLE readings (
    laboratory  text COLLATE "C" NOT NULL,
    session     text COLLATE "C" NOT NULL,
    number      bigint NOT NULL CHECK (number >= 1),
    analysis    text COLLATE "C" NOT NULL,
    preparation text COLLATE "C" NOT NULL,
    position    bigint,
    peak        bigint,
    quantity    text COLLATE "C" NOT NULL,
    role        text COLLATE "C" NOT NULL,
    material    text COLLATE "C" NOT NULL,
    unit        text COLLATE "C" NOT NULL,
    sample      text COLLATE "C" NOT NULL,
    compound    text COLLATE "C" NOT NULL,
    grouping    text COLLATE "C" NOT NULL,
    measured_at bigint,
    raw         double precision NOT NULL,
    u           double precision,
    size        double precision,
    extra       text COLLATE "C" CHECK (extra <> ''), -- rare fields as one canonical JSON object
    PRIMARY KEY (laboratory, session, number)
);

CREATE TABLE uploads (
    laboratory  text COLLATE "C" NOT NULL,
    sha256      bytea NOT NULL CHECK (octet_length(sha256) = 32),
    name        text COLLATE "C" NOT NULL,
    media_type  text COLLATE "C" NOT NULL,
    size        bigint NOT NULL CHECK (size >= 0),
    PRIMARY KEY (laboratory, sha256)
);

CREATE TABLE content (
    laboratory  text COLLATE "C" NOT NULL,
    sha256      bytea NOT NULL CHECK (octet_length(sha256) = 32),
    part        bigint NOT NULL CHECK (part >= 0),
    data        bytea NOT NULL, -- 256 KiB of the bytes, compressed, with a check
    PRIMARY KEY (laboratory, sha256, part)
);

CREATE TABLE entries (
    laboratory     text COLLATE "C" NOT NULL,
    position       bigint NOT NULL CHECK (position >= 0),
    entry          text COLLATE "C" NOT NULL, -- canonical JSON, the datum of the leaf
    transaction_id bytea NOT NULL CHECK (octet_length(transaction_id) = 32),
    PRIMARY KEY (laboratory, position)
);

CREATE TABLE tree_hashes (
    laboratory text COLLATE "C" NOT NULL,
    node       bigint NOT NULL CHECK (node >= 0),
    hash       bytea NOT NULL CHECK (octet_length(hash) = 32),
    PRIMARY KEY (laboratory, node)
);

CREATE TABLE checkpoints (
    laboratory text COLLATE "C" NOT NULL,
    size       bigint NOT NULL CHECK (size >= 0),
    signer     text COLLATE "C" NOT NULL, -- <origin>+<key hash>
    note       text COLLATE "C" NOT NULL,
    PRIMARY KEY (laboratory, size, signer)
);

-- derived ------------------------------------------------------------------

CREATE TABLE edges (
    laboratory    text COLLATE "C" NOT NULL,
    from_kind     text COLLATE "C" NOT NULL,
    from_code     text COLLATE "C" NOT NULL,
    from_version  bigint NOT NULL,
    to_laboratory text COLLATE "C" NOT NULL,
    to_kind       text COLLATE "C" NOT NULL,
    to_code       text COLLATE "C" NOT NULL,
    to_version    bigint NOT NULL,
    part          text COLLATE "C" NOT NULL,
    recorded_at   bigint NOT NULL,
    PRIMARY KEY (laboratory, from_kind, from_code, from_version, part, to_laboratory, to_kind, to_code, to_version)
);
CREATE INDEX edges_to ON edges (laboratory, to_laboratory, to_kind, to_code, from_kind, from_code, from_version, to_version, part);

CREATE TABLE results (
    laboratory  text COLLATE "C" NOT NULL,
    calibration text COLLATE "C" NOT NULL,
    version     bigint NOT NULL,
    line        bigint NOT NULL CHECK (line >= 0), -- index in the body's results
    subject     text COLLATE "C" NOT NULL,
    role        text COLLATE "C" NOT NULL,
    session     text COLLATE "C" NOT NULL,
    scale       text COLLATE "C" NOT NULL,
    measurand   text COLLATE "C" NOT NULL,
    instrument  text COLLATE "C" NOT NULL,
    measured_at bigint NOT NULL, -- start of the session; 0 where it is not known
    value       double precision NOT NULL, -- per mil
    u           double precision NOT NULL,
    flags       text COLLATE "C" NOT NULL, -- codes, separated by spaces
    recorded_at bigint NOT NULL,
    PRIMARY KEY (laboratory, calibration, version, line)
);
CREATE INDEX results_subject ON results (laboratory, subject, measured_at, calibration, version, line);
CREATE INDEX results_scale ON results (laboratory, scale, measured_at, calibration, version, line);

CREATE TABLE sensitivities (
    laboratory  text COLLATE "C" NOT NULL,
    calibration text COLLATE "C" NOT NULL,
    version     bigint NOT NULL,
    parameters  bytea NOT NULL, -- packed float64, little endian
    results     bytea NOT NULL,
    PRIMARY KEY (laboratory, calibration, version)
);

CREATE TABLE reported (
    code          text COLLATE "C" NOT NULL PRIMARY KEY, -- unique in the registry
    laboratory    text COLLATE "C" NOT NULL,
    report        text COLLATE "C" NOT NULL,
    version       bigint NOT NULL,
    line          bigint NOT NULL,
    final         text COLLATE "C" NOT NULL,
    final_version bigint NOT NULL,
    value         double precision NOT NULL, -- per mil
    u             double precision NOT NULL,
    hash          bytea NOT NULL CHECK (octet_length(hash) = 32)
);
CREATE UNIQUE INDEX reported_line ON reported (laboratory, report, version, line);

CREATE TABLE names (
    laboratory  text COLLATE "C" NOT NULL,
    kind        text COLLATE "C" NOT NULL,
    name        text COLLATE "C" NOT NULL, -- folded
    code        text COLLATE "C" NOT NULL,
    version     bigint NOT NULL,
    recorded_at bigint NOT NULL,
    PRIMARY KEY (laboratory, kind, code, version, name)
);
CREATE INDEX names_name ON names (laboratory, kind, name, code, version);

CREATE TABLE uses (
    laboratory text COLLATE "C" NOT NULL,
    session    text COLLATE "C" NOT NULL,
    unit       text COLLATE "C" NOT NULL,
    readings   bigint NOT NULL CHECK (readings >= 1),
    PRIMARY KEY (laboratory, session, unit)
);
CREATE INDEX uses_unit ON uses (laboratory, unit, session);

CREATE TABLE currents (
    laboratory text COLLATE "C" NOT NULL,
    kind       text COLLATE "C" NOT NULL,
    code       text COLLATE "C" NOT NULL,
    newest     bigint NOT NULL CHECK (newest >= 1),
    state      text COLLATE "C" NOT NULL, -- of the newest version
    in_force   bigint NOT NULL CHECK (in_force >= 0), -- 0: none
    held       text COLLATE "C" NOT NULL, -- state of the version in force
    until      bigint, -- from then on the row is wrong by the mere passing of time
    PRIMARY KEY (laboratory, kind, code)
);
-- Codes are unique without regard to case.
CREATE UNIQUE INDEX currents_code ON currents (laboratory, kind, lower(code));

CREATE TABLE ledger_heads (
    laboratory  text COLLATE "C" NOT NULL PRIMARY KEY,
    size        bigint NOT NULL CHECK (size >= 0),
    recorded_at bigint NOT NULL,
    checkpoints bigint NOT NULL CHECK (checkpoints >= 0)
);

-- working ------------------------------------------------------------------

CREATE TABLE credentials (
    laboratory    text COLLATE "C" NOT NULL,
    person        text COLLATE "C" NOT NULL,
    password_hash text COLLATE "C" NOT NULL,
    temporary     bigint NOT NULL CHECK (temporary IN (0, 1)), -- to be changed at the next sign-in
    changed_at    bigint NOT NULL,
    PRIMARY KEY (laboratory, person)
);

CREATE TABLE sign_ins (
    laboratory text COLLATE "C" NOT NULL,
    hash       bytea NOT NULL CHECK (octet_length(hash) = 32), -- SHA-256 of the secret
    person     text COLLATE "C" NOT NULL,
    created_at bigint NOT NULL,
    seen_at    bigint NOT NULL,
    expires_at bigint NOT NULL,
    data       text COLLATE "C" NOT NULL,
    PRIMARY KEY (laboratory, hash)
);

CREATE TABLE tokens (
    laboratory text COLLATE "C" NOT NULL,
    hash       bytea NOT NULL CHECK (octet_length(hash) = 32), -- SHA-256 of the secret
    code       text COLLATE "C" NOT NULL,
    person     text COLLATE "C" NOT NULL,
    used_at    bigint,
    PRIMARY KEY (laboratory, hash)
);
CREATE UNIQUE INDEX tokens_code ON tokens (laboratory, code);

CREATE TABLE idempotency (
    laboratory   text COLLATE "C" NOT NULL,
    person       text COLLATE "C" NOT NULL,
    request_key  text COLLATE "C" NOT NULL,
    request_hash bytea NOT NULL CHECK (octet_length(request_hash) = 32),
    answer       bytea NOT NULL,
    created_at   bigint NOT NULL,
    PRIMARY KEY (laboratory, person, request_key)
);
CREATE INDEX idempotency_created ON idempotency (laboratory, created_at);

CREATE TABLE jobs (
    laboratory   text COLLATE "C" NOT NULL,
    code         text COLLATE "C" NOT NULL,
    kind         text COLLATE "C" NOT NULL,
    arguments    text COLLATE "C" NOT NULL,
    state        text COLLATE "C" NOT NULL CHECK (state IN ('waiting', 'running', 'done', 'failed', 'cancelled')),
    cursor       text COLLATE "C" NOT NULL,
    done         bigint NOT NULL,
    total        bigint NOT NULL,
    message      text COLLATE "C" NOT NULL,
    created_by   text COLLATE "C" NOT NULL,
    created_at   bigint NOT NULL,
    updated_at   bigint NOT NULL,
    lease_holder text COLLATE "C" NOT NULL,
    lease_until  bigint NOT NULL,
    PRIMARY KEY (laboratory, code)
);
CREATE INDEX jobs_state ON jobs (laboratory, state, created_at, code);

CREATE TABLE leases (
    laboratory text COLLATE "C" NOT NULL,
    name       text COLLATE "C" NOT NULL,
    holder     text COLLATE "C" NOT NULL,
    until      bigint NOT NULL,
    PRIMARY KEY (laboratory, name)
);

-- History is inserted only. No promise rests on these triggers: the ledger
-- shows what an owner who drops them does.

-- +goose StatementBegin
CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    RAISE EXCEPTION '% are history: inserted only', TG_TABLE_NAME;
END;
$$;
-- +goose StatementEnd
CREATE TRIGGER versions_no_change BEFORE UPDATE OR DELETE ON versions FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER versions_no_truncate BEFORE TRUNCATE ON versions FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
CREATE TRIGGER readings_no_change BEFORE UPDATE OR DELETE ON readings FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER readings_no_truncate BEFORE TRUNCATE ON readings FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
CREATE TRIGGER uploads_no_change BEFORE UPDATE OR DELETE ON uploads FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER uploads_no_truncate BEFORE TRUNCATE ON uploads FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
CREATE TRIGGER content_no_change BEFORE UPDATE OR DELETE ON content FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER content_no_truncate BEFORE TRUNCATE ON content FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
CREATE TRIGGER entries_no_change BEFORE UPDATE OR DELETE ON entries FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER entries_no_truncate BEFORE TRUNCATE ON entries FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
CREATE TRIGGER tree_hashes_no_change BEFORE UPDATE OR DELETE ON tree_hashes FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER tree_hashes_no_truncate BEFORE TRUNCATE ON tree_hashes FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
CREATE TRIGGER checkpoints_no_change BEFORE UPDATE OR DELETE ON checkpoints FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER checkpoints_no_truncate BEFORE TRUNCATE ON checkpoints FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
