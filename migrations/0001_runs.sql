-- Runs: what was asked, what was answered, and by which engine. Types are the ones SQLite and PostgreSQL share.
CREATE TABLE runs (
    id            TEXT   NOT NULL PRIMARY KEY CHECK (length(id) = 36),
    kind          TEXT   NOT NULL CHECK (kind IN ('forecast', 'fit')),
    network       TEXT   NULL,
    label         TEXT   NULL CHECK (length(label) <= 200),
    created_at    BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC
    engine        TEXT   NOT NULL,
    seed          BIGINT NOT NULL CHECK (seed >= 0),
    inputs_digest TEXT   NOT NULL CHECK (length(inputs_digest) = 72), -- 'sha-256:' and 64 hexadecimal digits
    tag           TEXT   NOT NULL, -- SHA-256 of document, the strong validator of the JSON form
    document      TEXT   NOT NULL, -- the answer, byte for byte
    inputs        TEXT   NOT NULL  -- last: a large column in front would slow every read of the others
);

-- Lists run newest first; ids are ordered by time.
CREATE INDEX runs_by_kind ON runs (kind, id);
CREATE INDEX runs_by_label ON runs (kind, label, id);
CREATE INDEX runs_by_network ON runs (kind, network, id);

-- A key lives as long as its run.
CREATE TABLE idempotency_keys (
    kind        TEXT   NOT NULL CHECK (kind IN ('forecast', 'fit')),
    key         TEXT   NOT NULL CHECK (length(key) BETWEEN 1 AND 255),
    body_digest TEXT   NOT NULL CHECK (length(body_digest) = 64),
    run_id      TEXT   NOT NULL REFERENCES runs (id) ON DELETE CASCADE,
    PRIMARY KEY (kind, key)
);

CREATE INDEX idempotency_keys_by_run ON idempotency_keys (run_id);
