//! Polar crystals: lattice sums against Madelung constants, energies and supercells; the splitting of longitudinal and
//! transverse modes in closed form; and what separating the dipole–dipole part does for interpolation.

use std::sync::Arc;

use nalgebra::{Complex, DMatrix, Matrix3, Vector3};
use tarehouse_physics::dipoles::{Dipoles, EffectiveCharges, neutrality_residual};
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::ewald::Ewald;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::COULOMB_EV_ANGSTROM;
use tarehouse_physics::{Crystal, Element, ForceConstants, Supercell};
use tarehouse_tests::models::SpringCrystal;

use crate::reference::assert_near;
use crate::service::{MeshModes, TIE_TOLERANCE_ANG, diagonal};

/// Cube edge of the rigid-ion lattices, Å.
const EDGE_ANG: f64 = 5.6;

fn crystal(cell: Matrix3<f64>, elements: &[&str], positions: &[[f64; 3]]) -> Crystal {
    let elements = elements.iter().map(|s| Element::from_symbol(s).unwrap());
    let positions = positions.iter().map(|x| Vector3::from(*x)).collect();
    Crystal::new(cell, elements.collect(), positions, None).unwrap()
}

fn face_centred() -> Matrix3<f64> {
    Matrix3::new(0.0, 1.0, 1.0, 1.0, 0.0, 1.0, 1.0, 1.0, 0.0) * (0.5 * EDGE_ANG)
}

fn rock_salt() -> Crystal {
    crystal(face_centred(), &["Na", "Cl"], &[[0.0; 3], [0.5; 3]])
}

/// Three ions of no symmetry, with charges and a medium of none either.
fn skew() -> (Crystal, EffectiveCharges) {
    let cell = Matrix3::new(4.1, 0.2, -0.3, 0.6, 4.6, 0.1, -0.4, 0.9, 5.2);
    let positions = [[0.03, 0.0, 0.1], [0.48, 0.55, 0.4], [1.2, -0.35, 0.72]];
    let crystal = crystal(cell, &["Na", "O", "Cl"], &positions);
    let first = Matrix3::new(1.3, 0.1, -0.2, 0.05, 1.1, 0.15, 0.0, -0.1, 0.9);
    let second = Matrix3::new(-0.7, 0.0, 0.2, 0.1, -0.5, 0.0, 0.05, 0.12, -0.4);
    let medium = Matrix3::new(2.6, 0.2, -0.1, 0.2, 2.1, 0.3, -0.1, 0.3, 3.4);
    let charges = EffectiveCharges {
        charges: vec![first, second, -first - second],
        permittivity: medium,
    };
    (crystal, charges)
}

fn rigid(charges: &[f64], permittivity: f64) -> EffectiveCharges {
    EffectiveCharges {
        charges: charges.iter().map(|z| Matrix3::identity() * *z).collect(),
        permittivity: Matrix3::identity() * permittivity,
    }
}

/// C(q) as a matrix, eV/Å².
fn whole(dipoles: &Dipoles, q: &Vector3<f64>) -> DMatrix<Complex<f64>> {
    let n = dipoles.atom_count();
    let rows = dipoles.rows(q, &(0..n).collect::<Vec<_>>());
    DMatrix::from_fn(3 * n, 3 * n, |r, c| rows[r * 3 * n + c])
}

fn largest(matrix: &DMatrix<Complex<f64>>) -> f64 {
    matrix.iter().map(|x| x.norm()).fold(0.0, f64::max)
}

#[test]
fn coulomb_constant() {
    // CODATA 2022: 14.399 645 468 eV Å (E_h a₀).
    assert_near("k", COULOMB_EV_ANGSTROM, 14.399_645_468_683_7, 1e-12, 0.0);
}

/// Madelung constants per nearest distance: NaCl, CsCl, ZnS; `check-values.md`, C9 (Ewald sums there, and the values of
/// textbooks, e.g. Kittel, Introduction to Solid State Physics, ch. 3).
#[test]
fn rigid_ion_lattices_have_their_madelung_constants() {
    let cube = Matrix3::identity() * EDGE_ANG;
    let root3 = 3.0_f64.sqrt();
    let cases = [
        (
            face_centred(),
            [0.5; 3],
            0.5 * EDGE_ANG,
            1.747_564_594_633_2,
        ),
        (cube, [0.5; 3], 0.5 * root3 * EDGE_ANG, 1.762_674_773_071_0),
        (
            face_centred(),
            [0.25; 3],
            0.25 * root3 * EDGE_ANG,
            1.638_055_053_388_8,
        ),
    ];
    for (cell, second, nearest, madelung) in cases {
        let crystal = crystal(cell, &["Na", "Cl"], &[[0.0; 3], second]);
        for width in [0.8, 1.5, 2.5] {
            let ewald = Ewald::new(&crystal, &Matrix3::identity(), width).unwrap();
            let positions: Vec<_> = crystal
                .positions()
                .iter()
                .map(|x| crystal.cartesian(x))
                .collect();
            let energy = ewald.charge_energy_ev(&[1.0, -1.0], &positions);
            let found = -energy * nearest / COULOMB_EV_ANGSTROM;
            assert_near("Madelung", found, madelung, 1e-12, 0.0);
        }
    }
}

#[test]
fn constants_of_charges_are_second_differences_of_their_energy() {
    let (crystal, skew_charges) = skew();
    let ions = [1.2, -0.5, -0.7];
    let charges = EffectiveCharges {
        permittivity: skew_charges.permittivity,
        ..rigid(&ions, 1.0)
    };
    let found = whole(
        &Dipoles::new(&crystal, &charges).unwrap(),
        &Vector3::zeros(),
    );
    let ewald = Ewald::new(&crystal, &charges.permittivity, 1.5).unwrap();
    let start: Vec<_> = crystal
        .positions()
        .iter()
        .map(|x| crystal.cartesian(x))
        .collect();
    let step = 2e-3;
    let energy = |moves: [(usize, f64); 2]| {
        let mut positions = start.clone();
        for (component, length) in moves {
            positions[component / 3][component % 3] += length;
        }
        ewald.charge_energy_ev(&ions, &positions)
    };
    let scale = largest(&found);
    for row in 0..9 {
        for column in 0..9 {
            let corner = |a: f64, b: f64| energy([(row, a * step), (column, b * step)]);
            let mixed =
                corner(1.0, 1.0) - corner(1.0, -1.0) - corner(-1.0, 1.0) + corner(-1.0, -1.0);
            let expected = mixed / (4.0 * step * step);
            assert_near("∂²E", found[(row, column)].re, expected, 0.0, 1e-5 * scale);
        }
    }
}

#[test]
fn sums_do_not_depend_on_the_width() {
    let (crystal, charges) = skew();
    for q in [
        [0.0; 3],
        [0.5, 0.0, 0.0],
        [0.21, -0.43, 0.37],
        [1e-3, 0.0, 0.0],
    ] {
        let q = Vector3::from(q);
        let reference = whole(&Dipoles::with_width(&crystal, &charges, 1.5).unwrap(), &q);
        for width in [0.9, 2.2] {
            let other = whole(&Dipoles::with_width(&crystal, &charges, width).unwrap(), &q);
            assert!(largest(&(&other - &reference)) < 1e-12 * largest(&reference));
        }
    }
}

#[test]
fn sums_are_hermitian_periodic_and_translation_free() {
    let (crystal, charges) = skew();
    let dipoles = Dipoles::new(&crystal, &charges).unwrap();
    let q = Vector3::new(0.31, -0.12, 0.44);
    let (here, there) = (whole(&dipoles, &q), whole(&dipoles, &-q));
    let scale = largest(&here);
    assert!(largest(&(&here - here.adjoint())) < 1e-13 * scale);
    assert!(largest(&(&here - there.map(|x| x.conj()))) < 1e-13 * scale);
    let g = Vector3::new(1.0, -2.0, 1.0);
    let moved = whole(&dipoles, &(q + g));
    let x = crystal.positions();
    for (index, value) in moved.iter().enumerate() {
        let (row, column) = (index % 9, index / 9);
        let turn = std::f64::consts::TAU * g.dot(&(x[column / 3] - x[row / 3]));
        let expected = here[(row, column)] * Complex::from_polar(1.0, turn);
        assert!((value - expected).norm() < 1e-12 * scale);
    }
    // Isotropic charges leave a symmetric self term: then the sum vanishes by itself.
    let ions = rigid(&[1.2, -0.5, -0.7], 2.0);
    let gamma = whole(&Dipoles::new(&crystal, &ions).unwrap(), &Vector3::zeros());
    for row in 0..9 {
        for axis in 0..3 {
            let sum: Complex<f64> = (0..3).map(|j| gamma[(row, 3 * j + axis)]).sum();
            assert!(sum.norm() < 1e-12 * scale, "{sum}");
        }
    }
}

/// Lorentz: in a cubic lattice without macroscopic field the dipoles of one sublattice make the field (4π/3) P at the
/// sites of the other; no direction is singled out.
#[test]
fn cubic_rigid_ions_feel_no_field_of_their_own() {
    let dipoles = Dipoles::new(&rock_salt(), &rigid(&[1.0, -1.0], 1.0)).unwrap();
    let gamma = whole(&dipoles, &Vector3::zeros());
    // With Z₁ = −Z₂ the attraction −(4πk/3V) Z₁Z₂ is positive, and the self term balances it.
    let lorentz = dipoles.field_factor() / 3.0;
    for a in 0..3 {
        for b in 0..3 {
            let expected = if a == b { lorentz } else { 0.0 };
            assert_near(
                "C₁₂",
                gamma[(a, 3 + b)].re,
                expected,
                1e-12,
                1e-12 * lorentz,
            );
            assert_near("C₁₁", gamma[(a, b)].re, -expected, 1e-12, 1e-12 * lorentz);
        }
    }
    // In vacuum at any q ≠ 0 a charge meets no others' charge density: the trace of C vanishes but for the self term.
    let q = whole(&dipoles, &Vector3::new(0.3, 0.1, -0.2));
    let trace: f64 = (0..3).map(|a| q[(a, a)].re).sum();
    assert_near("trace", trace, 0.0, 0.0, 1e-11 * lorentz);
}

/// Constants of a supercell, and those of the same atoms taken as one cell.
#[test]
fn folded_part_is_that_of_the_supercell_at_gamma() {
    let (small, charges) = skew();
    let supercell =
        Supercell::with_default_translations([[2, 1, 0], [0, 2, 0], [1, 0, 1]]).unwrap();
    let folded = Dipoles::new(&small, &charges).unwrap().folded(&supercell);
    let (cells, n) = (supercell.cell_count(), small.atom_count());
    let to_large = supercell.matrix_f64().try_inverse().unwrap();
    let positions = supercell.translations().iter().flat_map(|t| {
        let origin = Vector3::from(t.map(|x| x as f64));
        let place = move |x: &Vector3<f64>| to_large.tr_mul(&(x + origin));
        small.positions().iter().map(place).collect::<Vec<_>>()
    });
    let large = Crystal::new(
        supercell.vectors(small.cell()),
        small.elements().repeat(cells),
        positions.collect(),
        None,
    )
    .unwrap();
    let all = EffectiveCharges {
        charges: charges.charges.repeat(cells),
        ..charges
    };
    let gamma = whole(&Dipoles::new(&large, &all).unwrap(), &Vector3::zeros());
    let scale = largest(&gamma);
    for l in 0..cells {
        for (i, j) in (0..n).flat_map(|i| (0..n).map(move |j| (i, j))) {
            let block = folded.block(l, i, j);
            for (a, b) in (0..3).flat_map(|a| (0..3).map(move |b| (a, b))) {
                let home = supercell.index_of(&[0, 0, 0]);
                let found = gamma[(3 * (home * n + i) + a, 3 * (l * n + j) + b)];
                assert_near("Φ", block[(a, b)], found.re, 0.0, 1e-12 * scale);
            }
        }
    }
}

/// A crystal of springs and dipoles whose D(q) is the sum of both.
struct PolarCrystal {
    springs: SpringCrystal,
    dipoles: Arc<Dipoles>,
}

impl PolarCrystal {
    /// Springs to neighbours nearer than `reach_ang`, stiffer the nearer, and sideways a fifth as stiff.
    fn new(crystal: &Crystal, charges: &EffectiveCharges, reach_ang: f64, stiffness: f64) -> Self {
        let dipoles = Arc::new(Dipoles::new(crystal, charges).unwrap());
        let mut springs = SpringCrystal::new(crystal.clone());
        let x = crystal.positions();
        for (i, j) in (0..x.len()).flat_map(|i| (0..x.len()).map(move |j| (i, j))) {
            for index in 0..343_i64 {
                let t = [index / 49 - 3, index / 7 % 7 - 3, index % 7 - 3];
                let cell = Vector3::from(t.map(|c| c as f64));
                let d = crystal.cartesian(&(x[j] - x[i] + cell));
                let once = (t, i, j) > (t.map(|c| -c), j, i);
                if once && d.norm() < reach_ang {
                    let u = d.normalize();
                    let k = Matrix3::identity() * 0.2 + u * u.transpose() * 0.8;
                    springs.tie(i, j, t, &(k * (stiffness * (2.5 / d.norm()).powi(6))));
                }
            }
        }
        Self { springs, dipoles }
    }

    fn crystal(&self) -> &Crystal {
        self.springs.crystal()
    }

    fn constants(&self, supercell: [[i64; 3]; 3]) -> ForceConstants {
        let springs = self.springs.constants(supercell);
        let folded = self.dipoles.folded(springs.supercell());
        springs.map_blocks(|flat, block| block + folded.blocks()[flat])
    }

    fn plain(&self, constants: &ForceConstants) -> Dynamics {
        let images = PairImages::find(self.crystal(), constants.supercell(), TIE_TOLERANCE_ANG);
        Dynamics::new(self.crystal(), constants, &images)
    }

    fn separating(&self, supercell: [[i64; 3]; 3]) -> Dynamics {
        let constants = self.constants(supercell);
        let folded = self.dipoles.folded(constants.supercell());
        self.plain(&constants).separating(&self.dipoles, &folded)
    }

    fn exact(&self, q: &Vector3<f64>) -> DMatrix<Complex<f64>> {
        let masses = self.crystal().masses_u();
        let dipoles = whole(&self.dipoles, q);
        let mut matrix = self.springs.dynamical_matrix(q);
        for (index, value) in matrix.iter_mut().enumerate() {
            let order = dipoles.nrows();
            let (row, column) = (index % order, index / order);
            *value += dipoles[(row, column)] / (masses[row / 3] * masses[column / 3]).sqrt();
        }
        matrix
    }

    /// Largest error of D(q) relative to its largest element.
    fn error(&self, dynamics: &Dynamics, q: &Vector3<f64>) -> f64 {
        let exact = self.exact(q);
        let found = dynamics.matrix(q);
        let order = exact.nrows();
        let differs = |(k, x): (usize, &Complex<f64>)| (x - exact[(k / order, k % order)]).norm();
        let worst = found.iter().enumerate().map(differs).fold(0.0, f64::max);
        worst / largest(&exact)
    }
}

fn skew_polar() -> PolarCrystal {
    let (crystal, charges) = skew();
    PolarCrystal::new(&crystal, &charges, 4.0, 6.0)
}

fn rock_salt_polar(permittivity: f64) -> PolarCrystal {
    PolarCrystal::new(&rock_salt(), &rigid(&[1.1, -1.1], permittivity), 4.1, 3.0)
}

#[test]
fn separated_interpolation_is_exact_where_it_fits_and_far_better_in_between() {
    let between = [
        [0.13, -0.31, 0.22],
        [0.25, 0.25, 0.1],
        [0.07, 0.0, 0.0],
        [0.4, 0.15, -0.05],
    ];
    for model in [skew_polar(), rock_salt_polar(2.3)] {
        for matrix in [diagonal(2), diagonal(3), [[2, 1, 0], [0, 2, 0], [0, 0, 3]]] {
            let constants = model.constants(matrix);
            let (plain, separated) = (model.plain(&constants), model.separating(matrix));
            for q in constants.supercell().commensurate_points() {
                assert!(model.error(&separated, &q) < 1e-10, "{q:?}");
            }
            let worst = |dynamics: &Dynamics| {
                let errors = between
                    .iter()
                    .map(|q| model.error(dynamics, &Vector3::from(*q)));
                errors.fold(0.0, f64::max)
            };
            // Springs are short, so that what is left is the aliasing of springs in a narrow supercell.
            assert!(worst(&plain) > 5e-2, "{matrix:?}");
            assert!(worst(&separated) < 0.15 * worst(&plain), "{matrix:?}");
            if matrix[0][1] == 0 {
                assert!(worst(&separated) < 1e-12, "{matrix:?}");
            }
        }
    }
}

/// ω_LO² − ω_TO² = 4πk Z²/(V μ ε∞) and ω_LO²/ω_TO² = ε₀/ε∞ (Lyddane, Sachs & Teller, Phys. Rev. 59, 673 (1941)), the same in
/// every direction of a cubic crystal.
#[test]
fn rock_salt_splits_as_lyddane_sachs_and_teller_say() {
    let permittivity = 2.3;
    let model = rock_salt_polar(permittivity);
    let acoustic = AcousticMatrix::new(&model.separating(diagonal(3))).unwrap();
    let transverse = acoustic.optical_modes().eigenvalues;
    let masses = model.crystal().masses_u();
    let reduced_mass = masses[0] * masses[1] / (masses[0] + masses[1]);
    let split = model.dipoles.field_factor() * 1.1_f64.powi(2) / (reduced_mass * permittivity);
    for direction in [[1.0, 0.0, 0.0], [1.0, 1.0, 1.0], [0.3, -0.7, 2.0]] {
        let modes = acoustic.optical_along(&Vector3::from(direction));
        assert_eq!(modes.len(), 3);
        assert_near("ω_TO²", modes[0], transverse[0], 1e-10, 0.0);
        assert_near("ω_TO²", modes[1], transverse[0], 1e-10, 0.0);
        assert_near("ω_LO²", modes[2] - transverse[0], split, 1e-10, 0.0);
        let at_rest = acoustic.field().unwrap().static_permittivity()[(0, 0)];
        let ratio = modes[2] / modes[0];
        assert_near("ω_LO²/ω_TO²", ratio, at_rest / permittivity, 1e-10, 0.0);
    }
}

/// At fixed spacing the error falls as its fifth power, as without a field; free energies per cell in eV.
#[test]
fn free_energy_of_a_polar_crystal_converges_with_the_mesh() {
    let model = rock_salt_polar(2.3);
    let group = SpaceGroup::trivial(model.crystal());
    let dynamics = model.separating(diagonal(3));
    let at = |n: u32| {
        let modes = MeshModes::on(&dynamics, [n; 3], &group);
        modes.state(300.0).free_energy
    };
    let fine = at(18);
    assert_near("F(6)", at(6), fine, 0.0, 3e-6);
    assert_near("F(12)", at(12), fine, 0.0, 1e-7);
}

#[test]
fn charges_are_made_neutral_and_symmetric_and_a_bad_medium_is_refused() {
    let crystal = rock_salt();
    let group = SpaceGroup::find(&crystal, 1e-3).unwrap();
    let mut tilted = Matrix3::identity() * 1.2;
    tilted[(0, 1)] = 0.1;
    let given = [tilted, Matrix3::identity() * -1.0];
    assert!(neutrality_residual(&given) > 0.05);
    let used = EffectiveCharges::projected(&given, &(Matrix3::identity() * 2.0), &group);
    assert!(neutrality_residual(&used.charges) < 1e-15);
    let expected = Matrix3::identity() * 1.1;
    assert!((used.charges[0] - expected).norm() < 1e-12);
    assert!((used.charges[1] + expected).norm() < 1e-12);
    let bad = Matrix3::from_diagonal(&Vector3::new(2.0, -1.0, 2.0));
    assert!(Ewald::new(&crystal, &bad, 1.0).is_err());
}
