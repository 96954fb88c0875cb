-- +goose Up
-- What rests on a calibration, packed for questions that touch many of them:
-- final values by their members, and the lines of reports. Derived.

CREATE TABLE shares (
    laboratory  TEXT    NOT NULL,
    calibration TEXT    NOT NULL,
    version     INTEGER NOT NULL,
    kind        TEXT    NOT NULL, -- final or report: where the row comes from
    code        TEXT    NOT NULL,
    number      INTEGER NOT NULL, -- its version
    packed      TEXT    NOT NULL, -- one line for each share
    PRIMARY KEY (laboratory, calibration, version, kind, code, number)
) STRICT, WITHOUT ROWID;
CREATE INDEX shares_from ON shares (laboratory, kind, code, number);

-- Final values and reports of which some version is not simply approved: the rest of
-- them need not be asked for.
CREATE INDEX currents_moved ON currents (laboratory, kind, code)
    WHERE kind IN ('final', 'report') AND (newest > 1 OR state <> 'approved' OR until IS NOT NULL);

-- Derived tables that have to be filled from history; a row goes when that is done. Working.
CREATE TABLE rebuilds (
    laboratory TEXT    NOT NULL,
    name       TEXT    NOT NULL,
    position   INTEGER NOT NULL, -- of the ledger; what is before is done
    PRIMARY KEY (laboratory, name)
) STRICT;
INSERT INTO rebuilds (laboratory, name, position) SELECT laboratory, 'shares', 0 FROM ledger_heads;
