-- Who may do what, and since when. A token's life is told by its changes, which are written once like everything else here: so the
-- table is the audit of itself, and a token that was revoked stays known. Only a SHA-256 digest of a token is kept: whoever reads this
-- file can use none of them.

-- Dense from 0, so that a missing row shows. `document` says all of the change; the other columns are what the rules below need.
CREATE TABLE token_changes (
    change      INTEGER NOT NULL PRIMARY KEY CHECK (change >= 0),
    token       TEXT    NOT NULL,
    kind        TEXT    NOT NULL CHECK (kind IN ('created', 'revoked')),
    recorded_at INTEGER NOT NULL, -- microseconds since 1970, UTC: compares as a number
    document    TEXT    NOT NULL CHECK (json_valid(document)),
    UNIQUE (token, kind)
) STRICT;

CREATE TRIGGER token_changes_refuse_update BEFORE UPDATE ON token_changes BEGIN SELECT RAISE(ABORT, 'token_changes is write-once'); END;
CREATE TRIGGER token_changes_refuse_delete BEFORE DELETE ON token_changes BEGIN SELECT RAISE(ABORT, 'token_changes is write-once'); END;

-- INSERT OR REPLACE removes the row in its way without firing a DELETE trigger. This refuses the insertion itself.
CREATE TRIGGER token_changes_refuse_gap BEFORE INSERT ON token_changes
WHEN NEW.change <> (SELECT COALESCE(MAX(change), -1) + 1 FROM token_changes)
    OR EXISTS (SELECT 1 FROM token_changes WHERE token = NEW.token AND kind = NEW.kind)
BEGIN SELECT RAISE(ABORT, 'token_changes takes the next change only, and each kind once a token'); END;

CREATE TRIGGER token_changes_refuse_unknown BEFORE INSERT ON token_changes
WHEN NEW.kind = 'revoked' AND NOT EXISTS (SELECT 1 FROM token_changes WHERE token = NEW.token AND kind = 'created')
BEGIN SELECT RAISE(ABORT, 'token_changes revokes what was created only'); END;
