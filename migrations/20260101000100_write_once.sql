-- The ledger is evidence: not even this service may change or remove a row, whatever bug it may have.

CREATE TRIGGER rig_profiles_refuse_update BEFORE UPDATE ON rig_profiles BEGIN SELECT RAISE(ABORT, 'rig_profiles is write-once'); END;
CREATE TRIGGER rig_profiles_refuse_delete BEFORE DELETE ON rig_profiles BEGIN SELECT RAISE(ABORT, 'rig_profiles is write-once'); END;

CREATE TRIGGER certifications_refuse_update BEFORE UPDATE ON certifications BEGIN SELECT RAISE(ABORT, 'certifications is write-once'); END;
CREATE TRIGGER certifications_refuse_delete BEFORE DELETE ON certifications BEGIN SELECT RAISE(ABORT, 'certifications is write-once'); END;

CREATE TRIGGER witnesses_refuse_update BEFORE UPDATE ON witnesses BEGIN SELECT RAISE(ABORT, 'witnesses is write-once'); END;
CREATE TRIGGER witnesses_refuse_delete BEFORE DELETE ON witnesses BEGIN SELECT RAISE(ABORT, 'witnesses is write-once'); END;

CREATE TRIGGER certification_witnesses_refuse_update BEFORE UPDATE ON certification_witnesses BEGIN SELECT RAISE(ABORT, 'certification_witnesses is write-once'); END;
CREATE TRIGGER certification_witnesses_refuse_delete BEFORE DELETE ON certification_witnesses BEGIN SELECT RAISE(ABORT, 'certification_witnesses is write-once'); END;

CREATE TRIGGER submissions_refuse_update BEFORE UPDATE ON submissions BEGIN SELECT RAISE(ABORT, 'submissions is write-once'); END;
CREATE TRIGGER submissions_refuse_delete BEFORE DELETE ON submissions BEGIN SELECT RAISE(ABORT, 'submissions is write-once'); END;

-- INSERT OR REPLACE removes the row in its way without firing a DELETE trigger. These refuse the insertion itself; the first
-- two also keep versions and entries without gaps.

CREATE TRIGGER rig_profiles_refuse_gap BEFORE INSERT ON rig_profiles
WHEN NEW.version <> (SELECT COALESCE(MAX(version), 0) + 1 FROM rig_profiles WHERE rig = NEW.rig)
BEGIN SELECT RAISE(ABORT, 'rig_profiles takes the next version only'); END;

CREATE TRIGGER certifications_refuse_gap BEFORE INSERT ON certifications
WHEN NEW.entry <> (SELECT COALESCE(MAX(entry), -1) + 1 FROM certifications)
    OR EXISTS (SELECT 1 FROM certifications WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'certifications takes the next entry only'); END;

CREATE TRIGGER witnesses_refuse_replacement BEFORE INSERT ON witnesses
WHEN EXISTS (SELECT 1 FROM witnesses WHERE digest = NEW.digest)
BEGIN SELECT RAISE(ABORT, 'witnesses is write-once'); END;

CREATE TRIGGER certification_witnesses_refuse_replacement BEFORE INSERT ON certification_witnesses
WHEN EXISTS (SELECT 1 FROM certification_witnesses WHERE entry = NEW.entry AND digest = NEW.digest)
BEGIN SELECT RAISE(ABORT, 'certification_witnesses is write-once'); END;

CREATE TRIGGER submissions_refuse_replacement BEFORE INSERT ON submissions
WHEN EXISTS (SELECT 1 FROM submissions WHERE (rig = NEW.rig AND idempotency_key = NEW.idempotency_key) OR entry = NEW.entry)
BEGIN SELECT RAISE(ABORT, 'submissions is write-once'); END;
