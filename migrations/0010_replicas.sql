-- Several processes on one database: who is at a job, until when it is his, and how far it has come.
ALTER TABLE jobs ADD COLUMN claimed_by TEXT NULL; -- the process
ALTER TABLE jobs ADD COLUMN claimed_until BIGINT NULL CHECK (claimed_until >= 0); -- microseconds since 1970-01-01 UTC
ALTER TABLE jobs ADD COLUMN progress DOUBLE PRECISION NULL CHECK (progress BETWEEN 0 AND 1);

-- Link lists that wait for their job, where there is no file beside the database.
CREATE TABLE spooled_parts (
    upload     TEXT   NOT NULL CHECK (length(upload) = 36), -- its job, once it was received in full
    part       BIGINT NOT NULL CHECK (part >= 0),
    created_at BIGINT NOT NULL CHECK (created_at >= 0),
    bytes      BYTEA  NOT NULL,
    PRIMARY KEY (upload, part)
);
