-- Sources: a query that is run on a schedule in a database of the operator's, and whose answer is a snapshot of its network.
CREATE TABLE sources (
    network         TEXT   NOT NULL PRIMARY KEY REFERENCES networks (name) ON DELETE CASCADE,
    created_at      BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC, as all times here
    updated_at      BIGINT NOT NULL CHECK (updated_at >= created_at),
    tag             TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of what was asked for
    database_name   TEXT   NOT NULL, -- as the operator's list names it; addresses are never stored
    query           TEXT   NOT NULL,
    every           TEXT   NOT NULL, -- ISO 8601
    timeout_seconds BIGINT NOT NULL CHECK (timeout_seconds >= 1),
    starts_at       BIGINT NOT NULL, -- what due times are counted from
    due_at          BIGINT NOT NULL CHECK (due_at >= 0), -- the next run; of one that is at work, its own
    run             TEXT   NULL CHECK (length(run) = 36), -- the run at work; null when there is none
    claimed_by      TEXT   NULL, -- the process that is at it
    claimed_until   BIGINT NULL CHECK (claimed_until >= 0), -- past it the run is anybody's
    ended           BIGINT NOT NULL DEFAULT 0 CHECK (ended >= 0), -- runs that have ended
    failures        BIGINT NOT NULL DEFAULT 0 CHECK (failures >= 0), -- runs that failed since the last that did not
    succeeded_at    BIGINT NULL CHECK (succeeded_at >= 0), -- when the last run that stored a snapshot ended
    snapshot        TEXT   NULL, -- the date of that snapshot
    failed_at       BIGINT NULL CHECK (failed_at >= 0), -- when the last run that failed ended
    failure         TEXT   NULL -- why, in words
);
CREATE INDEX sources_due ON sources (due_at);
