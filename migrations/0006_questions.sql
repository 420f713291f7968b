-- What is asked of a network again and again: limits, answered with each of its forecasts, and scenarios, compared on demand.

CREATE TABLE kept_questions (
    network    TEXT   NOT NULL REFERENCES networks (name) ON DELETE CASCADE,
    kind       TEXT   NOT NULL CHECK (kind IN ('limit', 'scenario')),
    name       TEXT   NOT NULL CHECK (length(name) BETWEEN 1 AND 100),
    created_at BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC
    updated_at BIGINT NOT NULL CHECK (updated_at >= created_at), -- likewise
    tag        TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of the body
    body       TEXT   NOT NULL, -- JSON
    PRIMARY KEY (network, kind, name)
);
