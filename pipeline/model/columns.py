"""Every table of the store and every column of it: name, DuckDB type, and meaning with its unit.

sql/migrations/ creates the tables; a test compares both ways, so that neither can drift. Comments of the store and the
tables of the README are these sentences.
"""

from __future__ import annotations

from typing import NamedTuple


class Column(NamedTuple):
    """One column: DuckDB type as `duckdb_columns()` prints it, and its meaning."""

    name: str
    type: str
    meaning: str


class Table(NamedTuple):
    """One table with the sentence that says what a row is."""

    meaning: str
    columns: tuple[Column, ...]


def _table(meaning: str, *columns: tuple[str, str, str]) -> Table:
    return Table(meaning, tuple(Column(*c) for c in columns))


TABLES: dict[str, Table] = {
    "schema_migrations": _table(
        "One row a step of the schema that was applied, written in the transaction of the step.",
        ("version", "INTEGER", "Number of the migration file."),
        ("name", "VARCHAR", "Name of the migration file."),
        ("applied_at", "TIMESTAMP", "When, UTC."),
    ),
    "store_facts": _table(
        "Facts about the store itself.",
        (
            "name",
            "VARCHAR",
            "store_id (made once), publication (counts up with every publication), recomputing (plan of an unfinished one).",
        ),
        ("value", "VARCHAR", "The value as text."),
    ),
    "stage_settings": _table(
        "The settings that the stored rows of each stage were computed with; rows of two settings are never mixed.",
        ("stage", "VARCHAR", "parse, canonical, fingerprint, verify or keep."),
        ("name", "VARCHAR", "Name of the setting."),
        ("value", "JSON", "Its value."),
    ),
    "runs": _table(
        "One row a run of a command that writes.",
        ("run_id", "BIGINT", "1, 2, 3 ..."),
        ("command", "VARCHAR", "The command."),
        ("arguments", "JSON", "What it was asked to do."),
        ("plan_hash", "VARCHAR", "SHA-256 of arguments and inputs: an interrupted run with the same hash is resumed."),
        ("status", "VARCHAR", "running, done, or interrupted (another run began before it was resumed)."),
        ("started_at", "TIMESTAMP", "When it first began, UTC."),
        ("ended_at", "TIMESTAMP", "When it ended, UTC."),
        ("version", "VARCHAR", "Version of lattice-census."),
        ("settings", "JSON", "All settings in force."),
        ("counts", "JSON", "What the run did, in numbers."),
    ),
    "sources": _table(
        "One row a source: a file or folder that records come from.",
        ("source", "VARCHAR", "Name: the file's or folder's own, or the one given with --source."),
        ("root", "VARCHAR", "Absolute path it was last read from."),
        ("kind", "VARCHAR", "file or folder."),
        ("settings", "JSON", "Which columns hold energies, theory, split, date, id and structure."),
        ("first_run", "BIGINT", "Run that first read it."),
        ("last_run", "BIGINT", "Run that last read it."),
    ),
    "files": _table(
        "One row a file of a source (or archive), as last read in full.",
        ("source", "VARCHAR", "Name of the source."),
        ("file", "VARCHAR", "Path relative to the PATH given; the file's name where PATH is a file."),
        ("sha256", "VARCHAR", "SHA-256 of the file's bytes."),
        ("size_bytes", "BIGINT", "Size of the file in bytes."),
        ("found", "BIGINT", "Records found = accepted + rejected."),
        ("accepted", "BIGINT", "Records accepted."),
        ("rejected", "BIGINT", "Records refused."),
        ("missing_since_run", "BIGINT", "Run that did not find the file any more; NULL while it is there."),
        ("last_run", "BIGINT", "Run that last read its content."),
    ),
    "chunks": _table(
        "One row a chunk of input that was committed, written in the chunk's own transaction.",
        ("run_id", "BIGINT", "The run."),
        ("source", "VARCHAR", "Name of the source."),
        ("chunk", "BIGINT", "0, 1, 2 ... in the order of the input."),
        ("digest", "VARCHAR", "SHA-256 of the chunk's raw records."),
        ("found", "BIGINT", "Raw records in the chunk."),
        ("accepted", "BIGINT", "Records accepted (the unchanged among them)."),
        ("rejected", "BIGINT", "Records refused."),
        ("new_records", "BIGINT", "Accepted records that the store did not know."),
        ("amended", "BIGINT", "Known records whose structure is equal and whose properties are not."),
        ("replaced", "BIGINT", "Known records whose structure is another."),
        ("unchanged", "BIGINT", "Known records with nothing new."),
    ),
    "seen": _table(
        "While a run reads: records of its files that are still there. Empty between runs.",
        ("source", "VARCHAR", "Name of the source."),
        ("file", "VARCHAR", "The record's file."),
        ("record_id", "VARCHAR", "The record."),
    ),
    "records": _table(
        "One row an accepted record.",
        ("record_id", "VARCHAR", "First 20 hex digits of the SHA-256 of source, file and label joined by NUL."),
        ("source", "VARCHAR", "Name of the source."),
        ("label", "VARCHAR", "The record's label in its file."),
        ("file", "VARCHAR", "Path relative to the PATH given."),
        ("position", "BIGINT", "Place in the file, from 0."),
        ("reader", "VARCHAR", "Format of the structure text."),
        ("content_hash", "VARCHAR", "SHA-256 of cell, species, occupancies and positions as parsed, in order."),
        ("raw_hash", "VARCHAR", "SHA-256 of the record's text and properties as they stand in the file."),
        ("formula", "VARCHAR", "Reduced chemical formula, elements in alphabetical order (OPTIMADE)."),
        ("formula_anonymous", "VARCHAR", "Anonymous formula (OPTIMADE)."),
        ("elements", "VARCHAR[]", "Chemical elements in alphabetical order."),
        ("composition", "VARCHAR", "Reduced composition over species tokens: only equal ones can be the same crystal."),
        ("sites_given", "INTEGER", "Sites of the cell as it came."),
        ("sites_primitive", "INTEGER", "Sites of the primitive cell."),
        ("periodicity", "UTINYINT", "Periodic directions: 3, or 2 for a layer."),
        ("energy_ev_per_site", "DOUBLE", "Energy in eV per site of the given cell; NULL without a unit."),
        ("theory", "VARCHAR", "Level of theory; energies are compared only within one."),
        ("split", "VARCHAR", "Set the record belongs to (train, test ...)."),
        ("record_date", "TIMESTAMP", "The record's own date."),
        ("properties", "JSON", "Every other column of the input."),
        ("first_run", "BIGINT", "Run that brought the record."),
        ("content_run", "BIGINT", "Run that brought its present content."),
        ("missing_since_run", "BIGINT", "Run that no longer found it in its file; NULL while it is there."),
    ),
    "record_versions": _table(
        "One row an earlier state of a record that was amended or replaced.",
        ("record_id", "VARCHAR", "The record."),
        ("version", "INTEGER", "1 for the first state, counting up."),
        ("change", "VARCHAR", "What ended this state: amended or replaced."),
        ("ended_by_run", "BIGINT", "Run that ended this state."),
        ("content_hash", "VARCHAR", "Content hash of this state."),
        ("crystal_key", "VARCHAR", "Key of this state."),
        ("energy_ev_per_site", "DOUBLE", "Energy in eV per site of this state."),
        ("theory", "VARCHAR", "Level of theory of this state."),
        ("split", "VARCHAR", "Set of this state."),
        ("record_date", "TIMESTAMP", "The record's own date in this state."),
        ("properties", "JSON", "Other columns of this state."),
        ("cell_angstrom", "DOUBLE[9]", "Given cell of this state, rows a, b, c, angstrom."),
        ("species", "VARCHAR[]", "Species tokens of this state, in the order given."),
        ("positions_fractional", "DOUBLE[]", "Given positions of this state, x y z a site, fractional."),
    ),
    "structures": _table(
        "One row a record: the structure as it came, in double precision.",
        ("record_id", "VARCHAR", "The record."),
        ("cell_angstrom", "DOUBLE[9]", "Given cell, rows a, b, c, Cartesian, angstrom."),
        ("species", "VARCHAR[]", "Species tokens in the order given."),
        ("positions_fractional", "DOUBLE[]", "Given positions, x y z a site, fractional."),
    ),
    "canonical_forms": _table(
        "One row a record: its canonical form, and how the given cell is rebuilt from it "
        "(given cell = matrix . canonical cell . rotation).",
        ("record_id", "VARCHAR", "The record."),
        ("crystal_key", "VARCHAR", "SHA-256 of the canonical integers: equal keys prove one crystal."),
        ("a_angstrom", "DOUBLE", "Edge a of the reduced cell, angstrom."),
        ("b_angstrom", "DOUBLE", "Edge b of the reduced cell, angstrom."),
        ("c_angstrom", "DOUBLE", "Edge c of the reduced cell, angstrom."),
        ("alpha_deg", "DOUBLE", "Angle alpha of the reduced cell, degrees."),
        ("beta_deg", "DOUBLE", "Angle beta of the reduced cell, degrees."),
        ("gamma_deg", "DOUBLE", "Angle gamma of the reduced cell, degrees."),
        ("volume_angstrom3_per_site", "DOUBLE", "Volume per site, cubic angstrom."),
        ("supercell_index", "INTEGER", "How many primitive cells the given cell holds."),
        ("residual_angstrom", "DOUBLE", "Largest distance of a given site from its canonical place, angstrom."),
        ("pseudo_index", "INTEGER", "How many approximate primitive cells the primitive cell holds; 1 if none."),
        ("pseudo_residual_angstrom", "DOUBLE", "Largest distance of a site from the mean of its approximate images."),
        ("cell_angstrom", "DOUBLE[9]", "Reduced cell, rows a, b, c; a along x, b in the xy plane; angstrom."),
        ("species", "VARCHAR[]", "Species tokens of the sorted basis."),
        ("positions_fractional", "DOUBLE[]", "Sorted basis, x y z a site, fractional in the reduced cell."),
        ("matrix", "INTEGER[9]", "Integer matrix: given cell = matrix . reduced cell . rotation."),
        ("rotation", "DOUBLE[9]", "Proper rotation that turns the reduced cell into the given frame (row vectors)."),
        ("origin_fractional", "DOUBLE[3]", "Origin of the sorted basis in the given structure, in the reduced cell."),
        ("site_map", "INTEGER[]", "For each given site, the canonical site it is an image of, from 0."),
        ("site_shift", "INTEGER[]", "For each given site, the lattice translation to it, x y z a site."),
        ("pseudo_matrix", "INTEGER[9]", "Integer matrix: reduced cell = pseudo_matrix . approximate primitive cell."),
    ),
    "crystal_types": _table(
        "One row a distinct key: types of the lattice and of the crystal, computed from its record with the smallest id.",
        ("crystal_key", "VARCHAR", "The key."),
        ("typed_record_id", "VARCHAR", "The record that the types were computed from."),
        ("lattice_type", "VARCHAR", "Type of the lattice alone (IUCr symbol; layers mp op oc tp hp)."),
        ("lattice_strain", "DOUBLE", "Logarithmic strain to the nearest lattice that has this type exactly."),
        ("strain_to_mP", "DOUBLE", "Logarithmic strain to the nearest lattice of type mP; NULL if not higher or far."),
        ("strain_to_mS", "DOUBLE", "Logarithmic strain to the nearest lattice of type mS; NULL if not higher or far."),
        ("strain_to_oP", "DOUBLE", "Logarithmic strain to the nearest lattice of type oP; NULL if not higher or far."),
        ("strain_to_oS", "DOUBLE", "Logarithmic strain to the nearest lattice of type oS; NULL if not higher or far."),
        ("strain_to_oI", "DOUBLE", "Logarithmic strain to the nearest lattice of type oI; NULL if not higher or far."),
        ("strain_to_oF", "DOUBLE", "Logarithmic strain to the nearest lattice of type oF; NULL if not higher or far."),
        ("strain_to_tP", "DOUBLE", "Logarithmic strain to the nearest lattice of type tP; NULL if not higher or far."),
        ("strain_to_tI", "DOUBLE", "Logarithmic strain to the nearest lattice of type tI; NULL if not higher or far."),
        ("strain_to_hR", "DOUBLE", "Logarithmic strain to the nearest lattice of type hR; NULL if not higher or far."),
        ("strain_to_hP", "DOUBLE", "Logarithmic strain to the nearest lattice of type hP; NULL if not higher or far."),
        ("strain_to_cP", "DOUBLE", "Logarithmic strain to the nearest lattice of type cP; NULL if not higher or far."),
        ("strain_to_cI", "DOUBLE", "Logarithmic strain to the nearest lattice of type cI; NULL if not higher or far."),
        ("strain_to_cF", "DOUBLE", "Logarithmic strain to the nearest lattice of type cF; NULL if not higher or far."),
        ("plane_strain_to_op", "DOUBLE", "Of a layer: logarithmic strain to the nearest plane lattice of type op."),
        ("plane_strain_to_oc", "DOUBLE", "Of a layer: logarithmic strain to the nearest plane lattice of type oc."),
        ("plane_strain_to_tp", "DOUBLE", "Of a layer: logarithmic strain to the nearest plane lattice of type tp."),
        ("plane_strain_to_hp", "DOUBLE", "Of a layer: logarithmic strain to the nearest plane lattice of type hp."),
        ("ladder_reach_strain", "DOUBLE", "Strain up to which the columns strain_to_* are complete."),
        ("conventional_matrix", "INTEGER[9]", "Integer matrix: conventional cell = matrix . reduced cell."),
        ("crystal_lattice_type", "VARCHAR", "Lattice type of the crystal: family and centring of its space group."),
        ("space_group", "INTEGER", "Number of the space group, 1 to 230; NULL for a layer."),
        ("layer_group", "INTEGER", "Number of the layer group, 1 to 80; NULL for a bulk crystal."),
        ("space_group_symbol", "VARCHAR", "Hermann-Mauguin symbol of the space or layer group, standard setting."),
        ("point_group_order", "INTEGER", "Operations in the point group: a measure of symmetry."),
        ("hall_number", "INTEGER", "Sequential number of the Hall symbol of the standard cell."),
        ("pearson", "VARCHAR", "Pearson symbol; for hR the sites of the primitive cell are counted."),
        ("pearson_hexagonal", "VARCHAR", "Pearson symbol of an hR crystal counted in the hexagonal cell; else NULL."),
        ("wyckoff", "VARCHAR", "Wyckoff sequence, last letter first."),
        ("pseudo_symmetric", "BOOLEAN", "The lattice has more symmetry than the crystal."),
        ("symmetry_unsure", "BOOLEAN", "The group changes between half and twice the symmetry tolerance."),
        ("symmetry_failure", "VARCHAR", "Why no space group was found; NULL where one was."),
        ("standard_cell_angstrom", "DOUBLE[9]", "Standard conventional cell of the crystal, rows, angstrom."),
        ("standard_species", "VARCHAR[]", "Species tokens of the sites of the standard cell."),
        ("standard_positions_fractional", "DOUBLE[]", "Sites of the standard cell, x y z a site, fractional."),
    ),
    "rejects": _table(
        "One row a refused record; found = accepted + refused, file by file.",
        ("source", "VARCHAR", "Name of the source."),
        ("file", "VARCHAR", "Path relative to the PATH given."),
        ("position", "BIGINT", "Place in the file, from 0."),
        ("label", "VARCHAR", "The record's label, or the file's stem where it has none."),
        ("stage", "VARCHAR", "read, parse or canonical."),
        ("reason", "VARCHAR", "Stable reason code."),
        ("message", "VARCHAR", "What was met and where."),
        ("run_id", "BIGINT", "Run that refused it."),
    ),
    "withdrawals": _table(
        "One row an act of withdrawing a source or a record from every later result.",
        ("withdrawal_id", "BIGINT", "1, 2, 3 ..."),
        ("source", "VARCHAR", "The source; NULL where one record is meant."),
        ("record_id", "VARCHAR", "The record; NULL where a source is meant."),
        ("reason", "VARCHAR", "Why, in the curator's words."),
        ("run_id", "BIGINT", "Run that withdrew it."),
        ("made_at", "TIMESTAMP", "When, UTC."),
        ("made_by", "VARCHAR", "Who (the login name)."),
        ("undone_by_run", "BIGINT", "Run that took the withdrawal back; NULL while it holds."),
    ),
    "members": _table(
        "One row a record and grade: every record that is neither missing nor withdrawn stands in exactly one group of "
        "each grade computed, alone if need be.",
        ("grade", "VARCHAR", "copy, key, same, near, rescaled or isotypic."),
        ("group_id", "VARCHAR", "Record id of the group's kept record."),
        ("family_id", "VARCHAR", "Smallest record id of the family."),
        ("record_id", "VARCHAR", "The record."),
        ("label", "VARCHAR", "Its label."),
        ("source", "VARCHAR", "Its source."),
        ("kept", "BOOLEAN", "True for the one record of the group that is kept."),
        (
            "witness_shift_angstrom",
            "DOUBLE",
            "Largest shift of the match with the kept record, angstrom; 0 for equal keys.",
        ),
        ("witness_strain", "DOUBLE", "Strain of the match with the kept record; 0 for equal keys."),
    ),
    "id_changes": _table(
        "One row a record whose group or family id changed in a run.",
        ("run_id", "BIGINT", "The run."),
        ("grade", "VARCHAR", "The grade."),
        ("record_id", "VARCHAR", "The record."),
        ("group_before", "VARCHAR", "Group id before; NULL where it had none."),
        ("group_after", "VARCHAR", "Group id after; NULL where it has none."),
        ("family_before", "VARCHAR", "Family id before; NULL where it had none."),
        ("family_after", "VARCHAR", "Family id after; NULL where it has none."),
    ),
}

VIEWS: dict[str, str] = {
    "crystals": "One row a record: its canonical form, lattice type, ladder and space group.",
    "current_records": "Records that take part in results: neither missing from their file nor withdrawn.",
    "withdrawn_records": "Records that an open withdrawal takes out of every result, with the reason.",
}
