-- Backtests: what would have been forecast at each past snapshot, against what came.

CREATE TABLE backtests (
    id                    TEXT   NOT NULL PRIMARY KEY CHECK (length(id) = 36), -- its job's
    network               TEXT   NOT NULL REFERENCES networks (name) ON DELETE CASCADE,
    created_at            BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC
    revision              BIGINT NOT NULL CHECK (revision >= 0), -- of the network when its evidence was read
    evidence              TEXT   NOT NULL CHECK (length(evidence) = 64), -- SHA-256 of the evidence it stands on
    evidence_corrected_at BIGINT NULL CHECK (evidence_corrected_at >= 0), -- when counts it stands on were last replaced
    redo_due              BOOLEAN NOT NULL DEFAULT FALSE, -- whether the next refresh is to take it on anew
    task                  TEXT   NOT NULL, -- what was asked, JSON
    tag                   TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of the document
    document              TEXT   NOT NULL -- JSON, as it is answered
);
CREATE INDEX backtests_by_network ON backtests (network, id);

-- What a backtest at work has of each origin; gone when its job ends.
CREATE TABLE backtest_records (
    job      TEXT   NOT NULL REFERENCES jobs (id) ON DELETE CASCADE,
    origin   BIGINT NOT NULL CHECK (origin >= 0), -- place of the snapshot
    evidence TEXT   NOT NULL CHECK (length(evidence) = 64), -- SHA-256 of the evidence it stands on
    record   TEXT   NOT NULL, -- JSON
    PRIMARY KEY (job, origin)
);
