-- Tracked networks keep themselves up to date: plans, refreshes, the latest forecast, accounts of past ones.

-- A revision counts the changes of a network's evidence and plan.
ALTER TABLE networks ADD COLUMN forecast_plan TEXT NULL; -- JSON
ALTER TABLE networks ADD COLUMN revision BIGINT NOT NULL DEFAULT 0 CHECK (revision >= 0);
ALTER TABLE networks ADD COLUMN refreshed BIGINT NULL CHECK (refreshed >= 0); -- revision of the latest forecast
ALTER TABLE networks ADD COLUMN refresh_state TEXT NULL CHECK (refresh_state IN ('refreshing', 'current', 'outdated'));
ALTER TABLE networks ADD COLUMN refresh_job TEXT NULL;
ALTER TABLE networks ADD COLUMN refresh_reason TEXT NULL; -- why there is no newer forecast, in words

-- The revision that a date's counts were stored by: a run of that revision or a later one stands on them.
ALTER TABLE snapshots ADD COLUMN revision BIGINT NOT NULL DEFAULT 0 CHECK (revision >= 0);
ALTER TABLE transitions ADD COLUMN revision BIGINT NOT NULL DEFAULT 0 CHECK (revision >= 0);

-- Jobs of more kinds. A kind is part of a CHECK, which no ALTER changes, so the table is made anew.
CREATE TABLE jobs_of_all_kinds (
    id         TEXT   NOT NULL PRIMARY KEY CHECK (length(id) = 36),
    kind       TEXT   NOT NULL CHECK (kind IN ('link_list', 'refresh', 'backtest')),
    network    TEXT   NOT NULL,
    state      TEXT   NOT NULL CHECK (state IN ('waiting', 'running', 'succeeded', 'failed', 'cancelled')),
    starts     BIGINT NOT NULL CHECK (starts >= 0), -- times it was begun: more than once when the process stopped meanwhile
    created_at BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC
    started_at BIGINT NULL CHECK (started_at >= 0),
    ended_at   BIGINT NULL CHECK (ended_at >= 0),
    task       TEXT   NOT NULL, -- what is to be done, JSON
    outcome    TEXT   NULL      -- what came of it or why nothing did, JSON
);
INSERT INTO jobs_of_all_kinds (id, kind, network, state, starts, created_at, started_at, ended_at, task, outcome)
SELECT id, kind, network, state, starts, created_at, started_at, ended_at, task, outcome FROM jobs;
DROP TABLE jobs;
ALTER TABLE jobs_of_all_kinds RENAME TO jobs;

-- One live job a network and kind; of refreshes one that waits, which stands for every change since the running one began.
CREATE UNIQUE INDEX jobs_live ON jobs (network, kind) WHERE state IN ('waiting', 'running') AND kind <> 'refresh';
CREATE UNIQUE INDEX jobs_refresh ON jobs (network) WHERE state = 'waiting' AND kind = 'refresh';
CREATE INDEX jobs_by_network ON jobs (network, id);

-- What runs of tracked networks stand on. Beside the runs, whose columns behind the large ones are slow to read.
CREATE TABLE network_runs (
    run_id                TEXT   NOT NULL PRIMARY KEY REFERENCES runs (id) ON DELETE CASCADE,
    network               TEXT   NULL REFERENCES networks (name) ON DELETE SET NULL,
    revision              BIGINT NOT NULL CHECK (revision >= 0),
    origin                TEXT   NOT NULL CHECK (length(origin) = 30), -- date of the newest counts
    issued_to             TEXT   NULL CHECK (length(issued_to) = 30), -- last date, of a forecast that a refresh issued
    evidence_corrected_at BIGINT NULL CHECK (evidence_corrected_at >= 0) -- when counts it stands on were last replaced
);
CREATE INDEX network_runs_by_revision ON network_runs (network, revision);
CREATE INDEX network_runs_issued ON network_runs (network, run_id) WHERE issued_to IS NOT NULL;

-- What dashboards poll, in one row.
CREATE TABLE latest_forecasts (
    network    TEXT   NOT NULL PRIMARY KEY REFERENCES networks (name) ON DELETE CASCADE,
    run_id     TEXT   NOT NULL UNIQUE REFERENCES runs (id) ON DELETE CASCADE,
    state      TEXT   NOT NULL CHECK (state IN ('refreshing', 'current', 'outdated')),
    job        TEXT   NOT NULL, -- the refresh that the state comes from
    created_at BIGINT NOT NULL CHECK (created_at >= 0),
    tag        TEXT   NOT NULL CHECK (length(tag) = 64),
    document   TEXT   NOT NULL -- as in runs
);

-- Issued forecasts against what later snapshots showed.
CREATE TABLE accounts (
    run_id       TEXT   NOT NULL REFERENCES network_runs (run_id) ON DELETE CASCADE,
    as_of        TEXT   NOT NULL CHECK (length(as_of) = 30),
    network      TEXT   NOT NULL REFERENCES networks (name) ON DELETE CASCADE,
    snapshot_tag TEXT   NOT NULL CHECK (length(snapshot_tag) = 64), -- SHA-256 of the degree counts held against
    created_at   BIGINT NOT NULL CHECK (created_at >= 0),
    account      TEXT   NOT NULL, -- JSON
    PRIMARY KEY (run_id, as_of)
);
CREATE INDEX accounts_by_network ON accounts (network, run_id, as_of);
