-- Which witnesses are kept for use with later batches, and what each was made for. This is no evidence: rows come and go as witnesses prove
-- useful or not. What a certification rested on stays in `witnesses`, whatever happens here.
CREATE TABLE kept_witnesses (
    digest   TEXT NOT NULL PRIMARY KEY REFERENCES witnesses (digest),
    made_for TEXT NOT NULL CHECK (json_valid(made_for))
) STRICT;
