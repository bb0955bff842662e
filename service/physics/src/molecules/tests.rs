//! Molecules cut by cell faces, interleaved, linear, endless; and the rigid share of modes built to
//! be rigid or not.

use std::f64::consts::PI;

use super::*;

const TOLERANCE_ANG: f64 = 0.35;

/// A crystal from Cartesian positions, Å, wrapped into the cell.
fn wrapped(cell: Matrix3<f64>, atoms: &[(&str, [f64; 3])]) -> Crystal {
    let inverse = cell.try_inverse().unwrap();
    let positions = atoms
        .iter()
        .map(|(_, r)| inverse.tr_mul(&Vector3::from(*r)).map(|x| x - x.floor()))
        .collect();
    let elements = atoms
        .iter()
        .map(|(symbol, _)| Element::from_symbol(symbol).unwrap())
        .collect();
    Crystal::new(cell, elements, positions, None).unwrap()
}

fn triclinic() -> Matrix3<f64> {
    Matrix3::new(6.0, 0.0, 0.0, 0.7, 7.0, 0.0, -0.5, 1.1, 8.0)
}

/// A bent and a linear molecule and an atom; both molecules are cut by faces of the cell.
fn mixture() -> Crystal {
    wrapped(
        triclinic(),
        &[
            ("O", [0.0, 0.1, 0.0]),
            ("H", [0.757, 0.686, 0.0]),
            ("H", [-0.757, 0.686, 0.0]),
            ("C", [3.0, 3.0, -0.2]),
            ("O", [3.0, 3.0, 0.96]),
            ("O", [3.0, 3.0, -1.36]),
            ("Ar", [3.0, 0.0, 4.0]),
        ],
    )
}

fn distance(crystal: &Crystal, molecule: &Molecule, first: usize, second: usize) -> f64 {
    let place = |k: usize| whole_position(crystal, &molecule.members()[k]);
    crystal.cartesian(&(place(second) - place(first))).norm()
}

#[test]
fn molecules_are_made_whole_across_faces() {
    let crystal = mixture();
    let molecules = Molecules::find(&crystal, TOLERANCE_ANG);
    let formulas: Vec<String> = molecules
        .molecules()
        .iter()
        .map(Molecule::hill_formula)
        .collect();
    assert_eq!(formulas, ["H2 O", "C O2", "Ar"]);
    assert_eq!(molecules.molecule_of_atom(), [0, 0, 0, 1, 1, 1, 2]);
    assert!(!molecules.has_networks());
    let [water, dioxide, argon] = molecules.molecules() else {
        panic!("three molecules")
    };
    for (molecule, first, second, expected) in [
        (water, 0, 1, 0.757_f64.hypot(0.586)),
        (water, 0, 2, 0.757_f64.hypot(0.586)),
        (water, 1, 2, 1.514),
        (dioxide, 0, 1, 1.16),
        (dioxide, 1, 2, 2.32),
    ] {
        assert!((distance(&crystal, molecule, first, second) - expected).abs() < 1e-12);
    }
    assert!(water.members().iter().any(|m| m.shift != [0, 0, 0]));
    assert_eq!(argon.members().len(), 1);
    let carbon = &crystal.positions()[3];
    assert!((dioxide.centre() - carbon).norm() < 1e-12);
}

#[test]
fn formulas_are_in_the_order_of_hill() {
    let cell = Matrix3::identity() * 12.0;
    let methanol = [
        ("O", [0.0, 0.0, 0.0]),
        ("H", [0.95, 0.0, 0.0]),
        ("C", [-0.5, 1.33, 0.0]),
        ("H", [-1.59, 1.33, 0.0]),
        ("H", [-0.15, 1.85, 0.9]),
        ("H", [-0.15, 1.85, -0.9]),
    ];
    let molecules = Molecules::find(&wrapped(cell, &methanol), TOLERANCE_ANG);
    assert_eq!(molecules.molecules().len(), 1);
    assert_eq!(molecules.molecules()[0].hill_formula(), "C H4 O");
    // Without carbon hydrogen has no special place.
    let bromide = [("H", [0.0; 3]), ("Br", [1.41, 0.0, 0.0])];
    let acid = Molecules::find(&wrapped(cell, &bromide), TOLERANCE_ANG);
    assert_eq!(acid.molecules()[0].hill_formula(), "Br H");
    let hydrogen = Element::from_symbol("H").unwrap();
    assert_eq!(molecules.molecules()[0].formula().get(&hydrogen), Some(&4));
}

#[test]
fn bonds_end_at_the_sum_of_radii_and_tolerance() {
    // Radii of Cordero et al. (2008): C 0.76 Å, H 0.31 Å, Br 1.20 Å.
    let count = |symbols: [&'static str; 2], length: f64, tolerance: f64| {
        let cell = Matrix3::identity() * 9.0;
        let pair = [
            (symbols[0], [8.9, 0.0, 0.0]),
            (symbols[1], [8.9 + length, 0.0, 0.0]),
        ];
        Molecules::find(&wrapped(cell, &pair), tolerance)
            .molecules()
            .len()
    };
    for (symbols, sum) in [(["C", "C"], 1.52), (["C", "H"], 1.07), (["H", "Br"], 1.51)] {
        for tolerance in [0.0, 0.35] {
            assert_eq!(count(symbols, sum + tolerance - 0.01, tolerance), 1);
            assert_eq!(count(symbols, sum + tolerance + 0.01, tolerance), 2);
        }
    }
}

#[test]
fn interleaved_molecules_stay_apart() {
    // Two carbon rods side by side, each across the face of a cell shorter than either is wide when
    // wrapped.
    let rod = |x: f64, y: f64| (0..4).map(move |k| ("C", [x, y, 1.4 * f64::from(k)]));
    let cell = Matrix3::from_diagonal(&Vector3::new(7.0, 7.0, 8.0));
    let mut atoms: Vec<(&str, [f64; 3])> = Vec::new();
    for (first, second) in rod(6.9, 0.0).zip(rod(2.4, 0.3)) {
        let mut second = second;
        second.1[2] += 5.0;
        atoms.extend([first, second]);
    }
    let molecules = Molecules::find(&wrapped(cell, &atoms), TOLERANCE_ANG);
    assert_eq!(molecules.molecule_of_atom(), [0, 1, 0, 1, 0, 1, 0, 1]);
    let ends: Vec<i64> = molecules
        .molecules()
        .iter()
        .map(|molecule| molecule.members()[3].shift[2])
        .collect();
    assert_eq!(ends, [0, 1]);
    // The rods stand 2.5 Å apart across a face, their centres shifted by 5 − 8 = −3 Å along
    // themselves.
    let expected = (2.5_f64.powi(2) + 0.3_f64.powi(2) + 3.0_f64.powi(2)).sqrt();
    assert!((molecules.nearest_centre_distance_ang() - expected).abs() < 1e-12);
}

#[test]
fn nearest_centres_may_be_images_of_one_molecule() {
    let cell = Matrix3::new(9.0, 0.0, 0.0, 4.2, 3.0, 0.0, 0.0, 0.0, 10.0);
    let molecules = Molecules::find(&wrapped(cell, &[("Ar", [1.0; 3])]), TOLERANCE_ANG);
    let expected = (4.2_f64.powi(2) + 9.0).sqrt();
    assert!((molecules.nearest_centre_distance_ang() - expected).abs() < 1e-12);
}

#[test]
fn networks_know_their_dimension() {
    let extent = |cell: Matrix3<f64>, atoms: &[(&str, [f64; 3])]| {
        let molecules = Molecules::find(&wrapped(cell, atoms), TOLERANCE_ANG);
        assert!(molecules.has_networks());
        assert_eq!(molecules.molecules().len(), 1);
        molecules.molecules()[0].extent()
    };
    let zigzag = [("C", [0.0, 0.4, 0.0]), ("C", [1.25, -0.4, 0.0])];
    let cell = Matrix3::from_diagonal(&Vector3::new(2.5, 6.0, 7.0));
    assert_eq!(extent(cell, &zigzag), Extent::Periodic(1));
    let one_atom = |x: f64, y: f64, z: f64| {
        let cell = Matrix3::from_diagonal(&Vector3::new(x, y, z));
        extent(cell, &[("C", [0.3; 3])])
    };
    assert_eq!(one_atom(1.5, 5.0, 5.0), Extent::Periodic(1));
    assert_eq!(one_atom(5.0, 1.5, 1.5), Extent::Periodic(2));
    assert_eq!(one_atom(1.5, 1.5, 1.5), Extent::Periodic(3));
    // A chain that closes only after two cells, along a diagonal.
    let diagonal = Matrix3::new(5.0, 0.0, 0.0, -4.0, 1.45, 0.0, 0.0, 0.0, 6.0);
    assert_eq!(extent(diagonal, &[("C", [0.0; 3])]), Extent::Periodic(1));
}

/// The mode e_i = √m_i (push + turn × arm_i) exp(−2πi q·(x_i + R_i)) of one molecule, zero on the
/// others.
fn rigid_mode(
    crystal: &Crystal,
    molecule: &Molecule,
    q_frac: &Vector3<f64>,
    push: &Vector3<f64>,
    turn: &Vector3<f64>,
) -> Vec<c64> {
    let mut mode = vec![c64::new(0.0, 0.0); 3 * crystal.atom_count()];
    for member in molecule.members() {
        let position = whole_position(crystal, member);
        let arm = crystal.cartesian(&(position - molecule.centre()));
        let root = crystal.masses_u()[member.atom].sqrt();
        let phase = c64::from_polar(root, -2.0 * PI * q_frac.dot(&position));
        let moved = push + turn.cross(&arm);
        for axis in 0..3 {
            mode[3 * member.atom + axis] = phase * moved[axis];
        }
    }
    mode
}

#[test]
fn rigid_motions_are_external_at_any_wave_vector() {
    let crystal = mixture();
    let molecules = Molecules::find(&crystal, TOLERANCE_ANG);
    let push = Vector3::new(0.3, -0.8, 0.5);
    let turn = Vector3::new(-0.6, 0.2, 0.9);
    for q in [Vector3::zeros(), Vector3::new(0.31, -0.17, 0.45)] {
        for molecule in molecules.molecules() {
            let mode = rigid_mode(&crystal, molecule, &q, &push, &turn);
            let fraction = molecules.external_fraction(&crystal, &q, &mode);
            assert!((fraction - 1.0).abs() < 1e-12, "{fraction}");
        }
    }
    // Read at another wave vector, the same components bend the molecule.
    let q = Vector3::new(0.31, -0.17, 0.45);
    let water = &molecules.molecules()[0];
    let mode = rigid_mode(&crystal, water, &q, &Vector3::zeros(), &turn);
    let elsewhere = q + Vector3::new(3.0, 0.0, 0.0);
    let fraction = molecules.external_fraction(&crystal, &elsewhere, &mode);
    assert!(fraction < 0.8, "{fraction}");
}

#[test]
fn stretching_is_internal() {
    let crystal = mixture();
    let molecules = Molecules::find(&crystal, TOLERANCE_ANG);
    let mut mode = vec![c64::new(0.0, 0.0); 21];
    // Both oxygens of the linear molecule outwards along z.
    mode[3 * 4 + 2] = c64::new(0.0, 1.0);
    mode[3 * 5 + 2] = c64::new(0.0, -1.0);
    let fraction = molecules.external_fraction(&crystal, &Vector3::zeros(), &mode);
    assert!(fraction.abs() < 1e-12);
    let nothing = vec![c64::new(0.0, 0.0); 21];
    let fraction = molecules.external_fraction(&crystal, &Vector3::zeros(), &nothing);
    assert!(fraction.abs() < 1e-12);
}

/// Σ of the external fraction over the unit vectors: the dimension of the space of rigid motions.
fn external_dimension(crystal: &Crystal, q_frac: &Vector3<f64>) -> f64 {
    let molecules = Molecules::find(crystal, TOLERANCE_ANG);
    let order = 3 * crystal.atom_count();
    (0..order)
        .map(|k| {
            let mut unit = vec![c64::new(0.0, 0.0); order];
            unit[k] = c64::new(0.6, 0.8);
            molecules.external_fraction(crystal, q_frac, &unit)
        })
        .sum()
}

#[test]
fn rigid_motions_number_six_five_or_three() {
    let q = Vector3::new(0.1, 0.2, -0.3);
    assert!((external_dimension(&mixture(), &q) - (6.0 + 5.0 + 3.0)).abs() < 1e-10);
    let bent = |height: f64| {
        let cell = Matrix3::identity() * 9.0;
        let atoms = [
            ("C", [0.0, height, 0.0]),
            ("O", [1.16, 0.0, 0.0]),
            ("O", [-1.16, 0.0, 0.0]),
        ];
        external_dimension(&wrapped(cell, &atoms), &q)
    };
    // Noise of a relaxation does not make a linear molecule bent; a real bend does.
    assert!((bent(0.01) - 5.0).abs() < 1e-10);
    assert!((bent(0.3) - 6.0).abs() < 1e-10);
    let chain = wrapped(
        Matrix3::from_diagonal(&Vector3::new(2.5, 6.0, 7.0)),
        &[("C", [0.0, 0.4, 0.0]), ("C", [1.25, -0.4, 0.0])],
    );
    assert!((external_dimension(&chain, &q) - 4.0).abs() < 1e-10);
    let framework = wrapped(Matrix3::identity() * 1.5, &[("C", [0.0; 3])]);
    assert!((external_dimension(&framework, &q) - 3.0).abs() < 1e-10);
}

/// Components that look random but are the same everywhere.
fn scrambled(order: usize) -> Vec<c64> {
    (0..order)
        .map(|k| c64::new((1.7 * k as f64).sin(), (2.9 * k as f64 + 0.4).cos()))
        .collect()
}

/// What must not depend on how a crystal is written: formulas, centre distance, external fraction.
fn description(crystal: &Crystal, q_frac: &Vector3<f64>, mode: &[c64]) -> (Vec<String>, f64, f64) {
    let molecules = Molecules::find(crystal, TOLERANCE_ANG);
    let mut formulas: Vec<String> = molecules
        .molecules()
        .iter()
        .map(Molecule::hill_formula)
        .collect();
    formulas.sort();
    (
        formulas,
        molecules.nearest_centre_distance_ang(),
        molecules.external_fraction(crystal, q_frac, mode),
    )
}

fn assert_same_description(a: &(Vec<String>, f64, f64), b: &(Vec<String>, f64, f64)) {
    assert_eq!(a.0, b.0);
    assert!(
        (a.1 - b.1).abs() < 1e-10 && (a.2 - b.2).abs() < 1e-10,
        "{a:?} {b:?}"
    );
}

#[test]
fn the_way_a_crystal_is_written_does_not_matter() {
    let crystal = mixture();
    let q = Vector3::new(0.23, -0.41, 0.12);
    let mode = scrambled(21);
    let expected = description(&crystal, &q, &mode);
    assert!(expected.2 > 0.1 && expected.2 < 0.95);

    // Other images of the atoms; in the atom-phase form the eigenvector stays.
    let shifts = [
        [1, 0, 0],
        [0, -2, 0],
        [0, 0, 3],
        [-1, 1, 0],
        [0; 3],
        [2, 2, 2],
        [5, 0, -5],
    ];
    let moved = crystal
        .positions()
        .iter()
        .zip(shifts)
        .map(|(x, shift)| x + Vector3::from(shift.map(f64::from)))
        .collect();
    let moved = crystal.with_positions(moved).unwrap();
    assert_same_description(&description(&moved, &q, &mode), &expected);

    // Another, very skewed cell of the same lattice: rows P·cell, x → P⁻ᵀx, q → Pq.
    let choice = Matrix3::new(1.0, 7.0, 0.0, 0.0, 1.0, 0.0, -9.0, 4.0, 1.0);
    let inverse = choice.try_inverse().unwrap();
    let positions = crystal
        .positions()
        .iter()
        .map(|x| inverse.tr_mul(x))
        .collect();
    let elements = crystal.elements().to_vec();
    let skewed = Crystal::new(choice * crystal.cell(), elements, positions, None).unwrap();
    assert_same_description(&description(&skewed, &(choice * q), &mode), &expected);

    // Other order of the atoms.
    let order = [6, 2, 4, 0, 5, 3, 1];
    let permuted = Crystal::new(
        *crystal.cell(),
        order.iter().map(|&i| crystal.elements()[i]).collect(),
        order.iter().map(|&i| crystal.positions()[i]).collect(),
        None,
    )
    .unwrap();
    let components: Vec<c64> = order
        .iter()
        .flat_map(|&i| [0, 1, 2].map(|axis| mode[3 * i + axis]))
        .collect();
    assert_same_description(&description(&permuted, &q, &components), &expected);
}

#[test]
fn acoustic_overlap_finds_translations_only() {
    let masses = [16.0, 1.0, 1.0];
    let scale = c64::from_polar(0.3, 1.1);
    let rigid: Vec<c64> = masses
        .iter()
        .flat_map(|m: &f64| [0.2, -0.5, 0.9].map(|t| scale * (t * m.sqrt())))
        .collect();
    assert!((acoustic_overlap(&masses, &rigid) - 1.0).abs() < 1e-14);
    let zero = c64::new(0.0, 0.0);
    let mut opposed = vec![zero; 9];
    opposed[3] = c64::new(1.0, 0.0);
    opposed[6] = c64::new(-1.0, 0.0);
    assert!(acoustic_overlap(&masses, &opposed) < 1e-14);
    let mut single = vec![zero; 9];
    single[1] = c64::new(0.0, 2.0);
    assert!((acoustic_overlap(&masses, &single) - 16.0 / 18.0).abs() < 1e-14);
}
