-- +goose Up
-- The line of every version of a calibration, derived from its body: what an
-- instrument's slope, intercept and drift have been. raw = intercept + slope·true.
CREATE TABLE lines (
    laboratory  TEXT    NOT NULL,
    calibration TEXT    NOT NULL,
    version     INTEGER NOT NULL,
    instrument  TEXT    NOT NULL,
    method      TEXT    NOT NULL,
    scale       TEXT    NOT NULL,
    measurand   TEXT    NOT NULL,
    session     TEXT    NOT NULL,
    measured_at INTEGER NOT NULL, -- start of the session; 0 where it is not known
    slope       REAL    NOT NULL, -- raw per true
    u_slope     REAL    NOT NULL,
    intercept   REAL    NOT NULL, -- per mil
    u_intercept REAL    NOT NULL,
    drift       REAL, -- per mil an hour; NULL without a linear drift
    u_drift     REAL,
    recorded_at INTEGER NOT NULL,
    PRIMARY KEY (laboratory, calibration, version)
) STRICT, WITHOUT ROWID;
CREATE INDEX lines_instrument ON lines (laboratory, instrument, method, scale, measurand, measured_at, calibration, version);
INSERT INTO rebuilds (laboratory, name, position) SELECT laboratory, 'lines', 0 FROM ledger_heads;
