-- The curator's decisions: the ledger, holds, and pins.

CREATE TABLE decisions (
    decision_id BIGINT,
    record_id VARCHAR,
    kept_record_id VARCHAR,
    grade VARCHAR,
    rule VARCHAR,
    reason VARCHAR,
    witness_shift_angstrom DOUBLE,
    witness_strain DOUBLE,
    run_id BIGINT,
    made_at TIMESTAMP,
    made_by VARCHAR,
    note VARCHAR,
    undone_by_run BIGINT,
    ending VARCHAR,
    released_by_run BIGINT
);
COMMENT ON TABLE decisions IS 'The ledger, one row a decision to set a record aside in favour of another. Rows are only ever added; an ended one says which run ended it and why.';
COMMENT ON COLUMN decisions.decision_id IS '1, 2, 3 ...';
COMMENT ON COLUMN decisions.record_id IS 'The record that is set aside.';
COMMENT ON COLUMN decisions.kept_record_id IS 'The record that is kept in its place.';
COMMENT ON COLUMN decisions.grade IS 'The grade at which the two are one crystal.';
COMMENT ON COLUMN decisions.rule IS 'The first keep rule that tells the two apart.';
COMMENT ON COLUMN decisions.reason IS 'Why the two match, as in `matches`; copy for equal content.';
COMMENT ON COLUMN decisions.witness_shift_angstrom IS 'Largest shift of their match, angstrom; 0 for equal keys.';
COMMENT ON COLUMN decisions.witness_strain IS 'Strain of their match; 0 for equal keys.';
COMMENT ON COLUMN decisions.run_id IS 'Run that decided it.';
COMMENT ON COLUMN decisions.made_at IS 'When, UTC.';
COMMENT ON COLUMN decisions.made_by IS 'Who (the login name).';
COMMENT ON COLUMN decisions.note IS 'The curator''s words.';
COMMENT ON COLUMN decisions.undone_by_run IS 'Run that ended it; NULL while it is in force.';
COMMENT ON COLUMN decisions.ending IS 'undone (by a curator: the record is held), superseded (by a newer decision), lapsed (the two are no longer there, or no longer one), or NULL while it is in force.';
COMMENT ON COLUMN decisions.released_by_run IS 'Of an undone decision: run that lets `keep` decide again; NULL while held.';

CREATE TABLE holds (
    grade VARCHAR,
    group_id VARCHAR,
    record_id VARCHAR,
    reason VARCHAR,
    message VARCHAR
);
COMMENT ON TABLE holds IS 'One row a group or record that `keep` leaves alone, and why; made anew by every run.';
COMMENT ON COLUMN holds.grade IS 'The grade.';
COMMENT ON COLUMN holds.group_id IS 'The group that is held; NULL where one record is.';
COMMENT ON COLUMN holds.record_id IS 'The record that is held; NULL where a group is.';
COMMENT ON COLUMN holds.reason IS 'energy_conflict, pin_conflict or undone.';
COMMENT ON COLUMN holds.message IS 'Why, for a person.';

CREATE TABLE pins (
    pin_id BIGINT,
    kind VARCHAR,
    record_id VARCHAR,
    other_record_id VARCHAR,
    reason VARCHAR,
    run_id BIGINT,
    made_at TIMESTAMP,
    made_by VARCHAR,
    removed_by_run BIGINT
);
COMMENT ON TABLE pins IS 'One row a curator''s pin: a record to be kept, or two records that are, or are not, one crystal.';
COMMENT ON COLUMN pins.pin_id IS '1, 2, 3 ...';
COMMENT ON COLUMN pins.kind IS 'keep, apart or together.';
COMMENT ON COLUMN pins.record_id IS 'The record.';
COMMENT ON COLUMN pins.other_record_id IS 'The other record; NULL for keep.';
COMMENT ON COLUMN pins.reason IS 'Why, in the curator''s words.';
COMMENT ON COLUMN pins.run_id IS 'Run that set it.';
COMMENT ON COLUMN pins.made_at IS 'When, UTC.';
COMMENT ON COLUMN pins.made_by IS 'Who (the login name).';
COMMENT ON COLUMN pins.removed_by_run IS 'Run that removed it; NULL while it holds.';

CREATE TABLE refused_pins (
    pin_id BIGINT,
    composition VARCHAR
);
COMMENT ON TABLE refused_pins IS 'One row a pin `together` without a match in the window between its records: it takes no part in grouping.';
COMMENT ON COLUMN refused_pins.pin_id IS 'The pin.';
COMMENT ON COLUMN refused_pins.composition IS 'Composition of the two records.';

CREATE VIEW decisions_in_force AS
SELECT *
FROM decisions
WHERE undone_by_run IS NULL;
COMMENT ON VIEW decisions_in_force IS 'Decisions that nothing has ended.';

CREATE VIEW pins_in_force AS
SELECT *
FROM pins
WHERE removed_by_run IS NULL;
COMMENT ON VIEW pins_in_force IS 'Pins that nobody has removed.';
