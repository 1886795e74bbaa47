-- The store: sources, files, records, canonical crystals, refusals and exact groups.
-- No primary keys on wide tables (slow upserts); uniqueness is a check that must return no row.

CREATE TABLE store_facts (
    name VARCHAR,
    value VARCHAR
);
COMMENT ON TABLE store_facts IS 'Facts about the store itself.';
COMMENT ON COLUMN store_facts.name IS 'store_id (made once), publication (counts up with every publication), recomputing (plan of an unfinished one).';
COMMENT ON COLUMN store_facts.value IS 'The value as text.';

CREATE TABLE stage_settings (
    stage VARCHAR,
    name VARCHAR,
    value JSON
);
COMMENT ON TABLE stage_settings IS 'The settings that the stored rows of each stage were computed with; rows of two settings are never mixed.';
COMMENT ON COLUMN stage_settings.stage IS 'parse, canonical, fingerprint, verify or keep.';
COMMENT ON COLUMN stage_settings.name IS 'Name of the setting.';
COMMENT ON COLUMN stage_settings.value IS 'Its value.';

CREATE TABLE runs (
    run_id BIGINT,
    command VARCHAR,
    arguments JSON,
    plan_hash VARCHAR,
    status VARCHAR,
    started_at TIMESTAMP,
    ended_at TIMESTAMP,
    version VARCHAR,
    settings JSON,
    counts JSON
);
COMMENT ON TABLE runs IS 'One row a run of a command that writes.';
COMMENT ON COLUMN runs.run_id IS '1, 2, 3 ...';
COMMENT ON COLUMN runs.command IS 'The command.';
COMMENT ON COLUMN runs.arguments IS 'What it was asked to do.';
COMMENT ON COLUMN runs.plan_hash IS 'SHA-256 of arguments and inputs: an interrupted run with the same hash is resumed.';
COMMENT ON COLUMN runs.status IS 'running, done, or interrupted (another run began before it was resumed).';
COMMENT ON COLUMN runs.started_at IS 'When it first began, UTC.';
COMMENT ON COLUMN runs.ended_at IS 'When it ended, UTC.';
COMMENT ON COLUMN runs.version IS 'Version of lattice-census.';
COMMENT ON COLUMN runs.settings IS 'All settings in force.';
COMMENT ON COLUMN runs.counts IS 'What the run did, in numbers.';

CREATE TABLE sources (
    source VARCHAR,
    root VARCHAR,
    kind VARCHAR,
    settings JSON,
    first_run BIGINT,
    last_run BIGINT
);
COMMENT ON TABLE sources IS 'One row a source: a file or folder that records come from.';
COMMENT ON COLUMN sources.source IS 'Name: the file''s or folder''s own, or the one given with --source.';
COMMENT ON COLUMN sources.root IS 'Absolute path it was last read from.';
COMMENT ON COLUMN sources.kind IS 'file or folder.';
COMMENT ON COLUMN sources.settings IS 'Which columns hold energies, theory, split, date, id and structure.';
COMMENT ON COLUMN sources.first_run IS 'Run that first read it.';
COMMENT ON COLUMN sources.last_run IS 'Run that last read it.';

CREATE TABLE files (
    source VARCHAR,
    file VARCHAR,
    sha256 VARCHAR,
    size_bytes BIGINT,
    found BIGINT,
    accepted BIGINT,
    rejected BIGINT,
    missing_since_run BIGINT,
    last_run BIGINT
);
COMMENT ON TABLE files IS 'One row a file of a source (or archive), as last read in full.';
COMMENT ON COLUMN files.source IS 'Name of the source.';
COMMENT ON COLUMN files.file IS 'Path relative to the PATH given; the file''s name where PATH is a file.';
COMMENT ON COLUMN files.sha256 IS 'SHA-256 of the file''s bytes.';
COMMENT ON COLUMN files.size_bytes IS 'Size of the file in bytes.';
COMMENT ON COLUMN files.found IS 'Records found = accepted + rejected.';
COMMENT ON COLUMN files.accepted IS 'Records accepted.';
COMMENT ON COLUMN files.rejected IS 'Records refused.';
COMMENT ON COLUMN files.missing_since_run IS 'Run that did not find the file any more; NULL while it is there.';
COMMENT ON COLUMN files.last_run IS 'Run that last read its content.';

CREATE TABLE chunks (
    run_id BIGINT,
    source VARCHAR,
    chunk BIGINT,
    digest VARCHAR,
    found BIGINT,
    accepted BIGINT,
    rejected BIGINT,
    new_records BIGINT,
    amended BIGINT,
    replaced BIGINT,
    unchanged BIGINT
);
COMMENT ON TABLE chunks IS 'One row a chunk of input that was committed, written in the chunk''s own transaction.';
COMMENT ON COLUMN chunks.run_id IS 'The run.';
COMMENT ON COLUMN chunks.source IS 'Name of the source.';
COMMENT ON COLUMN chunks.chunk IS '0, 1, 2 ... in the order of the input.';
COMMENT ON COLUMN chunks.digest IS 'SHA-256 of the chunk''s raw records.';
COMMENT ON COLUMN chunks.found IS 'Raw records in the chunk.';
COMMENT ON COLUMN chunks.accepted IS 'Records accepted (the unchanged among them).';
COMMENT ON COLUMN chunks.rejected IS 'Records refused.';
COMMENT ON COLUMN chunks.new_records IS 'Accepted records that the store did not know.';
COMMENT ON COLUMN chunks.amended IS 'Known records whose structure is equal and whose properties are not.';
COMMENT ON COLUMN chunks.replaced IS 'Known records whose structure is another.';
COMMENT ON COLUMN chunks.unchanged IS 'Known records with nothing new.';

CREATE TABLE seen (
    source VARCHAR,
    file VARCHAR,
    record_id VARCHAR
);
COMMENT ON TABLE seen IS 'While a run reads: records of its files that are still there. Empty between runs.';
COMMENT ON COLUMN seen.source IS 'Name of the source.';
COMMENT ON COLUMN seen.file IS 'The record''s file.';
COMMENT ON COLUMN seen.record_id IS 'The record.';

CREATE TABLE records (
    record_id VARCHAR,
    source VARCHAR,
    label VARCHAR,
    file VARCHAR,
    position BIGINT,
    reader VARCHAR,
    content_hash VARCHAR,
    raw_hash VARCHAR,
    formula VARCHAR,
    formula_anonymous VARCHAR,
    elements VARCHAR[],
    composition VARCHAR,
    sites_given INTEGER,
    sites_primitive INTEGER,
    periodicity UTINYINT,
    energy_ev_per_site DOUBLE,
    theory VARCHAR,
    split VARCHAR,
    record_date TIMESTAMP,
    properties JSON,
    first_run BIGINT,
    content_run BIGINT,
    changed_run BIGINT,
    missing_since_run BIGINT
);
COMMENT ON TABLE records IS 'One row an accepted record.';
COMMENT ON COLUMN records.record_id IS 'First 20 hex digits of the SHA-256 of source, file and label joined by NUL.';
COMMENT ON COLUMN records.source IS 'Name of the source.';
COMMENT ON COLUMN records.label IS 'The record''s label in its file.';
COMMENT ON COLUMN records.file IS 'Path relative to the PATH given.';
COMMENT ON COLUMN records.position IS 'Place in the file, from 0.';
COMMENT ON COLUMN records.reader IS 'Format of the structure text.';
COMMENT ON COLUMN records.content_hash IS 'SHA-256 of cell, species, occupancies and positions as parsed, in order.';
COMMENT ON COLUMN records.raw_hash IS 'SHA-256 of the record''s text and properties as they stand in the file.';
COMMENT ON COLUMN records.formula IS 'Reduced chemical formula, elements in alphabetical order (OPTIMADE).';
COMMENT ON COLUMN records.formula_anonymous IS 'Anonymous formula (OPTIMADE).';
COMMENT ON COLUMN records.elements IS 'Chemical elements in alphabetical order.';
COMMENT ON COLUMN records.composition IS 'Reduced composition over species tokens: only equal ones can be the same crystal.';
COMMENT ON COLUMN records.sites_given IS 'Sites of the cell as it came.';
COMMENT ON COLUMN records.sites_primitive IS 'Sites of the primitive cell.';
COMMENT ON COLUMN records.periodicity IS 'Periodic directions: 3, or 2 for a layer.';
COMMENT ON COLUMN records.energy_ev_per_site IS 'Energy in eV per site of the given cell; NULL without a unit.';
COMMENT ON COLUMN records.theory IS 'Level of theory; energies are compared only within one.';
COMMENT ON COLUMN records.split IS 'Set the record belongs to (train, test ...).';
COMMENT ON COLUMN records.record_date IS 'The record''s own date.';
COMMENT ON COLUMN records.properties IS 'Every other column of the input.';
COMMENT ON COLUMN records.first_run IS 'Run that brought the record.';
COMMENT ON COLUMN records.content_run IS 'Run that brought its present content.';
COMMENT ON COLUMN records.changed_run IS 'Run that last changed it: new, other content or properties, missing, or back.';
COMMENT ON COLUMN records.missing_since_run IS 'Run that no longer found it in its file; NULL while it is there.';

CREATE TABLE record_versions (
    record_id VARCHAR,
    version INTEGER,
    change VARCHAR,
    ended_by_run BIGINT,
    content_hash VARCHAR,
    composition VARCHAR,
    crystal_key VARCHAR,
    energy_ev_per_site DOUBLE,
    theory VARCHAR,
    split VARCHAR,
    record_date TIMESTAMP,
    properties JSON,
    cell_angstrom DOUBLE[9],
    species VARCHAR[],
    positions_fractional DOUBLE[]
);
COMMENT ON TABLE record_versions IS 'One row an earlier state of a record that was amended or replaced.';
COMMENT ON COLUMN record_versions.record_id IS 'The record.';
COMMENT ON COLUMN record_versions.version IS '1 for the first state, counting up.';
COMMENT ON COLUMN record_versions.change IS 'What ended this state: amended or replaced.';
COMMENT ON COLUMN record_versions.ended_by_run IS 'Run that ended this state.';
COMMENT ON COLUMN record_versions.content_hash IS 'Content hash of this state.';
COMMENT ON COLUMN record_versions.composition IS 'Reduced composition of this state.';
COMMENT ON COLUMN record_versions.crystal_key IS 'Key of this state.';
COMMENT ON COLUMN record_versions.energy_ev_per_site IS 'Energy in eV per site of this state.';
COMMENT ON COLUMN record_versions.theory IS 'Level of theory of this state.';
COMMENT ON COLUMN record_versions.split IS 'Set of this state.';
COMMENT ON COLUMN record_versions.record_date IS 'The record''s own date in this state.';
COMMENT ON COLUMN record_versions.properties IS 'Other columns of this state.';
COMMENT ON COLUMN record_versions.cell_angstrom IS 'Given cell of this state, rows a, b, c, angstrom.';
COMMENT ON COLUMN record_versions.species IS 'Species tokens of this state, in the order given.';
COMMENT ON COLUMN record_versions.positions_fractional IS 'Given positions of this state, x y z a site, fractional.';

CREATE TABLE structures (
    record_id VARCHAR,
    cell_angstrom DOUBLE[9],
    species VARCHAR[],
    positions_fractional DOUBLE[]
);
COMMENT ON TABLE structures IS 'One row a record: the structure as it came, in double precision.';
COMMENT ON COLUMN structures.record_id IS 'The record.';
COMMENT ON COLUMN structures.cell_angstrom IS 'Given cell, rows a, b, c, Cartesian, angstrom.';
COMMENT ON COLUMN structures.species IS 'Species tokens in the order given.';
COMMENT ON COLUMN structures.positions_fractional IS 'Given positions, x y z a site, fractional.';

CREATE TABLE canonical_forms (
    record_id VARCHAR,
    crystal_key VARCHAR,
    a_angstrom DOUBLE,
    b_angstrom DOUBLE,
    c_angstrom DOUBLE,
    alpha_deg DOUBLE,
    beta_deg DOUBLE,
    gamma_deg DOUBLE,
    volume_angstrom3_per_site DOUBLE,
    area_angstrom2_per_site DOUBLE,
    supercell_index INTEGER,
    residual_angstrom DOUBLE,
    pseudo_index INTEGER,
    pseudo_residual_angstrom DOUBLE,
    cell_angstrom DOUBLE[9],
    species VARCHAR[],
    positions_fractional DOUBLE[],
    matrix INTEGER[9],
    rotation DOUBLE[9],
    origin_fractional DOUBLE[3],
    site_map INTEGER[],
    site_shift INTEGER[],
    pseudo_matrix INTEGER[9]
);
COMMENT ON TABLE canonical_forms IS 'One row a record: its canonical form, and how the given cell is rebuilt from it (given cell = matrix . canonical cell . rotation).';
COMMENT ON COLUMN canonical_forms.record_id IS 'The record.';
COMMENT ON COLUMN canonical_forms.crystal_key IS 'SHA-256 of the canonical integers: equal keys prove one crystal.';
COMMENT ON COLUMN canonical_forms.a_angstrom IS 'Edge a of the reduced cell, angstrom.';
COMMENT ON COLUMN canonical_forms.b_angstrom IS 'Edge b of the reduced cell, angstrom.';
COMMENT ON COLUMN canonical_forms.c_angstrom IS 'Edge c of the reduced cell, angstrom; NULL for a layer.';
COMMENT ON COLUMN canonical_forms.alpha_deg IS 'Angle alpha of the reduced cell, degrees; NULL for a layer.';
COMMENT ON COLUMN canonical_forms.beta_deg IS 'Angle beta of the reduced cell, degrees; NULL for a layer.';
COMMENT ON COLUMN canonical_forms.gamma_deg IS 'Angle gamma of the reduced cell, degrees.';
COMMENT ON COLUMN canonical_forms.volume_angstrom3_per_site IS 'Volume per site, cubic angstrom; NULL for a layer.';
COMMENT ON COLUMN canonical_forms.area_angstrom2_per_site IS 'Area per site of a layer, square angstrom; NULL for a bulk crystal.';
COMMENT ON COLUMN canonical_forms.supercell_index IS 'How many primitive cells the given cell holds.';
COMMENT ON COLUMN canonical_forms.residual_angstrom IS 'Largest distance of a given site from its canonical place, angstrom.';
COMMENT ON COLUMN canonical_forms.pseudo_index IS 'How many approximate primitive cells the primitive cell holds; 1 if none.';
COMMENT ON COLUMN canonical_forms.pseudo_residual_angstrom IS 'Largest distance of a site from the mean of its approximate images.';
COMMENT ON COLUMN canonical_forms.cell_angstrom IS 'Reduced cell, rows a, b, c, angstrom; a along x, b in xy; c of layers: 1024.';
COMMENT ON COLUMN canonical_forms.species IS 'Species tokens of the sorted basis.';
COMMENT ON COLUMN canonical_forms.positions_fractional IS 'Sorted basis, x y z a site, fractional; z of a layer: height / 1024.';
COMMENT ON COLUMN canonical_forms.matrix IS 'Integer matrix: given cell (a layer: upright) = matrix . reduced cell . rotation.';
COMMENT ON COLUMN canonical_forms.rotation IS 'Proper rotation that turns the reduced cell into the given frame (row vectors).';
COMMENT ON COLUMN canonical_forms.origin_fractional IS 'Origin of the sorted basis in the given structure, in the reduced cell.';
COMMENT ON COLUMN canonical_forms.site_map IS 'For each given site, the canonical site it is an image of, from 0.';
COMMENT ON COLUMN canonical_forms.site_shift IS 'Lattice translation to each given site, x y z; z of a layer: its third rows.';
COMMENT ON COLUMN canonical_forms.pseudo_matrix IS 'Integer matrix: reduced cell = pseudo_matrix . approximate primitive cell.';

CREATE TABLE rejects (
    source VARCHAR,
    file VARCHAR,
    position BIGINT,
    label VARCHAR,
    stage VARCHAR,
    reason VARCHAR,
    message VARCHAR,
    run_id BIGINT
);
COMMENT ON TABLE rejects IS 'One row a refused record; found = accepted + refused, file by file.';
COMMENT ON COLUMN rejects.source IS 'Name of the source.';
COMMENT ON COLUMN rejects.file IS 'Path relative to the PATH given.';
COMMENT ON COLUMN rejects.position IS 'Place in the file, from 0.';
COMMENT ON COLUMN rejects.label IS 'The record''s label, or the file''s stem where it has none.';
COMMENT ON COLUMN rejects.stage IS 'read, parse or canonical.';
COMMENT ON COLUMN rejects.reason IS 'Stable reason code.';
COMMENT ON COLUMN rejects.message IS 'What was met and where.';
COMMENT ON COLUMN rejects.run_id IS 'Run that refused it.';

CREATE TABLE withdrawals (
    withdrawal_id BIGINT,
    source VARCHAR,
    record_id VARCHAR,
    reason VARCHAR,
    run_id BIGINT,
    made_at TIMESTAMP,
    made_by VARCHAR,
    undone_by_run BIGINT
);
COMMENT ON TABLE withdrawals IS 'One row an act of withdrawing a source or a record from every later result.';
COMMENT ON COLUMN withdrawals.withdrawal_id IS '1, 2, 3 ...';
COMMENT ON COLUMN withdrawals.source IS 'The source; NULL where one record is meant.';
COMMENT ON COLUMN withdrawals.record_id IS 'The record; NULL where a source is meant.';
COMMENT ON COLUMN withdrawals.reason IS 'Why, in the curator''s words.';
COMMENT ON COLUMN withdrawals.run_id IS 'Run that withdrew it.';
COMMENT ON COLUMN withdrawals.made_at IS 'When, UTC.';
COMMENT ON COLUMN withdrawals.made_by IS 'Who (the login name).';
COMMENT ON COLUMN withdrawals.undone_by_run IS 'Run that took the withdrawal back; NULL while it holds.';

CREATE TABLE members (
    grade VARCHAR,
    group_id VARCHAR,
    family_id VARCHAR,
    record_id VARCHAR,
    label VARCHAR,
    source VARCHAR,
    kept BOOLEAN,
    witness_shift_angstrom DOUBLE,
    witness_strain DOUBLE
);
COMMENT ON TABLE members IS 'One row a record and grade: every record that is neither missing nor withdrawn stands in exactly one group of each grade computed, alone if need be.';
COMMENT ON COLUMN members.grade IS 'copy, key, same, near, rescaled or isotypic.';
COMMENT ON COLUMN members.group_id IS 'Record id of the group''s kept record.';
COMMENT ON COLUMN members.family_id IS 'Smallest record id of the family.';
COMMENT ON COLUMN members.record_id IS 'The record.';
COMMENT ON COLUMN members.label IS 'Its label.';
COMMENT ON COLUMN members.source IS 'Its source.';
COMMENT ON COLUMN members.kept IS 'True for the one record of the group that is kept.';
COMMENT ON COLUMN members.witness_shift_angstrom IS 'Largest shift of the match with the kept record, angstrom; 0 for equal keys.';
COMMENT ON COLUMN members.witness_strain IS 'Strain of the match with the kept record; 0 for equal keys.';

CREATE TABLE id_changes (
    run_id BIGINT,
    grade VARCHAR,
    record_id VARCHAR,
    group_before VARCHAR,
    group_after VARCHAR,
    family_before VARCHAR,
    family_after VARCHAR
);
COMMENT ON TABLE id_changes IS 'One row a record whose group or family id changed in a run.';
COMMENT ON COLUMN id_changes.run_id IS 'The run.';
COMMENT ON COLUMN id_changes.grade IS 'The grade.';
COMMENT ON COLUMN id_changes.record_id IS 'The record.';
COMMENT ON COLUMN id_changes.group_before IS 'Group id before; NULL where it had none.';
COMMENT ON COLUMN id_changes.group_after IS 'Group id after; NULL where it has none.';
COMMENT ON COLUMN id_changes.family_before IS 'Family id before; NULL where it had none.';
COMMENT ON COLUMN id_changes.family_after IS 'Family id after; NULL where it has none.';

CREATE VIEW withdrawn_records AS
SELECT r.record_id, r.source, r.label, min(w.withdrawal_id) AS withdrawal_id, min_by(w.reason, w.withdrawal_id) AS reason
FROM records r
JOIN withdrawals w ON w.undone_by_run IS NULL AND (w.record_id = r.record_id OR w.source = r.source)
GROUP BY r.record_id, r.source, r.label;
COMMENT ON VIEW withdrawn_records IS 'Records that an open withdrawal takes out of every result, with the reason.';

CREATE VIEW current_records AS
SELECT r.*
FROM records r
WHERE r.missing_since_run IS NULL
  AND NOT EXISTS (SELECT 1 FROM withdrawals w WHERE w.undone_by_run IS NULL AND w.record_id = r.record_id)
  AND NOT EXISTS (SELECT 1 FROM withdrawals w WHERE w.undone_by_run IS NULL AND w.source = r.source);
COMMENT ON VIEW current_records IS 'Records that take part in results: neither missing from their file nor withdrawn.';
