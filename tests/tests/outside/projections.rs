//! The projections of force constants against dense least squares: the constraints written out as a matrix M, and the
//! nearest solution A − M⁺M A from its singular value decomposition.

use nalgebra::{DMatrix, DVector, Matrix3, SVD, Vector3};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::projection::{
    RotationSum, pair_symmetric, projected, rotation_free, space_group_symmetric, translation_free,
};
use tarehouse_physics::symmetry::{Operation, SpaceGroup};
use tarehouse_physics::{Crystal, Element, ForceConstants, Supercell};

use crate::service::TIE_TOLERANCE_ANG;

struct Case {
    crystal: Crystal,
    group: SpaceGroup,
    supercell: Supercell,
    images: PairImages,
}

impl Case {
    fn new(
        cell: [[f64; 3]; 3],
        atoms: &[(&str, [f64; 3])],
        group_number: u32,
        supercell: [[i64; 3]; 3],
    ) -> Self {
        let element = |symbol| Element::from_symbol(symbol).unwrap();
        let elements = atoms.iter().map(|(symbol, _)| element(symbol)).collect();
        let positions = atoms.iter().map(|(_, x)| Vector3::from(*x)).collect();
        let cell = Matrix3::from_fn(|r, c| cell[r][c]);
        let crystal = Crystal::new(cell, elements, positions, None).unwrap();
        let group = SpaceGroup::find(&crystal, 1e-4).unwrap();
        assert_eq!(group.number, group_number);
        let supercell = Supercell::with_default_translations(supercell).unwrap();
        let images = PairImages::find(&crystal, &supercell, TIE_TOLERANCE_ANG);
        Self {
            crystal,
            group,
            supercell,
            images,
        }
    }

    fn atom_count(&self) -> usize {
        self.crystal.atom_count()
    }

    /// Number of constants.
    fn order(&self) -> usize {
        9 * self.supercell.cell_count() * self.atom_count().pow(2)
    }

    /// Place of Φ[l,i,j]_ab in the vector of constants.
    fn place(&self, cell: usize, i: usize, j: usize, a: usize, b: usize) -> usize {
        let n = self.atom_count();
        ((cell * n + i) * n + j) * 9 + 3 * a + b
    }

    fn random(&self, seed: u64) -> ForceConstants {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let blocks = (0..self.order() / 9)
            .map(|_| Matrix3::from_fn(|_, _| rng.random_range(-1.0..1.0)))
            .collect();
        ForceConstants::from_blocks(self.supercell.clone(), self.atom_count(), blocks).unwrap()
    }

    /// Calls `visit` for every (l, i, j).
    fn for_each_pair(&self, mut visit: impl FnMut(usize, usize, usize)) {
        let n = self.atom_count();
        for cell in 0..self.supercell.cell_count() {
            for i in 0..n {
                for j in 0..n {
                    visit(cell, i, j);
                }
            }
        }
    }

    fn empty_row(&self) -> DVector<f64> {
        DVector::zeros(self.order())
    }

    /// Rows of Φ[l,i,j]_ab − Φ[−l,j,i]_ba = 0.
    fn pair_rows(&self) -> Vec<DVector<f64>> {
        let mut rows = Vec::new();
        self.for_each_pair(|cell, i, j| {
            for (a, b) in axes() {
                let mut row = self.empty_row();
                row[self.place(cell, i, j, a, b)] += 1.0;
                row[self.place(self.supercell.negative(cell), j, i, b, a)] -= 1.0;
                rows.push(row);
            }
        });
        rows
    }

    /// Rows of Σ_{l,j} Φ[l,i,j] = 0 and Σ_{l,i} Φ[l,i,j] = 0.
    fn translation_rows(&self) -> Vec<DVector<f64>> {
        let n = self.atom_count();
        let mut rows = vec![self.empty_row(); 18 * n];
        self.for_each_pair(|cell, i, j| {
            for (a, b) in axes() {
                let place = self.place(cell, i, j, a, b);
                rows[9 * i + 3 * a + b][place] += 1.0;
                rows[9 * (n + j) + 3 * a + b][place] += 1.0;
            }
        });
        rows
    }

    /// Rows of (C Φ[l,i,j] Cᵀ)_ab − Φ[image]_ab = 0 for the operations that keep the supercell lattice, told by their
    /// Cartesian action on its vectors.
    fn group_rows(&self) -> Vec<DVector<f64>> {
        let mut rows = Vec::new();
        for operation in self.group.operations.iter().filter(|op| self.keeps(op)) {
            self.for_each_pair(|cell, i, j| {
                let (image_cell, image_i, image_j) = self.image(operation, cell, i, j);
                let c = &operation.cartesian;
                for (a, b) in axes() {
                    let mut row = self.empty_row();
                    for (x, y) in axes() {
                        row[self.place(cell, i, j, x, y)] += c[(a, x)] * c[(b, y)];
                    }
                    row[self.place(image_cell, image_i, image_j, a, b)] -= 1.0;
                    rows.push(row);
                }
            });
        }
        rows
    }

    fn keeps(&self, operation: &Operation) -> bool {
        let vectors = self.supercell.vectors(self.crystal.cell());
        let images = vectors * operation.cartesian.transpose();
        let ratio = images * vectors.try_inverse().unwrap();
        ratio.iter().all(|x| (x - x.round()).abs() < 1e-6)
    }

    /// Where an operation takes a pair, found from the positions: the separation is turned and looked up.
    fn image(&self, op: &Operation, cell: usize, i: usize, j: usize) -> (usize, usize, usize) {
        let positions = self.crystal.positions();
        let translation = Vector3::from(self.supercell.translations()[cell].map(|x| x as f64));
        let separation = translation + positions[j] - positions[i];
        let turn = Matrix3::from_fn(|r, c| op.rotation[r][c] as f64);
        let image_i = op.permutation[i];
        let end = positions[image_i] + turn * separation;
        for (image_j, position) in positions.iter().enumerate() {
            let apart = end - position;
            if op.permutation[j] == image_j && apart.iter().all(|x| (x - x.round()).abs() < 1e-6) {
                let whole = [apart.x.round(), apart.y.round(), apart.z.round()];
                let whole = whole.map(|x| {
                    (-99_i32..99)
                        .find(|k| (f64::from(*k) - x).abs() < 0.5)
                        .unwrap()
                });
                return (
                    self.supercell.index_of(&whole.map(i64::from)),
                    image_i,
                    image_j,
                );
            }
        }
        panic!("no image of {i} {j}");
    }

    /// Rows of ρ[i,a,k] = Σ Φ[l,i,j]_ab ε_kbc x_c = 0.
    fn rotation_rows(&self) -> Vec<DVector<f64>> {
        let mut rows = vec![self.empty_row(); 9 * self.atom_count()];
        self.for_each_pair(|cell, i, j| {
            let x = self.images.mean_separation(&self.crystal, cell, i, j);
            for (a, k) in axes() {
                for (b, c) in axes() {
                    let place = self.place(cell, i, j, a, b);
                    rows[9 * i + 3 * a + k][place] += levi_civita(k, b, c) * x[c];
                }
            }
        });
        rows
    }
}

fn axes() -> impl Iterator<Item = (usize, usize)> {
    (0..3).flat_map(|a| (0..3).map(move |b| (a, b)))
}

fn levi_civita(i: usize, j: usize, k: usize) -> f64 {
    match (i, j, k) {
        (0, 1, 2) | (1, 2, 0) | (2, 0, 1) => 1.0,
        (2, 1, 0) | (0, 2, 1) | (1, 0, 2) => -1.0,
        _ => 0.0,
    }
}

fn vector(constants: &ForceConstants) -> DVector<f64> {
    let blocks = constants.blocks().iter();
    let entries = blocks.flat_map(|block| axes().map(|(a, b)| block[(a, b)]));
    DVector::from_vec(entries.collect())
}

/// A − M⁺M A, and how many constraints are independent.
fn nearest(rows: &[DVector<f64>], constants: &DVector<f64>) -> (DVector<f64>, usize) {
    /// Singular values below this share of the largest are none.
    const RANK: f64 = 1e-10;
    let matrix = DMatrix::from_fn(rows.len(), constants.len(), |r, c| rows[r][c]);
    // Right singular vectors of M are those of the triangle of its QR factors.
    let triangle = matrix.qr().r();
    let SVD {
        v_t,
        singular_values,
        ..
    } = SVD::new(triangle, false, true);
    let v_t = v_t.unwrap();
    let least = RANK * singular_values.max();
    let mut solution = constants.clone();
    let mut rank = 0;
    for (k, value) in singular_values.iter().enumerate() {
        if *value > least {
            let direction = v_t.row(k).transpose();
            solution -= &direction * direction.dot(constants);
            rank += 1;
        }
    }
    (solution, rank)
}

#[track_caller]
fn assert_same(what: &str, found: &ForceConstants, expected: &DVector<f64>, tolerance: f64) {
    let error = (vector(found) - expected).amax();
    assert!(error < tolerance, "{what}: {error:e}");
}

/// Four to six atoms, supercells of two to four cells; groups with and without inversion, screws and mirrors, and one
/// whose fourfold axis the supercell breaks.
fn cases() -> Vec<(&'static str, Case)> {
    let triclinic = [[3.1, 0.2, 0.1], [0.4, 3.6, -0.3], [-0.2, 0.5, 4.2]];
    let orthorhombic = [[3.0, 0.0, 0.0], [0.0, 4.1, 0.0], [0.0, 0.0, 5.3]];
    let tetragonal = [[3.7, 0.0, 0.0], [0.0, 3.7, 0.0], [0.0, 0.0, 5.2]];
    let monoclinic = [[4.4, 0.0, 0.0], [0.0, 5.0, 0.0], [-0.8, 0.0, 5.9]];
    let line = [
        ("C", [0.0; 3]),
        ("O", [0.0, 0.0, 0.3]),
        ("S", [0.0, 0.0, 0.62]),
    ];
    let inverted = [
        ("C", [0.11, 0.21, 0.08]),
        ("C", [-0.11, -0.21, -0.08]),
        ("O", [0.34, -0.12, 0.27]),
        ("O", [-0.34, 0.12, -0.27]),
    ];
    let screwed = [
        ("C", [0.11, 0.2, 0.08]),
        ("C", [-0.11, 0.7, -0.08]),
        ("O", [0.31, 0.28, 0.17]),
        ("O", [-0.31, 0.78, -0.17]),
    ];
    let skew = [[1, 1, 0], [-1, 1, 0], [0, 0, 1]];
    let along = |x, y, z| [[x, 0, 0], [0, y, 0], [0, 0, z]];
    vec![
        (
            "triclinic",
            Case::new(triclinic, &inverted, 2, along(1, 1, 2)),
        ),
        (
            "triclinic, three cells",
            Case::new(triclinic, &inverted, 2, along(3, 1, 1)),
        ),
        ("screw", Case::new(monoclinic, &screwed, 4, along(2, 1, 1))),
        (
            "mirrors",
            Case::new(orthorhombic, &line, 25, along(2, 2, 1)),
        ),
        ("fourfold", Case::new(tetragonal, &line, 99, skew)),
        (
            "fourfold, broken",
            Case::new(tetragonal, &line, 99, along(3, 1, 1)),
        ),
    ]
}

#[test]
fn joint_projection_is_the_nearest_solution() {
    for (name, case) in cases() {
        let constants = case.random(5);
        let mut rows = case.pair_rows();
        rows.extend(case.translation_rows());
        rows.extend(case.group_rows());
        let (expected, rank) = nearest(&rows, &vector(&constants));
        assert!(
            rank > case.order() / 2 && rank < case.order(),
            "{name} {rank}"
        );
        assert_same(name, &projected(&constants, &case.group), &expected, 1e-10);
    }
}

#[test]
fn each_projection_is_the_nearest_solution_of_its_own_constraints() {
    for (name, case) in cases() {
        let constants = case.random(6);
        let dense = |rows: &[DVector<f64>]| nearest(rows, &vector(&constants)).0;
        assert_same(
            name,
            &pair_symmetric(&constants),
            &dense(&case.pair_rows()),
            1e-10,
        );
        let sums = dense(&case.translation_rows());
        assert_same(name, &translation_free(&constants), &sums, 1e-10);
        let average = space_group_symmetric(&constants, &case.group);
        assert_same(name, &average, &dense(&case.group_rows()), 1e-10);
    }
}

#[test]
fn rotation_projection_is_the_nearest_solution() {
    for (name, case) in cases() {
        let constants = case.random(7);
        let mut rows = case.pair_rows();
        rows.extend(case.translation_rows());
        rows.extend(case.group_rows());
        rows.extend(case.rotation_rows());
        let (expected, _) = nearest(&rows, &vector(&constants));
        let (crystal, images) = (&case.crystal, &case.images);
        let found = rotation_free(&constants, &case.group, crystal, images, 1e-14, 1000);
        assert!(
            found.relative_residual < 1e-11,
            "{name}: {:e}",
            found.relative_residual
        );
        assert_same(name, &found.constants, &expected, 1e-10);
        // The sums as the service has them, and as written out above.
        let sums = RotationSum::new(&constants, crystal, images).apply(&constants);
        let plain = vector(&constants);
        for (row, expected) in case.rotation_rows().iter().enumerate() {
            let found = sums[row / 3][row % 3];
            assert!((found - expected.dot(&plain)).abs() < 1e-11, "{name}");
        }
    }
}

#[test]
fn projections_change_nothing_the_second_time_and_commute() {
    for (name, case) in cases() {
        let constants = case.random(8);
        let t = |c: &ForceConstants| pair_symmetric(c);
        let q = |c: &ForceConstants| translation_free(c);
        let g = |c: &ForceConstants| space_group_symmetric(c, &case.group);
        let steps: [&dyn Fn(&ForceConstants) -> ForceConstants; 3] = [&t, &q, &g];
        let joint = vector(&projected(&constants, &case.group));
        for step in steps {
            let once = step(&constants);
            assert_same(name, &step(&once), &vector(&once), 1e-13);
        }
        for [first, second, third] in [
            [0, 1, 2],
            [0, 2, 1],
            [1, 0, 2],
            [1, 2, 0],
            [2, 0, 1],
            [2, 1, 0],
        ] {
            let found = steps[third](&steps[second](&steps[first](&constants)));
            assert_same(name, &found, &joint, 1e-13);
        }
        let again = projected(&projected(&constants, &case.group), &case.group);
        assert_same(name, &again, &joint, 1e-13);
        let (crystal, images) = (&case.crystal, &case.images);
        let free = |c: &ForceConstants| rotation_free(c, &case.group, crystal, images, 1e-14, 1000);
        let once = free(&constants).constants;
        assert_same(name, &free(&once).constants, &vector(&once), 1e-11);
        assert_same(name, &projected(&once, &case.group), &vector(&once), 1e-12);
    }
}
