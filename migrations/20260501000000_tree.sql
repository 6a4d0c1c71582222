-- A Merkle tree (RFC 6962, RFC 9162) over everything in the ledger. Its root is signed and lodged elsewhere; from then on no row can be
-- changed, removed or slipped in between without anyone noticing who asks, not even by whoever owns this file.

-- Dense from 0. `entry` is the leaf byte for byte: a line of JSON that names the row and holds digests of its texts. A row is logged once:
-- `kind` and `subject` say which. `nodes` holds, 32 bytes each, the leaf's hash and then those of the complete subtrees that end with it,
-- smallest first. Every complete subtree stands in exactly one row, so any root and any proof takes a few rows, and so does appending.
CREATE TABLE tree_leaves (
    leaf    INTEGER NOT NULL PRIMARY KEY CHECK (leaf >= 0),
    kind    TEXT    NOT NULL CHECK (kind <> ''),
    subject TEXT    NOT NULL CHECK (subject <> ''),
    entry   TEXT    NOT NULL CHECK (json_valid(entry)),
    nodes   BLOB    NOT NULL CHECK (length(nodes) > 0 AND length(nodes) % 32 = 0),
    UNIQUE (kind, subject)
) STRICT;

CREATE TRIGGER tree_leaves_refuse_update BEFORE UPDATE ON tree_leaves BEGIN SELECT RAISE(ABORT, 'tree_leaves is write-once'); END;
CREATE TRIGGER tree_leaves_refuse_delete BEFORE DELETE ON tree_leaves BEGIN SELECT RAISE(ABORT, 'tree_leaves is write-once'); END;

-- INSERT OR REPLACE removes the row in its way without firing a DELETE trigger. This refuses the insertion itself.
CREATE TRIGGER tree_leaves_refuse_gap BEFORE INSERT ON tree_leaves
WHEN NEW.leaf <> (SELECT COALESCE(MAX(leaf), -1) + 1 FROM tree_leaves)
    OR EXISTS (SELECT 1 FROM tree_leaves WHERE kind = NEW.kind AND subject = NEW.subject)
BEGIN SELECT RAISE(ABORT, 'tree_leaves takes the next leaf only, and each subject once'); END;
