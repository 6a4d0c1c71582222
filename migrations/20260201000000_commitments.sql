-- Commitments for rounds with memory. What a block is certified by must have been fixed before its first round; the ledger is
-- what says when that was. A commitment is therefore never changed: a newer one stands in its place for later batches.

-- Dense from 0, so that a missing row shows. `document` is the canonical text that the digest is of, byte for byte.
CREATE TABLE commitments (
    commitment      INTEGER NOT NULL PRIMARY KEY CHECK (commitment >= 0),
    id              TEXT    NOT NULL UNIQUE,
    rig             TEXT    NOT NULL,
    profile_version INTEGER NOT NULL,
    recorded_at     INTEGER NOT NULL, -- microseconds since 1970, UTC: compares as a number
    level           TEXT    NOT NULL,
    digest          TEXT    NOT NULL CHECK (digest GLOB 'sha256:*' AND length(digest) = 71),
    document        TEXT    NOT NULL CHECK (json_valid(document)),
    FOREIGN KEY (rig, profile_version) REFERENCES rig_profiles (rig, version)
) STRICT;

-- The newest of a rig is looked up for every batch.
CREATE INDEX commitments_by_rig ON commitments (rig, commitment, profile_version);

CREATE TABLE commitment_witnesses (
    commitment INTEGER NOT NULL REFERENCES commitments (commitment),
    digest     TEXT    NOT NULL REFERENCES witnesses (digest),
    PRIMARY KEY (commitment, digest)
) STRICT, WITHOUT ROWID;

-- Which commitment a certification rests on. Its witnesses are those of the commitment, and are not listed a second time.
CREATE TABLE certification_commitments (
    entry      INTEGER NOT NULL PRIMARY KEY REFERENCES certifications (entry),
    commitment INTEGER NOT NULL REFERENCES commitments (commitment)
) STRICT;

-- All of it is evidence, as the rest of the ledger is: written once.

CREATE TRIGGER commitments_refuse_update BEFORE UPDATE ON commitments BEGIN SELECT RAISE(ABORT, 'commitments is write-once'); END;
CREATE TRIGGER commitments_refuse_delete BEFORE DELETE ON commitments BEGIN SELECT RAISE(ABORT, 'commitments is write-once'); END;

CREATE TRIGGER commitment_witnesses_refuse_update BEFORE UPDATE ON commitment_witnesses BEGIN SELECT RAISE(ABORT, 'commitment_witnesses is write-once'); END;
CREATE TRIGGER commitment_witnesses_refuse_delete BEFORE DELETE ON commitment_witnesses BEGIN SELECT RAISE(ABORT, 'commitment_witnesses is write-once'); END;

CREATE TRIGGER certification_commitments_refuse_update BEFORE UPDATE ON certification_commitments BEGIN SELECT RAISE(ABORT, 'certification_commitments is write-once'); END;
CREATE TRIGGER certification_commitments_refuse_delete BEFORE DELETE ON certification_commitments BEGIN SELECT RAISE(ABORT, 'certification_commitments is write-once'); END;

-- INSERT OR REPLACE removes the row in its way without firing a DELETE trigger. These refuse the insertion itself.

CREATE TRIGGER commitments_refuse_gap BEFORE INSERT ON commitments
WHEN NEW.commitment <> (SELECT COALESCE(MAX(commitment), -1) + 1 FROM commitments)
    OR EXISTS (SELECT 1 FROM commitments WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'commitments takes the next commitment only'); END;

CREATE TRIGGER commitment_witnesses_refuse_replacement BEFORE INSERT ON commitment_witnesses
WHEN EXISTS (SELECT 1 FROM commitment_witnesses WHERE commitment = NEW.commitment AND digest = NEW.digest)
BEGIN SELECT RAISE(ABORT, 'commitment_witnesses is write-once'); END;

CREATE TRIGGER certification_commitments_refuse_replacement BEFORE INSERT ON certification_commitments
WHEN EXISTS (SELECT 1 FROM certification_commitments WHERE entry = NEW.entry)
BEGIN SELECT RAISE(ABORT, 'certification_commitments is write-once'); END;

-- A commitment is for one rig under one profile; a certification cannot borrow another's.
CREATE TRIGGER certification_commitments_refuse_another BEFORE INSERT ON certification_commitments
WHEN NOT EXISTS (
    SELECT 1 FROM certifications c JOIN commitments m ON m.rig = c.rig AND m.profile_version = c.profile_version
    WHERE c.entry = NEW.entry AND m.commitment = NEW.commitment
)
BEGIN SELECT RAISE(ABORT, 'certification_commitments takes commitments of the same rig and profile only'); END;
