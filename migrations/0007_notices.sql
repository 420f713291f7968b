-- Notices: who is told when a limit's risk passes its line or forecasts drift, and the events that wait to be sent.

CREATE TABLE notices (
    id           TEXT    NOT NULL PRIMARY KEY CHECK (length(id) = 36), -- another one when it is made anew under its name
    network      TEXT    NOT NULL REFERENCES networks (name) ON DELETE CASCADE,
    name         TEXT    NOT NULL CHECK (length(name) BETWEEN 1 AND 100),
    created_at   BIGINT  NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC, as all times here
    updated_at   BIGINT  NOT NULL CHECK (updated_at >= created_at),
    tag          TEXT    NOT NULL CHECK (length(tag) = 64), -- SHA-256 of url and kinds
    limit_risk   BOOLEAN NOT NULL, -- whether it tells of limits
    drift        BOOLEAN NOT NULL, -- whether it tells of drift
    delivered    BIGINT  NOT NULL DEFAULT 0 CHECK (delivered >= 0), -- events taken
    delivered_at BIGINT  NULL CHECK (delivered_at >= 0), -- the last of them
    given_up     BIGINT  NOT NULL DEFAULT 0 CHECK (given_up >= 0), -- events never taken
    given_up_at  BIGINT  NULL CHECK (given_up_at >= 0), -- the last of them
    failures     BIGINT  NOT NULL DEFAULT 0 CHECK (failures >= 0), -- attempts that failed since the last one that did not
    failed_at    BIGINT  NULL CHECK (failed_at >= 0), -- the last attempt that failed
    failure      TEXT    NULL, -- why, in words
    due_at       BIGINT  NULL CHECK (due_at >= 0), -- when the oldest pending event is tried next; null when none is pending
    url          TEXT    NOT NULL,
    UNIQUE (network, name)
);
CREATE INDEX notices_due ON notices (due_at) WHERE due_at IS NOT NULL;

-- What a notice last had to tell of a limit, or of drift: an event is what differs from it.
CREATE TABLE notice_standings (
    notice TEXT             NOT NULL REFERENCES notices (id) ON DELETE CASCADE,
    kind   TEXT             NOT NULL CHECK (kind IN ('limit_risk', 'drift')),
    about  TEXT             NOT NULL, -- the limit's name; empty for drift
    raised BOOLEAN          NOT NULL, -- whether the risk was above its line, or forecasts drifted
    figure DOUBLE PRECISION NOT NULL, -- the probability behind it
    terms  TEXT             NOT NULL, -- of the limit that was answered, JSON
    PRIMARY KEY (notice, kind, about)
);

-- The outbox. A refresh ends once, in one transaction with its events; the unique index keeps even a fault from doubling one.
CREATE TABLE notice_events (
    id            TEXT             NOT NULL PRIMARY KEY CHECK (length(id) = 36), -- in the order in which they are sent
    notice        TEXT             NOT NULL REFERENCES notices (id) ON DELETE CASCADE,
    refresh       TEXT             NOT NULL, -- the job that found it
    kind          TEXT             NOT NULL CHECK (kind IN ('limit_risk', 'drift')),
    about         TEXT             NOT NULL,
    raised        BOOLEAN          NOT NULL,
    figure_before DOUBLE PRECISION NULL, -- null where the forecast before had no answer to it
    created_at    BIGINT           NOT NULL CHECK (created_at >= 0),
    attempts      BIGINT           NOT NULL DEFAULT 0 CHECK (attempts >= 0),
    state         TEXT             NOT NULL CHECK (state IN ('pending', 'delivered', 'given_up')),
    details       TEXT             NOT NULL, -- JSON
    UNIQUE (notice, refresh, kind, about)
);
CREATE INDEX notice_events_pending ON notice_events (notice, id) WHERE state = 'pending';
