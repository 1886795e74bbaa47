-- Verified matches, what was grouped, and findings.

CREATE TABLE matches (
    record_a VARCHAR,
    record_b VARCHAR,
    crystal_key_a VARCHAR,
    crystal_key_b VARCHAR,
    composition VARCHAR,
    grade VARCHAR,
    largest_shift_angstrom DOUBLE,
    rms_shift_angstrom DOUBLE,
    strain DOUBLE,
    shape_strain DOUBLE,
    volume_ratio DOUBLE,
    larger_record_id VARCHAR,
    mirrored BOOLEAN,
    improper BOOLEAN,
    proper_shift_angstrom DOUBLE,
    proper_strain DOUBLE,
    reason VARCHAR,
    p_matrix INTEGER[9],
    q_matrix INTEGER[9],
    orthogonal DOUBLE[9],
    shift_fractional DOUBLE[3],
    pairing INTEGER[]
);
COMMENT ON TABLE matches IS 'One row a verified match between two keys, each standing by its record with the smallest id (record_a < record_b): a minimum spanning forest of each family, every set-aside record with its kept one, and each record''s closest matches.';
COMMENT ON COLUMN matches.record_a IS 'The record that stands for the first key.';
COMMENT ON COLUMN matches.record_b IS 'The record that stands for the second key.';
COMMENT ON COLUMN matches.crystal_key_a IS 'The first key.';
COMMENT ON COLUMN matches.crystal_key_b IS 'The second key.';
COMMENT ON COLUMN matches.composition IS 'Reduced composition of both.';
COMMENT ON COLUMN matches.grade IS 'Strictest grade that the match reaches: same, near, or window (just outside near).';
COMMENT ON COLUMN matches.largest_shift_angstrom IS 'Largest distance of paired sites, mean shift removed, angstrom.';
COMMENT ON COLUMN matches.rms_shift_angstrom IS 'Root mean square of the distances of paired sites, angstrom.';
COMMENT ON COLUMN matches.strain IS 'Largest |ln| of the three principal stretches between the matched cells.';
COMMENT ON COLUMN matches.shape_strain IS 'The same after the mean of the three logarithms is taken off.';
COMMENT ON COLUMN matches.volume_ratio IS 'Volume per site, the larger over the smaller.';
COMMENT ON COLUMN matches.larger_record_id IS 'Which of the two has the larger volume per site; NULL where they are equal.';
COMMENT ON COLUMN matches.mirrored IS 'Only the mirror image of the one matches the other.';
COMMENT ON COLUMN matches.improper IS 'The recorded match turns the one into the mirror image of the other.';
COMMENT ON COLUMN matches.proper_shift_angstrom IS 'Largest shift of the best match without mirror image; NULL if none.';
COMMENT ON COLUMN matches.proper_strain IS 'Strain of the best match without mirror image; NULL if none.';
COMMENT ON COLUMN matches.reason IS 'Why the two match: rerun, other_cell, supercell, mirror.';
COMMENT ON COLUMN matches.p_matrix IS 'P: P . reduced cell of a is a''s basis of the common cell.';
COMMENT ON COLUMN matches.q_matrix IS 'Q: Q . reduced cell of b is b''s basis of the common cell.';
COMMENT ON COLUMN matches.orthogonal IS 'Orthogonal part O: row vectors of a times O stand in the frame of b.';
COMMENT ON COLUMN matches.shift_fractional IS 'Origin shift in fractions of the common cell.';
COMMENT ON COLUMN matches.pairing IS 'For each site of P . a the site of Q . b, from 0.';

CREATE TABLE more_matches (
    record_id VARCHAR
);
COMMENT ON TABLE more_matches IS 'One row a record that has, or may have, more matches in the window than `matches` holds.';
COMMENT ON COLUMN more_matches.record_id IS 'The record.';

CREATE TABLE grouped_compositions (
    composition VARCHAR,
    digest VARCHAR,
    run_id BIGINT,
    records BIGINT,
    keys BIGINT,
    candidates BIGINT,
    verified BIGINT,
    most_candidates BIGINT,
    close_pairs BIGINT
);
COMMENT ON TABLE grouped_compositions IS 'One row a composition that was grouped, with the digest of what it was grouped from.';
COMMENT ON COLUMN grouped_compositions.composition IS 'Reduced composition over species tokens.';
COMMENT ON COLUMN grouped_compositions.digest IS 'SHA-256 of its records, keys and ranks: equal means nothing is to be done.';
COMMENT ON COLUMN grouped_compositions.run_id IS 'Run that grouped it.';
COMMENT ON COLUMN grouped_compositions.records IS 'Records.';
COMMENT ON COLUMN grouped_compositions.keys IS 'Distinct keys.';
COMMENT ON COLUMN grouped_compositions.candidates IS 'Of the pairs looked at then, those that the filters could not rule out.';
COMMENT ON COLUMN grouped_compositions.verified IS 'Pairs of keys that were compared site by site when it was last worked on.';
COMMENT ON COLUMN grouped_compositions.most_candidates IS 'Most candidates that one key has, or a bound on it; NULL where it is small.';
COMMENT ON COLUMN grouped_compositions.close_pairs IS 'Pairs of keys that mean distances alone leave, or a bound; NULL where it is small.';

CREATE TABLE findings (
    code VARCHAR,
    record_id VARCHAR,
    other_record_id VARCHAR,
    grade VARCHAR,
    group_id VARCHAR,
    value DOUBLE,
    message VARCHAR
);
COMMENT ON TABLE findings IS 'One row something that a curator must see; made anew by every run.';
COMMENT ON COLUMN findings.code IS 'Stable code of the finding.';
COMMENT ON COLUMN findings.record_id IS 'The record it is about.';
COMMENT ON COLUMN findings.other_record_id IS 'The other record, where it is about two.';
COMMENT ON COLUMN findings.grade IS 'The grade, where it is about a group or family.';
COMMENT ON COLUMN findings.group_id IS 'The group or family, where it is about one.';
COMMENT ON COLUMN findings.value IS 'The number that makes it one, in the unit that the message names.';
COMMENT ON COLUMN findings.message IS 'What was found, for a person.';

CREATE TABLE outdated_members (
    grade VARCHAR,
    group_id VARCHAR,
    family_id VARCHAR,
    record_id VARCHAR
);
COMMENT ON TABLE outdated_members IS 'Rows of `members` of compositions that changed since they were grouped, kept until `group` has new ones.';
COMMENT ON COLUMN outdated_members.grade IS 'same or near.';
COMMENT ON COLUMN outdated_members.group_id IS 'Group id before the change.';
COMMENT ON COLUMN outdated_members.family_id IS 'Family id before the change.';
COMMENT ON COLUMN outdated_members.record_id IS 'The record.';

CREATE TABLE outdated_compositions (
    composition VARCHAR,
    run_id BIGINT,
    records BIGINT,
    most_candidates BIGINT,
    close_pairs BIGINT
);
COMMENT ON TABLE outdated_compositions IS 'Compositions that changed since they were grouped and whose list of matches was complete.';
COMMENT ON COLUMN outdated_compositions.composition IS 'Reduced composition over species tokens.';
COMMENT ON COLUMN outdated_compositions.run_id IS 'Run that grouped it.';
COMMENT ON COLUMN outdated_compositions.records IS 'Records that it had then.';
COMMENT ON COLUMN outdated_compositions.most_candidates IS 'Most candidates that one key has, or a bound on it; NULL where it is small.';
COMMENT ON COLUMN outdated_compositions.close_pairs IS 'Pairs of keys that mean distances alone leave, or a bound; NULL where it is small.';

CREATE TABLE outdated_matches (
    record_a VARCHAR,
    record_b VARCHAR,
    crystal_key_a VARCHAR,
    crystal_key_b VARCHAR,
    composition VARCHAR,
    grade VARCHAR,
    largest_shift_angstrom DOUBLE,
    rms_shift_angstrom DOUBLE,
    strain DOUBLE,
    shape_strain DOUBLE,
    volume_ratio DOUBLE,
    larger_record_id VARCHAR,
    mirrored BOOLEAN,
    improper BOOLEAN,
    proper_shift_angstrom DOUBLE,
    proper_strain DOUBLE,
    reason VARCHAR,
    p_matrix INTEGER[9],
    q_matrix INTEGER[9],
    orthogonal DOUBLE[9],
    shift_fractional DOUBLE[3],
    pairing INTEGER[]
);
COMMENT ON TABLE outdated_matches IS 'Rows of `matches` of the compositions in outdated_compositions, kept until `group` has compared what was added.';
COMMENT ON COLUMN outdated_matches.record_a IS 'The record that stands for the first key.';
COMMENT ON COLUMN outdated_matches.record_b IS 'The record that stands for the second key.';
COMMENT ON COLUMN outdated_matches.crystal_key_a IS 'The first key.';
COMMENT ON COLUMN outdated_matches.crystal_key_b IS 'The second key.';
COMMENT ON COLUMN outdated_matches.composition IS 'Reduced composition of both.';
COMMENT ON COLUMN outdated_matches.grade IS 'Strictest grade that the match reaches: same, near, or window (just outside near).';
COMMENT ON COLUMN outdated_matches.largest_shift_angstrom IS 'Largest distance of paired sites, mean shift removed, angstrom.';
COMMENT ON COLUMN outdated_matches.rms_shift_angstrom IS 'Root mean square of the distances of paired sites, angstrom.';
COMMENT ON COLUMN outdated_matches.strain IS 'Largest |ln| of the three principal stretches between the matched cells.';
COMMENT ON COLUMN outdated_matches.shape_strain IS 'The same after the mean of the three logarithms is taken off.';
COMMENT ON COLUMN outdated_matches.volume_ratio IS 'Volume per site, the larger over the smaller.';
COMMENT ON COLUMN outdated_matches.larger_record_id IS 'Which of the two has the larger volume per site; NULL where they are equal.';
COMMENT ON COLUMN outdated_matches.mirrored IS 'Only the mirror image of the one matches the other.';
COMMENT ON COLUMN outdated_matches.improper IS 'The recorded match turns the one into the mirror image of the other.';
COMMENT ON COLUMN outdated_matches.proper_shift_angstrom IS 'Largest shift of the best match without mirror image; NULL if none.';
COMMENT ON COLUMN outdated_matches.proper_strain IS 'Strain of the best match without mirror image; NULL if none.';
COMMENT ON COLUMN outdated_matches.reason IS 'Why the two match: rerun, other_cell, supercell, mirror.';
COMMENT ON COLUMN outdated_matches.p_matrix IS 'P: P . reduced cell of a is a''s basis of the common cell.';
COMMENT ON COLUMN outdated_matches.q_matrix IS 'Q: Q . reduced cell of b is b''s basis of the common cell.';
COMMENT ON COLUMN outdated_matches.orthogonal IS 'Orthogonal part O: row vectors of a times O stand in the frame of b.';
COMMENT ON COLUMN outdated_matches.shift_fractional IS 'Origin shift in fractions of the common cell.';
COMMENT ON COLUMN outdated_matches.pairing IS 'For each site of P . a the site of Q . b, from 0.';

-- Why two records of one key are the same, from how they were given: equal content, another number of primitive cells,
-- an equal given cell (vectors to 1e-3 angstrom), or else another description.
CREATE MACRO equal_key_reason(content_a, content_b, cells_a, cells_b, vectors_a, vectors_b) AS
    CASE
        WHEN content_a = content_b THEN 'copy'
        WHEN cells_a <> cells_b THEN 'supercell'
        WHEN list_max(list_transform(range(1, 10), lambda i: abs(vectors_a[i] - vectors_b[i]))) < 1e-3 THEN 'rerun'
        ELSE 'other_cell'
    END;

CREATE VIEW record_matches AS
SELECT
    least(a.record_id, b.record_id) AS record_a,
    greatest(a.record_id, b.record_id) AS record_b,
    m.grade,
    m.largest_shift_angstrom,
    m.rms_shift_angstrom,
    m.strain,
    m.shape_strain,
    m.volume_ratio,
    m.mirrored,
    m.reason
FROM matches m
JOIN canonical_forms a ON a.crystal_key = m.crystal_key_a
JOIN canonical_forms b ON b.crystal_key = m.crystal_key_b
UNION ALL
SELECT a.record_id, b.record_id, 'key', 0.0, 0.0, 0.0, 0.0, 1.0, false,
    equal_key_reason(r.content_hash, s.content_hash, a.supercell_index, b.supercell_index, v.cell_angstrom, w.cell_angstrom)
FROM canonical_forms a
JOIN canonical_forms b ON a.crystal_key = b.crystal_key AND a.record_id < b.record_id
JOIN records r ON r.record_id = a.record_id
JOIN records s ON s.record_id = b.record_id
JOIN structures v ON v.record_id = a.record_id
JOIN structures w ON w.record_id = b.record_id;
COMMENT ON VIEW record_matches IS 'Every verified match written out for all records of the two keys, and the pairs of one key.';

CREATE VIEW repeats AS
SELECT
    m.grade,
    m.record_id,
    m.group_id AS kept_record_id,
    m.witness_shift_angstrom,
    m.witness_strain,
    CASE
        WHEN x.crystal_key = y.crystal_key
        THEN equal_key_reason(r.content_hash, k.content_hash, x.supercell_index, y.supercell_index, s.cell_angstrom, t.cell_angstrom)
        ELSE w.reason
    END AS reason
FROM members m
JOIN records r USING (record_id)
JOIN records k ON k.record_id = m.group_id
JOIN canonical_forms x ON x.record_id = m.record_id
JOIN canonical_forms y ON y.record_id = m.group_id
JOIN structures s ON s.record_id = m.record_id
JOIN structures t ON t.record_id = m.group_id
LEFT JOIN matches w
    ON least(w.crystal_key_a, w.crystal_key_b) = least(x.crystal_key, y.crystal_key)
    AND greatest(w.crystal_key_a, w.crystal_key_b) = greatest(x.crystal_key, y.crystal_key)
WHERE NOT m.kept;
COMMENT ON VIEW repeats IS 'One row a record and grade that is not the kept one of its group: the kept record, how far off it is, and why the two are the same.';
