-- Types of lattice and crystal, once a distinct key, and the view that most questions are put to.

CREATE TABLE crystal_types (
    crystal_key VARCHAR,
    typed_record_id VARCHAR,
    lattice_type VARCHAR,
    lattice_strain DOUBLE,
    strain_to_mP DOUBLE,
    strain_to_mS DOUBLE,
    strain_to_oP DOUBLE,
    strain_to_oS DOUBLE,
    strain_to_oI DOUBLE,
    strain_to_oF DOUBLE,
    strain_to_tP DOUBLE,
    strain_to_tI DOUBLE,
    strain_to_hR DOUBLE,
    strain_to_hP DOUBLE,
    strain_to_cP DOUBLE,
    strain_to_cI DOUBLE,
    strain_to_cF DOUBLE,
    plane_strain_to_op DOUBLE,
    plane_strain_to_oc DOUBLE,
    plane_strain_to_tp DOUBLE,
    plane_strain_to_hp DOUBLE,
    ladder_reach_strain DOUBLE,
    conventional_matrix INTEGER[9],
    crystal_lattice_type VARCHAR,
    space_group INTEGER,
    layer_group INTEGER,
    space_group_symbol VARCHAR,
    point_group_order INTEGER,
    hall_number INTEGER,
    pearson VARCHAR,
    pearson_hexagonal VARCHAR,
    wyckoff VARCHAR,
    pseudo_symmetric BOOLEAN,
    symmetry_unsure BOOLEAN,
    symmetry_failure VARCHAR,
    mean_distances_angstrom FLOAT[],
    standard_cell_angstrom DOUBLE[9],
    standard_species VARCHAR[],
    standard_positions_fractional DOUBLE[]
);
COMMENT ON TABLE crystal_types IS 'One row a distinct key: types of the lattice and of the crystal, computed from its record with the smallest id.';
COMMENT ON COLUMN crystal_types.crystal_key IS 'The key.';
COMMENT ON COLUMN crystal_types.typed_record_id IS 'The record that the types were computed from.';
COMMENT ON COLUMN crystal_types.lattice_type IS 'Type of the lattice alone (IUCr symbol; layers mp op oc tp hp).';
COMMENT ON COLUMN crystal_types.lattice_strain IS 'Logarithmic strain to the nearest lattice that has this type exactly.';
COMMENT ON COLUMN crystal_types.strain_to_mP IS 'Logarithmic strain to the nearest lattice of type mP; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_mS IS 'Logarithmic strain to the nearest lattice of type mS; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_oP IS 'Logarithmic strain to the nearest lattice of type oP; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_oS IS 'Logarithmic strain to the nearest lattice of type oS; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_oI IS 'Logarithmic strain to the nearest lattice of type oI; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_oF IS 'Logarithmic strain to the nearest lattice of type oF; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_tP IS 'Logarithmic strain to the nearest lattice of type tP; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_tI IS 'Logarithmic strain to the nearest lattice of type tI; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_hR IS 'Logarithmic strain to the nearest lattice of type hR; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_hP IS 'Logarithmic strain to the nearest lattice of type hP; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_cP IS 'Logarithmic strain to the nearest lattice of type cP; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_cI IS 'Logarithmic strain to the nearest lattice of type cI; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.strain_to_cF IS 'Logarithmic strain to the nearest lattice of type cF; NULL if not higher or far.';
COMMENT ON COLUMN crystal_types.plane_strain_to_op IS 'Of a layer: logarithmic strain to the nearest plane lattice of type op.';
COMMENT ON COLUMN crystal_types.plane_strain_to_oc IS 'Of a layer: logarithmic strain to the nearest plane lattice of type oc.';
COMMENT ON COLUMN crystal_types.plane_strain_to_tp IS 'Of a layer: logarithmic strain to the nearest plane lattice of type tp.';
COMMENT ON COLUMN crystal_types.plane_strain_to_hp IS 'Of a layer: logarithmic strain to the nearest plane lattice of type hp.';
COMMENT ON COLUMN crystal_types.ladder_reach_strain IS 'Strain up to which the columns strain_to_* are complete.';
COMMENT ON COLUMN crystal_types.conventional_matrix IS 'Integer matrix: conventional cell = matrix . reduced cell.';
COMMENT ON COLUMN crystal_types.crystal_lattice_type IS 'Lattice type of the crystal: family and centring of its space group.';
COMMENT ON COLUMN crystal_types.space_group IS 'Number of the space group, 1 to 230; NULL for a layer.';
COMMENT ON COLUMN crystal_types.layer_group IS 'Number of the layer group, 1 to 80; NULL for a bulk crystal.';
COMMENT ON COLUMN crystal_types.space_group_symbol IS 'Hermann-Mauguin symbol of the space or layer group, standard setting.';
COMMENT ON COLUMN crystal_types.point_group_order IS 'Operations in the point group: a measure of symmetry.';
COMMENT ON COLUMN crystal_types.hall_number IS 'Sequential number of the Hall symbol of the standard cell.';
COMMENT ON COLUMN crystal_types.pearson IS 'Pearson symbol; for hR the sites of the primitive cell are counted.';
COMMENT ON COLUMN crystal_types.pearson_hexagonal IS 'Pearson symbol of an hR crystal counted in the hexagonal cell; else NULL.';
COMMENT ON COLUMN crystal_types.wyckoff IS 'Wyckoff sequence, last letter first.';
COMMENT ON COLUMN crystal_types.pseudo_symmetric IS 'The lattice has more symmetry than the crystal.';
COMMENT ON COLUMN crystal_types.symmetry_unsure IS 'The group changes between half and twice the symmetry tolerance.';
COMMENT ON COLUMN crystal_types.symmetry_failure IS 'Why no space group was found; NULL where one was.';
COMMENT ON COLUMN crystal_types.mean_distances_angstrom IS 'Fingerprint: mean distance of the sites of a species to the 1st ... k-th neighbour, angstrom; k numbers a species, species tokens in ascending order.';
COMMENT ON COLUMN crystal_types.standard_cell_angstrom IS 'Standard conventional cell of the crystal, rows, angstrom.';
COMMENT ON COLUMN crystal_types.standard_species IS 'Species tokens of the sites of the standard cell.';
COMMENT ON COLUMN crystal_types.standard_positions_fractional IS 'Sites of the standard cell, x y z a site, fractional.';

CREATE VIEW crystals AS
SELECT c.*, t.* EXCLUDE (crystal_key)
FROM canonical_forms c
LEFT JOIN crystal_types t USING (crystal_key);
COMMENT ON VIEW crystals IS 'One row a record: its canonical form, lattice type, ladder and space group.';
COMMENT ON COLUMN crystals.record_id IS 'The record.';
COMMENT ON COLUMN crystals.crystal_key IS 'SHA-256 of the canonical integers: equal keys prove one crystal.';
COMMENT ON COLUMN crystals.a_angstrom IS 'Edge a of the reduced cell, angstrom.';
COMMENT ON COLUMN crystals.b_angstrom IS 'Edge b of the reduced cell, angstrom.';
COMMENT ON COLUMN crystals.c_angstrom IS 'Edge c of the reduced cell, angstrom; NULL for a layer.';
COMMENT ON COLUMN crystals.alpha_deg IS 'Angle alpha of the reduced cell, degrees; NULL for a layer.';
COMMENT ON COLUMN crystals.beta_deg IS 'Angle beta of the reduced cell, degrees; NULL for a layer.';
COMMENT ON COLUMN crystals.gamma_deg IS 'Angle gamma of the reduced cell, degrees.';
COMMENT ON COLUMN crystals.volume_angstrom3_per_site IS 'Volume per site, cubic angstrom; NULL for a layer.';
COMMENT ON COLUMN crystals.area_angstrom2_per_site IS 'Area per site of a layer, square angstrom; NULL for a bulk crystal.';
COMMENT ON COLUMN crystals.supercell_index IS 'How many primitive cells the given cell holds.';
COMMENT ON COLUMN crystals.residual_angstrom IS 'Largest distance of a given site from its canonical place, angstrom.';
COMMENT ON COLUMN crystals.pseudo_index IS 'How many approximate primitive cells the primitive cell holds; 1 if none.';
COMMENT ON COLUMN crystals.pseudo_residual_angstrom IS 'Largest distance of a site from the mean of its approximate images.';
COMMENT ON COLUMN crystals.cell_angstrom IS 'Reduced cell, rows a, b, c, angstrom; a along x, b in xy; c of layers: 1024.';
COMMENT ON COLUMN crystals.species IS 'Species tokens of the sorted basis.';
COMMENT ON COLUMN crystals.positions_fractional IS 'Sorted basis, x y z a site, fractional; z of a layer: height / 1024.';
COMMENT ON COLUMN crystals.matrix IS 'Integer matrix: given cell (a layer: upright) = matrix . reduced cell . rotation.';
COMMENT ON COLUMN crystals.rotation IS 'Proper rotation that turns the reduced cell into the given frame (row vectors).';
COMMENT ON COLUMN crystals.origin_fractional IS 'Origin of the sorted basis in the given structure, in the reduced cell.';
COMMENT ON COLUMN crystals.site_map IS 'For each given site, the canonical site it is an image of, from 0.';
COMMENT ON COLUMN crystals.site_shift IS 'Lattice translation to each given site, x y z; z of a layer: its third rows.';
COMMENT ON COLUMN crystals.pseudo_matrix IS 'Integer matrix: reduced cell = pseudo_matrix . approximate primitive cell.';
COMMENT ON COLUMN crystals.typed_record_id IS 'The record that the types were computed from.';
COMMENT ON COLUMN crystals.lattice_type IS 'Type of the lattice alone (IUCr symbol; layers mp op oc tp hp).';
COMMENT ON COLUMN crystals.lattice_strain IS 'Logarithmic strain to the nearest lattice that has this type exactly.';
COMMENT ON COLUMN crystals.strain_to_mP IS 'Logarithmic strain to the nearest lattice of type mP; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_mS IS 'Logarithmic strain to the nearest lattice of type mS; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_oP IS 'Logarithmic strain to the nearest lattice of type oP; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_oS IS 'Logarithmic strain to the nearest lattice of type oS; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_oI IS 'Logarithmic strain to the nearest lattice of type oI; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_oF IS 'Logarithmic strain to the nearest lattice of type oF; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_tP IS 'Logarithmic strain to the nearest lattice of type tP; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_tI IS 'Logarithmic strain to the nearest lattice of type tI; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_hR IS 'Logarithmic strain to the nearest lattice of type hR; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_hP IS 'Logarithmic strain to the nearest lattice of type hP; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_cP IS 'Logarithmic strain to the nearest lattice of type cP; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_cI IS 'Logarithmic strain to the nearest lattice of type cI; NULL if not higher or far.';
COMMENT ON COLUMN crystals.strain_to_cF IS 'Logarithmic strain to the nearest lattice of type cF; NULL if not higher or far.';
COMMENT ON COLUMN crystals.plane_strain_to_op IS 'Of a layer: logarithmic strain to the nearest plane lattice of type op.';
COMMENT ON COLUMN crystals.plane_strain_to_oc IS 'Of a layer: logarithmic strain to the nearest plane lattice of type oc.';
COMMENT ON COLUMN crystals.plane_strain_to_tp IS 'Of a layer: logarithmic strain to the nearest plane lattice of type tp.';
COMMENT ON COLUMN crystals.plane_strain_to_hp IS 'Of a layer: logarithmic strain to the nearest plane lattice of type hp.';
COMMENT ON COLUMN crystals.ladder_reach_strain IS 'Strain up to which the columns strain_to_* are complete.';
COMMENT ON COLUMN crystals.conventional_matrix IS 'Integer matrix: conventional cell = matrix . reduced cell.';
COMMENT ON COLUMN crystals.crystal_lattice_type IS 'Lattice type of the crystal: family and centring of its space group.';
COMMENT ON COLUMN crystals.space_group IS 'Number of the space group, 1 to 230; NULL for a layer.';
COMMENT ON COLUMN crystals.layer_group IS 'Number of the layer group, 1 to 80; NULL for a bulk crystal.';
COMMENT ON COLUMN crystals.space_group_symbol IS 'Hermann-Mauguin symbol of the space or layer group, standard setting.';
COMMENT ON COLUMN crystals.point_group_order IS 'Operations in the point group: a measure of symmetry.';
COMMENT ON COLUMN crystals.hall_number IS 'Sequential number of the Hall symbol of the standard cell.';
COMMENT ON COLUMN crystals.pearson IS 'Pearson symbol; for hR the sites of the primitive cell are counted.';
COMMENT ON COLUMN crystals.pearson_hexagonal IS 'Pearson symbol of an hR crystal counted in the hexagonal cell; else NULL.';
COMMENT ON COLUMN crystals.wyckoff IS 'Wyckoff sequence, last letter first.';
COMMENT ON COLUMN crystals.pseudo_symmetric IS 'The lattice has more symmetry than the crystal.';
COMMENT ON COLUMN crystals.symmetry_unsure IS 'The group changes between half and twice the symmetry tolerance.';
COMMENT ON COLUMN crystals.symmetry_failure IS 'Why no space group was found; NULL where one was.';
COMMENT ON COLUMN crystals.mean_distances_angstrom IS 'Fingerprint: mean distance of the sites of a species to the 1st ... k-th neighbour, angstrom; k numbers a species, species tokens in ascending order.';
COMMENT ON COLUMN crystals.standard_cell_angstrom IS 'Standard conventional cell of the crystal, rows, angstrom.';
COMMENT ON COLUMN crystals.standard_species IS 'Species tokens of the sites of the standard cell.';
COMMENT ON COLUMN crystals.standard_positions_fractional IS 'Sites of the standard cell, x y z a site, fractional.';
