//! The service's eigenvalues and eigenvectors against another solver (nalgebra's QR iteration), and the real form of
//! centrosymmetric crystals against the complex one.

use nalgebra::{Complex, DMatrix, Vector3};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use tarehouse_demo_data::RealSpaceConstants;
use tarehouse_demo_data::forms::{DROSMELIDE_II, DROSMELIDE_III, PELQUONOL_ALPHA, PELQUONOL_BETA};
use tarehouse_demo_data::scenario::diagonal_supercell;
use tarehouse_physics::c64;
use tarehouse_physics::dynamics::{Dynamics, MatrixForm, Modes, Sharing};
use tarehouse_physics::images::PairImages;
use tarehouse_physics::projection::projected;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_tests::models::metals::Metal;

use crate::reference::assert_near;
use crate::service::{TIE_TOLERANCE_ANG, diagonal, dynamics};

/// Wave vectors: Γ, a zone-boundary point, and general ones.
const WAVE_VECTORS: [[f64; 3]; 4] = [
    [0.0, 0.0, 0.0],
    [0.5, 0.0, 0.5],
    [0.13, -0.27, 0.41],
    [-0.05, 0.33, 0.02],
];

fn by_nalgebra(order: usize, matrix: &[c64]) -> Vec<f64> {
    let dense = DMatrix::from_fn(order, order, |r, c| {
        let entry = matrix[r * order + c];
        Complex::new(entry.re, entry.im)
    });
    let mut values: Vec<f64> = dense.symmetric_eigenvalues().iter().copied().collect();
    values.sort_by(f64::total_cmp);
    values
}

fn largest(values: &[f64]) -> f64 {
    values.iter().fold(0.0, |m, x| m.max(x.abs()))
}

#[track_caller]
fn assert_same(what: &str, found: &[f64], expected: &[f64], relative: f64) {
    assert_eq!(found.len(), expected.len(), "{what}");
    let scale = largest(expected);
    for (found, expected) in found.iter().zip(expected) {
        assert_near(what, *found, *expected, 0.0, relative * scale);
    }
}

#[test]
fn random_matrices_have_the_eigenvalues_of_another_solver() {
    let mut rng = ChaCha8Rng::seed_from_u64(11);
    for order in [1, 2, 3, 7, 24, 60, 96] {
        let mut draw = || rng.random_range(-1.0..1.0_f64);
        let mut complex = vec![c64::new(0.0, 0.0); order * order];
        for row in 0..order {
            for column in 0..row {
                let entry = c64::new(draw(), draw());
                complex[row * order + column] = entry;
                complex[column * order + row] = entry.conj();
            }
            complex[row * order + row] = c64::new(draw(), 0.0);
        }
        let real: Vec<f64> = complex.iter().map(|z| z.re).collect();
        let as_complex: Vec<c64> = real.iter().map(|x| c64::new(*x, 0.0)).collect();
        let expected = by_nalgebra(order, &complex);
        let found = MatrixForm::Complex(complex).eigenvalues(order).unwrap();
        assert_same("Hermitian", &found, &expected, 1e-13);
        let found = MatrixForm::Real(real).eigenvalues(order).unwrap();
        assert_same("symmetric", &found, &by_nalgebra(order, &as_complex), 1e-13);
    }
}

/// Complex and real dynamics of the centrosymmetric forms, of two compounds and three space groups.
fn centrosymmetric() -> Vec<(Dynamics, Dynamics)> {
    [
        (DROSMELIDE_II, [2, 1, 1]),
        (DROSMELIDE_III, [1, 2, 1]),
        (PELQUONOL_ALPHA, [2, 2, 1]),
        (PELQUONOL_BETA, [2, 2, 2]),
    ]
    .into_iter()
    .map(|(form, counts)| {
        let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
        let group = SpaceGroup::find(exact.crystal(), 1e-3).unwrap();
        let crystal = group.symmetrised(exact.crystal());
        let supercell = diagonal_supercell(counts).unwrap();
        let constants = projected(&exact.folded(&supercell).unwrap(), &group);
        let images = PairImages::find(&crystal, &supercell, TIE_TOLERANCE_ANG);
        let inversion = group.inversion().unwrap();
        let real = Dynamics::with_inversion(&crystal, &constants, &images, inversion);
        (Dynamics::new(&crystal, &constants, &images), real)
    })
    .collect()
}

/// Largest |D e − λ e|, and largest |eᵢ†eⱼ − δᵢⱼ|.
fn residuals(matrix: &[c64], modes: &Modes) -> (f64, f64) {
    let order = modes.eigenvalues.len();
    let (mut equation, mut orthogonality) = (0.0_f64, 0.0_f64);
    for (branch, value) in modes.eigenvalues.iter().enumerate() {
        let vector = modes.vector(branch);
        for row in 0..order {
            let image: c64 = (0..order)
                .map(|c| matrix[row * order + c] * vector[c])
                .sum();
            equation = equation.max((image - vector[row] * *value).norm());
        }
        for other in 0..order {
            let product: c64 = vector
                .iter()
                .zip(modes.vector(other))
                .map(|(x, y)| x.conj() * y)
                .sum();
            let expected = if branch == other { 1.0 } else { 0.0 };
            orthogonality = orthogonality.max((product - expected).norm());
        }
    }
    (equation, orthogonality)
}

#[test]
fn dynamical_matrices_have_the_eigenvalues_of_another_solver() {
    for (complex, _) in centrosymmetric() {
        for q in WAVE_VECTORS.map(Vector3::from) {
            let expected = by_nalgebra(complex.branch_count(), &complex.matrix(&q));
            assert_same("D(q)", &complex.eigenvalues(&q).unwrap(), &expected, 1e-13);
        }
    }
    let lead = dynamics(&Metal::all()["Pb_100K_general6"].model(), diagonal(4));
    for q in WAVE_VECTORS.map(Vector3::from) {
        let expected = by_nalgebra(3, &lead.matrix(&q));
        assert_same("Pb", &lead.eigenvalues(&q).unwrap(), &expected, 1e-13);
    }
}

#[test]
fn real_form_has_the_eigenvalues_of_the_complex_matrix() {
    for (complex, real) in centrosymmetric() {
        for q in WAVE_VECTORS.map(Vector3::from) {
            assert!(matches!(
                real.form(&q, Sharing::Nearest),
                MatrixForm::Real(_)
            ));
            assert!(matches!(
                complex.form(&q, Sharing::Nearest),
                MatrixForm::Complex(_)
            ));
            let expected = complex.eigenvalues(&q).unwrap();
            assert_same(
                "real form",
                &real.eigenvalues(&q).unwrap(),
                &expected,
                1e-12,
            );
        }
    }
}

#[test]
fn modes_satisfy_the_complex_eigenvalue_equation() {
    for (complex, real) in centrosymmetric() {
        for q in WAVE_VECTORS.map(Vector3::from) {
            let matrix = complex.matrix(&q);
            for dynamics in [&complex, &real] {
                let modes = dynamics.modes(&q).unwrap();
                let (equation, orthogonality) = residuals(&matrix, &modes);
                let scale = largest(&modes.eigenvalues);
                assert!(equation < 1e-12 * scale, "{equation:e} of {scale}");
                assert!(orthogonality < 1e-12, "{orthogonality:e}");
            }
        }
    }
}
