-- Work that outlasts its request. The unique index keeps a network from having two jobs at once.
CREATE TABLE jobs (
    id         TEXT   NOT NULL PRIMARY KEY CHECK (length(id) = 36),
    kind       TEXT   NOT NULL CHECK (kind IN ('link_list')),
    network    TEXT   NOT NULL,
    state      TEXT   NOT NULL CHECK (state IN ('waiting', 'running', 'succeeded', 'failed', 'cancelled')),
    starts     BIGINT NOT NULL CHECK (starts >= 0), -- times it was begun: more than once when the process stopped meanwhile
    created_at BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC
    started_at BIGINT NULL CHECK (started_at >= 0),
    ended_at   BIGINT NULL CHECK (ended_at >= 0),
    task       TEXT   NOT NULL, -- what is to be done, JSON
    outcome    TEXT   NULL      -- what came of it or why nothing did, JSON
);

CREATE UNIQUE INDEX jobs_live ON jobs (network) WHERE state IN ('waiting', 'running');
CREATE INDEX jobs_by_network ON jobs (network, id);
