-- +goose Up
-- The line of every version of a calibration, derived from its body: what an
-- instrument's slope, intercept and drift have been. raw = intercept + slope·true.
CREATE TABLE lines (
    laboratory  text COLLATE "C" NOT NULL,
    calibration text COLLATE "C" NOT NULL,
    version     bigint NOT NULL,
    instrument  text COLLATE "C" NOT NULL,
    method      text COLLATE "C" NOT NULL,
    scale       text COLLATE "C" NOT NULL,
    measurand   text COLLATE "C" NOT NULL,
    session     text COLLATE "C" NOT NULL,
    measured_at bigint NOT NULL, -- start of the session; 0 where it is not known
    slope       double precision NOT NULL, -- raw per true
    u_slope     double precision NOT NULL,
    intercept   double precision NOT NULL, -- per mil
    u_intercept double precision NOT NULL,
    drift       double precision, -- per mil an hour; NULL without a linear drift
    u_drift     double precision,
    recorded_at bigint NOT NULL,
    PRIMARY KEY (laboratory, calibration, version)
);
CREATE INDEX lines_instrument ON lines (laboratory, instrument, method, scale, measurand, measured_at, calibration, version);
INSERT INTO rebuilds (laboratory, name, position) SELECT laboratory, 'lines', 0 FROM ledger_heads;
