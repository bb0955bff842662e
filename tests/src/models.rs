//! Model crystals with springs of known strength: chains, cubic crystals, Born–von Kármán metals.
//!
//! A [`SpringCrystal`] keeps its constants unfolded, of whatever range.
//! [`SpringCrystal::constants`] folds them into a supercell as a calculation would;
//! [`SpringCrystal::dynamical_matrix`] is the exact sum that interpolation from the folded ones can
//! only reach where nothing is aliased.

pub mod metals;

use std::collections::BTreeMap;
use std::f64::consts::PI;

use nalgebra::{Complex, DMatrix, Matrix3, Vector3};
use tarehouse_physics::supercell::Translation;
use tarehouse_physics::{Crystal, Element, ForceConstants, Supercell};

/// Cell edge of the model chains, Å.
pub const CHAIN_EDGE_ANG: f64 = 3.0;
/// Cube edge of the model cubic crystals, Å.
pub const CUBE_EDGE_ANG: f64 = 4.0;

/// A crystal held together by springs of any range; see the module documentation.
#[derive(Debug, Clone)]
pub struct SpringCrystal {
    crystal: Crystal,
    blocks: BTreeMap<(Translation, usize, usize), Matrix3<f64>>,
}

impl SpringCrystal {
    /// A crystal without springs.
    pub fn new(crystal: Crystal) -> Self {
        let blocks = BTreeMap::new();
        Self { crystal, blocks }
    }

    /// Ties atom `first` of the home cell to atom `second` of the cell at `translation`: displacing
    /// one by u pulls the other with K u. `stiffness` is K in eV/Å²; the self blocks follow.
    pub fn tie(
        &mut self,
        first: usize,
        second: usize,
        translation: Translation,
        stiffness: &Matrix3<f64>,
    ) {
        let home = [0; 3];
        let transposed = stiffness.transpose();
        self.add((translation, first, second), &-stiffness);
        self.add((translation.map(|x| -x), second, first), &-transposed);
        self.add((home, first, first), stiffness);
        self.add((home, second, second), &transposed);
    }

    /// The crystal itself.
    pub fn crystal(&self) -> &Crystal {
        &self.crystal
    }

    /// The constants folded into the supercell with these rows: all blocks whose translations agree
    /// modulo S are added.
    ///
    /// # Panics
    /// If S is singular.
    #[allow(clippy::expect_used, reason = "a test names its supercells itself")]
    pub fn constants(&self, supercell: [[i64; 3]; 3]) -> ForceConstants {
        let supercell =
            Supercell::with_default_translations(supercell).expect("a regular supercell");
        let n = self.crystal.atom_count();
        let mut blocks = vec![Matrix3::zeros(); supercell.cell_count() * n * n];
        for ((translation, first, second), block) in &self.blocks {
            blocks[(supercell.index_of(translation) * n + first) * n + second] += block;
        }
        ForceConstants::from_blocks(supercell, n, blocks).expect("finite blocks of every cell")
    }

    /// The exact D_ij(q) = Σ_R Φ_ij(R) exp(iq·(R + r_j − r_i))/√(m_i m_j) in eV/Å²/u; q in
    /// fractional reciprocal coordinates.
    pub fn dynamical_matrix(&self, q_frac: &Vector3<f64>) -> DMatrix<Complex<f64>> {
        let n = self.crystal.atom_count();
        let (positions, masses) = (self.crystal.positions(), self.crystal.masses_u());
        let mut matrix = DMatrix::zeros(3 * n, 3 * n);
        for ((translation, first, second), block) in &self.blocks {
            let cell = Vector3::from(translation.map(|x| x as f64));
            let separation = cell + positions[*second] - positions[*first];
            let scale = 1.0 / (masses[*first] * masses[*second]).sqrt();
            let phase = Complex::from_polar(scale, 2.0 * PI * q_frac.dot(&separation));
            for (index, value) in block.iter().enumerate() {
                let (a, b) = (index % 3, index / 3);
                matrix[(3 * first + a, 3 * second + b)] += phase * *value;
            }
        }
        matrix
    }

    /// Exact eigenvalues ω² at q, ascending, eV/Å²/u.
    pub fn eigenvalues(&self, q_frac: &Vector3<f64>) -> Vec<f64> {
        let values = self.dynamical_matrix(q_frac).symmetric_eigenvalues();
        let mut values: Vec<f64> = values.iter().copied().collect();
        values.sort_by(f64::total_cmp);
        values
    }

    /// Fractional reciprocal coordinates of the wave vector (2π/`edge_ang`)·`reduced`, `reduced`
    /// Cartesian.
    pub fn fractional_q(&self, edge_ang: f64, reduced: [f64; 3]) -> Vector3<f64> {
        self.crystal.cell() * Vector3::from(reduced) / edge_ang
    }

    fn add(&mut self, key: (Translation, usize, usize), block: &Matrix3<f64>) {
        *self.blocks.entry(key).or_insert_with(Matrix3::zeros) += block;
    }
}

/// A chain along x in a cubic net: springs `along` (K₁, K₂, … to the first, second, … neighbour)
/// for displacements along x, and springs `across` between all nearest neighbours for everything
/// else. No direction mixes with another.
pub fn chain(along: &[f64], across: f64, mass_u: f64) -> SpringCrystal {
    let cell = Matrix3::identity() * CHAIN_EDGE_ANG;
    let mut model = SpringCrystal::new(crystal(cell, &[[0.0; 3]], &[mass_u]));
    for (stiffness, neighbour) in along.iter().zip(1..) {
        let sideways = if neighbour == 1 { across } else { 0.0 };
        let spring = Matrix3::from_diagonal(&Vector3::new(*stiffness, sideways, sideways));
        model.tie(0, 0, [neighbour, 0, 0], &spring);
    }
    let net = Matrix3::identity() * across;
    model.tie(0, 0, [0, 1, 0], &net);
    model.tie(0, 0, [0, 0, 1], &net);
    model
}

/// The chain that is soft only near its zone boundary: springs 1, 3, −1.2 in units of `unit`, with
/// springs across it of one unit; unstable beyond 0.938 of the way to the boundary, λ = −0.8
/// unit/mass at it.
pub fn soft_boundary_chain(unit: f64, mass_u: f64) -> SpringCrystal {
    chain(&[unit, 3.0 * unit, -1.2 * unit], unit, mass_u)
}

/// Two atoms in the cell on a line along x, springs K inside the cell and G to the next, springs
/// `across` sideways.
pub fn diatomic_chain(springs: [f64; 2], across: f64, masses_u: [f64; 2]) -> SpringCrystal {
    let cell = Matrix3::identity() * CHAIN_EDGE_ANG;
    let positions = [[0.0; 3], [0.5, 0.0, 0.0]];
    let mut model = SpringCrystal::new(crystal(cell, &positions, &masses_u));
    let spring = |along| Matrix3::from_diagonal(&Vector3::new(along, across, across));
    model.tie(0, 1, [0, 0, 0], &spring(springs[0]));
    model.tie(1, 0, [1, 0, 0], &spring(springs[1]));
    let net = Matrix3::identity() * across;
    for atom in 0..2 {
        model.tie(atom, atom, [0, 1, 0], &net);
        model.tie(atom, atom, [0, 0, 1], &net);
    }
    model
}

/// Face-centred cubic with central springs K to the twelve nearest neighbours.
pub fn fcc(stiffness: f64, mass_u: f64) -> SpringCrystal {
    central(Cubic::Face, &[([1, 1, 0], stiffness)], mass_u)
}

/// Body-centred cubic with central springs K₁ to the eight first and K₂ to the six second
/// neighbours.
pub fn bcc(first: f64, second: f64, mass_u: f64) -> SpringCrystal {
    let shells = [([1, 1, 1], first), ([2, 0, 0], second)];
    central(Cubic::Body, &shells, mass_u)
}

fn central(lattice: Cubic, shells: &[([i64; 3], f64)], mass_u: f64) -> SpringCrystal {
    let tensor = |vector: [i64; 3], stiffness: f64| {
        let direction = Vector3::from(vector.map(|x| x as f64)).normalize();
        (vector, direction * direction.transpose() * stiffness)
    };
    let shells: Vec<_> = shells.iter().map(|&(r, k)| tensor(r, k)).collect();
    cubic_crystal(lattice, CUBE_EDGE_ANG, mass_u, &shells)
}

/// The two cubic Bravais lattices of the models.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Cubic {
    /// Face-centred.
    Face,
    /// Body-centred.
    Body,
}

impl Cubic {
    /// Rows are the primitive vectors in units of half the cube edge.
    pub fn primitive(self) -> [[i64; 3]; 3] {
        match self {
            Self::Face => [[0, 1, 1], [1, 0, 1], [1, 1, 0]],
            Self::Body => [[-1, 1, 1], [1, -1, 1], [1, 1, -1]],
        }
    }

    /// The vector (in half edges, a lattice vector) in the primitive basis.
    pub fn in_primitive_basis(self, [x, y, z]: [i64; 3]) -> Translation {
        match self {
            Self::Face => [(y + z - x) / 2, (z + x - y) / 2, (x + y - z) / 2],
            Self::Body => [
                i64::midpoint(y, z),
                i64::midpoint(z, x),
                i64::midpoint(x, y),
            ],
        }
    }
}

/// A monatomic cubic crystal from one vector (half edges) and one tensor K (eV/Å²) a shell; the
/// other vectors and tensors of the shell follow from the 48 cubic operations: K(gR) = g K(R) gᵀ.
pub fn cubic_crystal(
    lattice: Cubic,
    edge_ang: f64,
    mass_u: f64,
    shells: &[([i64; 3], Matrix3<f64>)],
) -> SpringCrystal {
    let cell = Matrix3::from_fn(|r, c| 0.5 * edge_ang * lattice.primitive()[r][c] as f64);
    let mut model = SpringCrystal::new(crystal(cell, &[[0.0; 3]], &[mass_u]));
    for (representative, tensor) in shells {
        let mut star = BTreeMap::new();
        for operation in cubic_operations() {
            let image = operation.apply(*representative);
            let matrix = operation.matrix();
            star.entry(image)
                .or_insert(matrix * tensor * matrix.transpose());
        }
        // R and −R are the two ends of one tie.
        for (vector, stiffness) in star.iter().filter(|(vector, _)| **vector > [0; 3]) {
            model.tie(0, 0, lattice.in_primitive_basis(*vector), stiffness);
        }
    }
    model
}

/// A signed permutation of the axes: component a of the image is `signs[a]` times component
/// `axes[a]`.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct SignedPermutation {
    axes: [usize; 3],
    signs: [i64; 3],
}

impl SignedPermutation {
    /// The image of an integer vector.
    pub fn apply(&self, vector: [i64; 3]) -> [i64; 3] {
        std::array::from_fn(|a| self.signs[a] * vector[self.axes[a]])
    }

    /// As a matrix on column vectors.
    pub fn matrix(&self) -> Matrix3<f64> {
        Matrix3::from_fn(|a, b| {
            if self.axes[a] == b {
                self.signs[a] as f64
            } else {
                0.0
            }
        })
    }
}

/// The 48 operations of the cube.
pub fn cubic_operations() -> Vec<SignedPermutation> {
    const ORDERS: [[usize; 3]; 6] = [
        [0, 1, 2],
        [0, 2, 1],
        [1, 0, 2],
        [1, 2, 0],
        [2, 0, 1],
        [2, 1, 0],
    ];
    ORDERS
        .into_iter()
        .flat_map(|axes| {
            (0..8_u32).map(move |bits| SignedPermutation {
                axes,
                signs: std::array::from_fn(|a| if bits >> a & 1 == 0 { 1 } else { -1 }),
            })
        })
        .collect()
}

/// Argon stands for every model atom; the masses are those of the model.
#[allow(clippy::expect_used, reason = "a test names its crystals itself")]
fn crystal(cell: Matrix3<f64>, positions: &[[f64; 3]], masses_u: &[f64]) -> Crystal {
    let element = Element::from_symbol("Ar").expect("a known element");
    let elements = vec![element; positions.len()];
    let positions = positions.iter().map(|x| Vector3::from(*x)).collect();
    Crystal::new(cell, elements, positions, Some(masses_u.to_vec())).expect("a sound crystal")
}
