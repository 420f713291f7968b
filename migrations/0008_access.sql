-- Who may ask for what: access keys, what they have used, and the trail of writes.

CREATE TABLE access_keys (
    id           TEXT   NOT NULL PRIMARY KEY CHECK (length(id) = 16), -- the part of the key that is not secret
    name         TEXT   NOT NULL CHECK (length(name) BETWEEN 1 AND 100),
    scope        TEXT   NOT NULL CHECK (scope IN ('read', 'write', 'admin')),
    digest       TEXT   NOT NULL CHECK (length(digest) = 64), -- SHA-256 of the secret part, hexadecimal
    per_minute   BIGINT NULL CHECK (per_minute > 0), -- requests; null: as many as come
    per_day      BIGINT NULL CHECK (per_day > 0),
    created_at   BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC, as all times here
    expires_at   BIGINT NULL CHECK (expires_at >= 0),
    last_used_at BIGINT NULL CHECK (last_used_at >= 0),
    revoked_at   BIGINT NULL CHECK (revoked_at >= 0)
);
CREATE UNIQUE INDEX access_keys_name ON access_keys (name) WHERE revoked_at IS NULL;

-- The networks that a key is bound to; a key without any is bound to none. A network may be made later.
CREATE TABLE access_key_networks (
    access_key TEXT NOT NULL REFERENCES access_keys (id) ON DELETE CASCADE,
    network    TEXT NOT NULL,
    PRIMARY KEY (access_key, network)
);

-- Requests served to a key on a day.
CREATE TABLE access_key_days (
    access_key TEXT   NOT NULL REFERENCES access_keys (id) ON DELETE CASCADE,
    day        BIGINT NOT NULL CHECK (day >= 0), -- days since 1970-01-01 UTC
    requests   BIGINT NOT NULL CHECK (requests >= 0),
    PRIMARY KEY (access_key, day)
);

-- Who wrote what. A line is written in the transaction that it tells of, and tells the key as it was then.
CREATE TABLE audit (
    id         TEXT   NOT NULL PRIMARY KEY CHECK (length(id) = 36), -- ordered by time
    written_at BIGINT NOT NULL CHECK (written_at >= 0),
    key_id     TEXT   NULL, -- null: no key was asked for
    key_name   TEXT   NULL,
    method     TEXT   NOT NULL,
    route      TEXT   NOT NULL,
    path       TEXT   NOT NULL,
    network    TEXT   NULL,
    made       TEXT   NULL, -- id of the run or job that it made
    request_id TEXT   NULL
);
CREATE INDEX audit_written_at ON audit (written_at);
CREATE INDEX audit_network ON audit (network, id);
CREATE INDEX audit_key ON audit (key_id, id);
