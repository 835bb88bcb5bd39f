-- The version of the sums in each summary, so that those of an earlier program are known and can be
-- computed anew.
ALTER TABLE summary ADD COLUMN version INTEGER NOT NULL DEFAULT 1;
