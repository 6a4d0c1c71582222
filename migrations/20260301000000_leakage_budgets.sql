-- Leakage budgets that profiles and batches refer to. A record must show, years later, what its leakage came from; so a budget that was
-- once handed in stays, under the digest of its own bytes, and cannot become another one.

-- Dense from 0, so that a missing row shows. `document` is the canonical text that the digest is of, byte for byte.
CREATE TABLE leakage_budgets (
    budget      INTEGER NOT NULL PRIMARY KEY CHECK (budget >= 0),
    digest      TEXT    NOT NULL UNIQUE CHECK (digest GLOB 'sha256:*' AND length(digest) = 71),
    recorded_at INTEGER NOT NULL, -- microseconds since 1970, UTC: compares as a number
    document    TEXT    NOT NULL CHECK (json_valid(document))
) STRICT;

CREATE TRIGGER leakage_budgets_refuse_update BEFORE UPDATE ON leakage_budgets BEGIN SELECT RAISE(ABORT, 'leakage_budgets is write-once'); END;
CREATE TRIGGER leakage_budgets_refuse_delete BEFORE DELETE ON leakage_budgets BEGIN SELECT RAISE(ABORT, 'leakage_budgets is write-once'); END;

-- INSERT OR REPLACE removes the row in its way without firing a DELETE trigger. This refuses the insertion itself.
CREATE TRIGGER leakage_budgets_refuse_gap BEFORE INSERT ON leakage_budgets
WHEN NEW.budget <> (SELECT COALESCE(MAX(budget), -1) + 1 FROM leakage_budgets)
    OR EXISTS (SELECT 1 FROM leakage_budgets WHERE digest = NEW.digest)
BEGIN SELECT RAISE(ABORT, 'leakage_budgets takes the next budget only'); END;
