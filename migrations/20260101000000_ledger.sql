-- The ledger: what was declared, what was posted and what was certified. Everything here is written once.

-- A rig's declaration changes over time, and a certification must keep the one it was made under. A change is therefore a
-- new version beside the old ones, never an update.
CREATE TABLE rig_profiles (
    rig         TEXT    NOT NULL,
    version     INTEGER NOT NULL CHECK (version >= 1),
    recorded_at INTEGER NOT NULL, -- microseconds since 1970, UTC: compares as a number
    profile     TEXT    NOT NULL CHECK (json_valid(profile)),
    PRIMARY KEY (rig, version)
) STRICT;

-- One row per certification, refused ones too. `entry` is dense from 0, so that a missing row shows. The columns are what the
-- history filters and adds up; the record is the text exactly as it was answered, so that it can be answered again byte for
-- byte.
CREATE TABLE certifications (
    entry           INTEGER NOT NULL PRIMARY KEY CHECK (entry >= 0),
    id              TEXT    NOT NULL UNIQUE,
    rig             TEXT    NOT NULL,
    profile_version INTEGER NOT NULL,
    verdict         TEXT    NOT NULL CHECK (verdict IN ('certified', 'estimate', 'refused')),
    reason          TEXT    CHECK ((reason IS NOT NULL) = (verdict = 'refused')),
    recorded_at     INTEGER NOT NULL,
    certified_bits  INTEGER NOT NULL CHECK (certified_bits >= 0 AND (verdict = 'certified' OR certified_bits = 0)),
    rounds          INTEGER NOT NULL CHECK (rounds >= 0),
    failure         REAL    CHECK (failure BETWEEN 0 AND 2),
    record          TEXT    NOT NULL CHECK (json_valid(record)),
    FOREIGN KEY (rig, profile_version) REFERENCES rig_profiles (rig, version)
) STRICT;

-- Both cover what the history filters by and what the yield adds up, so that neither has to read past the records themselves.
CREATE INDEX certifications_by_rig ON certifications (rig, entry, recorded_at, verdict, certified_bits, rounds, failure);
CREATE INDEX certifications_by_time ON certifications (entry, recorded_at, verdict, rig);

-- Witnesses are addressed by content: many certifications rest on the same one, and it is kept once.
CREATE TABLE witnesses (
    digest   TEXT NOT NULL PRIMARY KEY CHECK (digest GLOB 'sha256:*' AND length(digest) = 71),
    document TEXT NOT NULL CHECK (json_valid(document))
) STRICT;

CREATE TABLE certification_witnesses (
    entry  INTEGER NOT NULL REFERENCES certifications (entry),
    digest TEXT    NOT NULL REFERENCES witnesses (digest),
    PRIMARY KEY (entry, digest)
) STRICT, WITHOUT ROWID;

-- Which batch an idempotency key stands for. A rig that did not hear the answer sends the batch again and is told the same.
-- `refusal` is the document that was answered where that was not the record itself.
CREATE TABLE submissions (
    rig             TEXT    NOT NULL,
    idempotency_key TEXT    NOT NULL,
    body_digest     TEXT    NOT NULL,
    entry           INTEGER NOT NULL UNIQUE REFERENCES certifications (entry),
    refusal         TEXT    CHECK (refusal IS NULL OR json_valid(refusal)),
    PRIMARY KEY (rig, idempotency_key)
) STRICT;
