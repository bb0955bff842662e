//! Density of states by the linear tetrahedron method, as exact differences of the integrated
//! density.
//!
//! Every cell of a full Γ-centred mesh is split into six tetrahedra along its shortest main
//! diagonal (Blöchl, Jepsen & Andersen, Phys. Rev. B 49, 16223 (1994)); inside each the frequency
//! is linear (Lehmann & Taut, phys. stat. sol. (b) 54, 469 (1972)). What a bin holds is the
//! integral over it, so that nothing is lost between the bins.
//!
//! Branches are joined by their order at each point: crossings become avoided crossings, as in any
//! linear scheme.

use nalgebra::{Matrix3, Vector3};
use rayon::prelude::*;

/// Frequencies on a full Γ-centred mesh of n₁ × n₂ × n₃ wave vectors.
#[derive(Debug, Clone, Copy)]
pub struct BranchMesh<'a> {
    /// n₁, n₂, n₃: wave vector (i, j, k) is i b₁/n₁ + j b₂/n₂ + k b₃/n₃.
    pub divisions: [usize; 3],
    /// Number of branches at each wave vector.
    pub branch_count: usize,
    /// Signed wavenumbers in cm⁻¹, [point][branch], point = (i n₂ + j) n₃ + k, ascending within
    /// each point.
    pub wavenumbers_per_cm: &'a [f64],
    /// Weight of each mode in the same order, for a projected density; without it every mode counts
    /// one.
    pub weights: Option<&'a [f64]>,
}

/// Modes counted in bins.
#[derive(Debug, Clone, PartialEq)]
pub struct DensityOfStates {
    edges_per_cm: Vec<f64>,
    modes: Vec<f64>,
}

/// What is wrong with a mesh or with bins.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum DensityError {
    /// A list does not have n₁ n₂ n₃ × branches entries, or the mesh is empty.
    #[error(
        "{found} {what}, but a mesh of {divisions:?} with {branch_count} branches has {expected}"
    )]
    Length {
        /// Name of the list.
        what: &'static str,
        /// Divisions of the mesh.
        divisions: [usize; 3],
        /// Number of branches.
        branch_count: usize,
        /// Number of values needed.
        expected: usize,
        /// Number of values found.
        found: usize,
    },
    /// A value is not finite.
    #[error("entry {index} of the {what} is not finite")]
    NotFinite {
        /// Name of the list.
        what: &'static str,
        /// Index of the first such entry.
        index: usize,
    },
    /// The branches of a point are not in ascending order.
    #[error("the wavenumbers of point {point} are not in ascending order")]
    Order {
        /// Index of the first such point.
        point: usize,
    },
    /// Fewer than two edges, or edges that do not rise.
    #[error("bin edge {index} is missing or does not rise above the one before it")]
    Edges {
        /// Index of the first such edge.
        index: usize,
    },
}

impl DensityOfStates {
    /// Counts the modes of `mesh` in the bins between consecutive `edges_per_cm` (cm⁻¹, rising).
    ///
    /// The sum over all bins is the number of branches (or the mean over the mesh of Σ weights) if
    /// the edges cover every frequency. A weighted tetrahedron uses the mean weight of its four
    /// corners. A flat band exactly on an edge belongs to the bin below it, on the first edge to
    /// the first bin. `reciprocal` has the vectors b as rows, in any unit: it only chooses the
    /// diagonal. Cost: six tetrahedra × points × branches × bins that a tetrahedron touches.
    /// Branches are summed in their order: the result does not depend on the number of threads.
    ///
    /// # Errors
    /// Everything that is wrong, at once.
    pub fn of_mesh(
        mesh: &BranchMesh<'_>,
        reciprocal: &Matrix3<f64>,
        edges_per_cm: &[f64],
    ) -> Result<Self, Vec<DensityError>> {
        let errors = faults(mesh, edges_per_cm);
        if !errors.is_empty() {
            return Err(errors);
        }
        let tetrahedra = tetrahedra_of_cell(mesh.divisions, reciprocal);
        let by_branch: Vec<Vec<f64>> = (0..mesh.branch_count)
            .into_par_iter()
            .map(|branch| integrated_branch(mesh, branch, &tetrahedra, edges_per_cm))
            .collect();
        let mut integrated = vec![0.0; edges_per_cm.len()];
        for branch in &by_branch {
            for (total, part) in integrated.iter_mut().zip(branch) {
                *total += part;
            }
        }
        Ok(Self {
            edges_per_cm: edges_per_cm.to_vec(),
            modes: integrated
                .windows(2)
                .map(|pair| pair[1] - pair[0])
                .collect(),
        })
    }

    /// Edges of the bins, cm⁻¹: one more than there are bins.
    pub fn edges_per_cm(&self) -> &[f64] {
        &self.edges_per_cm
    }

    /// Number of modes per primitive cell in each bin.
    pub fn modes(&self) -> &[f64] {
        &self.modes
    }

    /// Modes per primitive cell and cm⁻¹, averaged over each bin.
    pub fn density_per_inverse_cm(&self) -> Vec<f64> {
        let widths = self.edges_per_cm.windows(2).map(|edge| edge[1] - edge[0]);
        self.modes.iter().zip(widths).map(|(m, w)| m / w).collect()
    }
}

fn faults(mesh: &BranchMesh<'_>, edges: &[f64]) -> Vec<DensityError> {
    let mut errors = Vec::new();
    let expected = mesh
        .divisions
        .iter()
        .try_fold(mesh.branch_count, |product, &n| product.checked_mul(n))
        .unwrap_or(usize::MAX);
    let lists = [
        ("wavenumbers", Some(mesh.wavenumbers_per_cm)),
        ("weights", mesh.weights),
    ];
    for (what, values) in lists {
        let Some(values) = values else { continue };
        if values.len() != expected || expected == 0 {
            errors.push(DensityError::Length {
                what,
                divisions: mesh.divisions,
                branch_count: mesh.branch_count,
                expected,
                found: values.len(),
            });
        }
        if let Some(index) = values.iter().position(|x| !x.is_finite()) {
            errors.push(DensityError::NotFinite { what, index });
        }
    }
    let mut points = mesh
        .wavenumbers_per_cm
        .chunks_exact(mesh.branch_count.max(1));
    if let Some(point) = points.position(|values| values.windows(2).any(|p| p[0] > p[1])) {
        errors.push(DensityError::Order { point });
    }
    if let Some(index) = edges.iter().position(|x| !x.is_finite()) {
        let what = "bin edges";
        errors.push(DensityError::NotFinite { what, index });
    }
    if edges.len() < 2 {
        let index = edges.len();
        errors.push(DensityError::Edges { index });
    } else if let Some(before) = edges.windows(2).position(|p| p[0] >= p[1]) {
        errors.push(DensityError::Edges { index: before + 1 });
    }
    errors
}

/// Corner of a mesh cell as offsets of 0 or 1 along the three axes.
type Corner = [usize; 3];

/// The six tetrahedra of a mesh cell: each walks from one end of the diagonal to the other along
/// the three axes, in one of the six orders.
fn tetrahedra_of_cell(divisions: [usize; 3], reciprocal: &Matrix3<f64>) -> [[Corner; 4]; 6] {
    const ORDERS: [[usize; 3]; 6] = [
        [0, 1, 2],
        [0, 2, 1],
        [1, 0, 2],
        [1, 2, 0],
        [2, 0, 1],
        [2, 1, 0],
    ];
    let start = shortest_diagonal(divisions, reciprocal);
    ORDERS.map(|order| {
        let mut corner = start;
        let mut corners = [start; 4];
        for (place, axis) in order.into_iter().enumerate() {
            corner[axis] = 1 - corner[axis];
            corners[place + 1] = corner;
        }
        corners
    })
}

/// The corner at which the shortest main diagonal of a mesh cell starts; the first of equals.
fn shortest_diagonal(divisions: [usize; 3], reciprocal: &Matrix3<f64>) -> Corner {
    const STARTS: [Corner; 4] = [[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]];
    let length = |start: &Corner| {
        let step = Vector3::from_fn(|axis, _| {
            let sign = if start[axis] == 0 { 1.0 } else { -1.0 };
            sign / divisions[axis] as f64
        });
        reciprocal.tr_mul(&step).norm()
    };
    let mut best = STARTS[0];
    for start in STARTS {
        // Lengths that are equal but for rounding must not decide.
        if length(&start) < length(&best) * (1.0 - 1e-9) {
            best = start;
        }
    }
    best
}

/// Number of modes of one branch below each edge.
fn integrated_branch(
    mesh: &BranchMesh<'_>,
    branch: usize,
    tetrahedra: &[[Corner; 4]; 6],
    edges: &[f64],
) -> Vec<f64> {
    let column = |values: &[f64]| -> Vec<f64> {
        values
            .iter()
            .skip(branch)
            .step_by(mesh.branch_count)
            .copied()
            .collect()
    };
    let wavenumbers = column(mesh.wavenumbers_per_cm);
    let weights = mesh.weights.map(column);
    let [n1, n2, n3] = mesh.divisions;
    let share = 1.0 / (6 * wavenumbers.len()) as f64;
    let mut counter = Counter::new(edges);
    for i in 0..n1 {
        for j in 0..n2 {
            for k in 0..n3 {
                for tetrahedron in tetrahedra {
                    let points = tetrahedron
                        .map(|c| (((i + c[0]) % n1) * n2 + (j + c[1]) % n2) * n3 + (k + c[2]) % n3);
                    let weight = weights.as_ref().map_or(1.0, |weights| {
                        0.25 * points.iter().map(|&point| weights[point]).sum::<f64>()
                    });
                    let mut corners = points.map(|point| wavenumbers[point]);
                    corners.sort_unstable_by(f64::total_cmp);
                    counter.add(&corners, share * weight);
                }
            }
        }
    }
    counter.integrated()
}

/// Collects the integrated density at each edge.
struct Counter<'a> {
    edges: &'a [f64],
    /// Contributions of tetrahedra that an edge cuts, by edge.
    cut: Vec<f64>,
    /// Contributions of tetrahedra that lie below this edge and above the one before it.
    passed: Vec<f64>,
}

impl<'a> Counter<'a> {
    fn new(edges: &'a [f64]) -> Self {
        Self {
            edges,
            cut: vec![0.0; edges.len()],
            passed: vec![0.0; edges.len()],
        }
    }

    fn add(&mut self, corners: &[f64; 4], share: f64) {
        let first_cut = self.edges.partition_point(|&edge| edge <= corners[0]);
        let mut index = first_cut;
        while let Some(&edge) = self.edges.get(index).filter(|&&edge| edge < corners[3]) {
            self.cut[index] += share * fraction_below(corners, edge);
            index += 1;
        }
        // A flat tetrahedron on an edge is below that edge; on the very first it belongs to the
        // first bin.
        let flat_on_edge = index > 0 && self.edges[index - 1] >= corners[3];
        let passed = if flat_on_edge && index > 1 {
            index - 1
        } else {
            index
        };
        if let Some(total) = self.passed.get_mut(passed) {
            *total += share;
        }
    }

    fn integrated(self) -> Vec<f64> {
        let mut below = 0.0;
        self.cut
            .iter()
            .zip(&self.passed)
            .map(|(cut, passed)| {
                below += passed;
                below + cut
            })
            .collect()
    }
}

/// Fraction of a tetrahedron with ascending corner values e₁…e₄ in which the linear function is
/// below e, e₁ < e < e₄ (Blöchl, Jepsen & Andersen 1994, appendix A).
fn fraction_below(corners: &[f64; 4], value: f64) -> f64 {
    let [e1, e2, e3, e4] = *corners;
    let x = value - e1;
    if value < e2 {
        return x * x * x / ((e2 - e1) * (e3 - e1) * (e4 - e1));
    }
    if value >= e3 {
        let y = e4 - value;
        return 1.0 - y * y * y / ((e4 - e1) * (e4 - e2) * (e4 - e3));
    }
    let (x, e21) = (value - e2, e2 - e1);
    let cubic = (e3 - e1 + e4 - e2) / ((e3 - e2) * (e4 - e2));
    (e21 * e21 + 3.0 * e21 * x + 3.0 * x * x - cubic * x * x * x) / ((e3 - e1) * (e4 - e1))
}

#[cfg(test)]
mod tests;
