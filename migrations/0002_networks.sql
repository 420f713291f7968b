-- Tracked networks and what is known of them. Dates are RFC 3339 in UTC with nine decimals, so that they sort as time
-- does. Totals are decimal text: the largest do not fit a BIGINT. Large columns stand last.
CREATE TABLE networks (
    name          TEXT   NOT NULL PRIMARY KEY CHECK (length(name) BETWEEN 1 AND 100),
    degree_kind   TEXT   NOT NULL CHECK (degree_kind IN ('received', 'total')),
    description   TEXT   NULL CHECK (length(description) <= 2000),
    tag           TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of the settings, their strong validator
    created_at    BIGINT NOT NULL CHECK (created_at >= 0), -- microseconds since 1970-01-01 UTC
    updated_at    BIGINT NOT NULL CHECK (updated_at >= 0),
    entry_degrees TEXT   NULL -- [[degree, share], …]
);

CREATE TABLE snapshots (
    network        TEXT   NOT NULL REFERENCES networks (name) ON DELETE CASCADE,
    as_of          TEXT   NOT NULL CHECK (length(as_of) = 30),
    nodes          TEXT   NOT NULL,
    link_ends      TEXT   NOT NULL,
    largest_degree BIGINT NOT NULL CHECK (largest_degree >= 0),
    row_count      BIGINT NOT NULL CHECK (row_count > 0),
    tag            TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of degree_counts
    updated_at     BIGINT NOT NULL CHECK (updated_at >= 0),
    degree_counts  TEXT   NOT NULL, -- [[degree, nodes], …], degrees ascending
    PRIMARY KEY (network, as_of)
);

CREATE TABLE transitions (
    network    TEXT   NOT NULL REFERENCES networks (name) ON DELETE CASCADE,
    starts_at  TEXT   NOT NULL CHECK (length(starts_at) = 30),
    ends_at    TEXT   NOT NULL CHECK (length(ends_at) = 30 AND ends_at > starts_at),
    stayed     TEXT   NOT NULL,
    arrived    TEXT   NOT NULL,
    departed   TEXT   NOT NULL,
    row_count  BIGINT NOT NULL CHECK (row_count > 0),
    tag        TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of counts
    before_tag TEXT   NOT NULL CHECK (length(before_tag) = 64), -- as snapshots.tag of the degree counts at the start
    after_tag  TEXT   NULL CHECK (length(after_tag) = 64), -- at the end; null when every node departed
    updated_at BIGINT NOT NULL CHECK (updated_at >= 0),
    counts     TEXT   NOT NULL, -- [[before | null, after | null, nodes], …], ascending
    PRIMARY KEY (network, starts_at)
);

CREATE TABLE link_events (
    network    TEXT   NOT NULL PRIMARY KEY REFERENCES networks (name) ON DELETE CASCADE,
    landings   TEXT   NOT NULL,
    row_count  BIGINT NOT NULL CHECK (row_count > 0),
    tag        TEXT   NOT NULL CHECK (length(tag) = 64), -- SHA-256 of statistics
    updated_at BIGINT NOT NULL CHECK (updated_at >= 0),
    statistics TEXT   NOT NULL -- {"ratios": […], "windows": […]}
);
