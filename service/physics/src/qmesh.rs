//! The standard q-mesh: Γ-centred, holding every commensurate wave vector, reduced by symmetry.
//!
//! n_i = ceil(|b_i|/Δ) with b the reciprocal vectors (2π included), rounded up to a multiple of the supercell's
//! denominator along the axis. Points are integer triples m, q_i = m_i/n_i. The mesh is reduced by q → −q and by
//! those operations q' = W⁻ᵀ q that keep the supercell lattice and map the mesh onto itself, no others (Monkhorst & Pack,
//! Phys. Rev. B 13, 5188 (1976); Chadi & Cohen, Phys. Rev. B 8, 5747 (1973)).

use nalgebra::Vector3;

use crate::crystal::Crystal;
use crate::supercell::Supercell;
use crate::symmetry::SpaceGroup;

/// One symmetry-inequivalent point.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct MeshPoint {
    /// Fractional reciprocal coordinates, each in (−½, ½] .
    pub q: Vector3<f64>,
    /// How many points of the mesh it stands for; zero for a commensurate point that is not on the mesh.
    pub multiplicity: u32,
    /// Whether it fits the supercell.
    pub commensurate: bool,
}

/// A reduced Γ-centred mesh; see the module documentation. The first point is Γ.
#[derive(Debug, Clone, PartialEq)]
pub struct QMesh {
    divisions: [u32; 3],
    points: Vec<MeshPoint>,
    /// For every point of the full mesh, index (m₀·n₁ + m₁)·n₂ + m₂, its place in `points`.
    representative: Vec<u32>,
}

/// Rounding up to the supercell's denominators may multiply the mesh by this much; beyond it, commensurate points are
/// added with weight zero instead.
const GROWTH_MAX: u64 = 4;

/// A wave vector is commensurate if S·q is this near to integers.
const COMMENSURATE_TOLERANCE: f64 = 1e-9;

impl QMesh {
    /// The standard mesh of a crystal at the spacing `spacing_per_ang` (Å⁻¹, 2π included).
    pub fn standard(
        crystal: &Crystal,
        supercell: &Supercell,
        group: &SpaceGroup,
        spacing_per_ang: f64,
    ) -> Self {
        let reciprocal = crystal.reciprocal();
        let denominators = supercell.axis_denominators();
        let wanted: [u64; 3] = std::array::from_fn(|axis| {
            division_count(reciprocal.row(axis).norm() / spacing_per_ang)
        });
        let rounded: [u64; 3] =
            std::array::from_fn(|axis| wanted[axis].next_multiple_of(denominators[axis]));
        let size = |n: &[u64; 3]| n.iter().product::<u64>();
        let divisions = if size(&rounded) > GROWTH_MAX * size(&wanted) {
            wanted
        } else {
            rounded
        };
        let divisions = divisions.map(|n| u32::try_from(n).unwrap_or(u32::MAX));
        let mut mesh = Self::with_divisions(divisions, supercell, group);
        mesh.add_missing_commensurate(supercell);
        mesh
    }

    /// A mesh with these divisions, each at least one.
    pub fn with_divisions(divisions: [u32; 3], supercell: &Supercell, group: &SpaceGroup) -> Self {
        let n = divisions.map(i64::from);
        let actions = mesh_actions(&divisions, supercell, group);
        let place =
            |m: &[i64; 3]| usize::try_from((m[0] * n[1] + m[1]) * n[2] + m[2]).unwrap_or_default();
        let total = divisions.iter().map(|x| *x as usize).product();
        let mut representative = vec![u32::MAX; total];
        let mut points: Vec<MeshPoint> = Vec::new();
        for full in 0..total {
            if representative[full] != u32::MAX {
                continue;
            }
            let m = triple(full, &divisions);
            let label = u32::try_from(points.len()).unwrap_or(u32::MAX);
            let mut multiplicity = 0;
            for action in &actions {
                let image: [i64; 3] = std::array::from_fn(|r| {
                    (0..3)
                        .map(|c| action[r][c] * m[c])
                        .sum::<i64>()
                        .rem_euclid(n[r])
                });
                let slot = &mut representative[place(&image)];
                if *slot == u32::MAX {
                    *slot = label;
                    multiplicity += 1;
                }
            }
            let q = Vector3::from_fn(|axis, _| centred(m[axis], n[axis]));
            let commensurate = supercell.is_commensurate(&q, COMMENSURATE_TOLERANCE);
            points.push(MeshPoint {
                q,
                multiplicity,
                commensurate,
            });
        }
        Self {
            divisions,
            points,
            representative,
        }
    }

    /// Divisions along the reciprocal axes.
    pub fn divisions(&self) -> [u32; 3] {
        self.divisions
    }

    /// Number of points of the full mesh.
    pub fn point_count(&self) -> usize {
        self.representative.len()
    }

    /// Inequivalent points, Γ first, points of weight zero last.
    pub fn points(&self) -> &[MeshPoint] {
        &self.points
    }

    /// Place in [`Self::points`] of a point of the full mesh, by its index (m₀·n₁ + m₁)·n₂ + m₂.
    pub fn representative(&self, full: usize) -> usize {
        self.representative[full] as usize
    }

    /// Weights of the inequivalent points; they sum to one.
    pub fn weight(&self, point: usize) -> f64 {
        f64::from(self.points[point].multiplicity) / self.point_count() as f64
    }

    /// The integer triple of a point of the full mesh.
    pub fn triple(&self, full: usize) -> [i64; 3] {
        triple(full, &self.divisions)
    }

    fn add_missing_commensurate(&mut self, supercell: &Supercell) {
        for q in supercell.commensurate_points() {
            let on_mesh = (0..3).all(|axis| {
                let m = q[axis] * f64::from(self.divisions[axis]);
                (m - m.round()).abs() < COMMENSURATE_TOLERANCE * f64::from(self.divisions[axis])
            });
            if !on_mesh {
                let q = q.map(|x| if x > 0.5 { x - 1.0 } else { x });
                self.points.push(MeshPoint {
                    q,
                    multiplicity: 0,
                    commensurate: true,
                });
            }
        }
    }
}

/// Most divisions along one axis: a spacing so fine is a mistake in the policy, not a wish.
const DIVISIONS_MAX: f64 = 512.0;

#[allow(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "the value lies between one and DIVISIONS_MAX"
)]
fn division_count(ratio: f64) -> u64 {
    // The subtraction keeps an exact ratio from being rounded up by its last bit.
    (ratio - 1e-9).ceil().clamp(1.0, DIVISIONS_MAX) as u64
}

fn triple(full: usize, divisions: &[u32; 3]) -> [i64; 3] {
    let (n1, n2) = (divisions[1] as usize, divisions[2] as usize);
    [full / (n1 * n2), full / n2 % n1, full % n2].map(|x| i64::try_from(x).unwrap_or_default())
}

/// m/n folded into (−½, ½].
fn centred(m: i64, n: i64) -> f64 {
    let folded = if 2 * m > n { m - n } else { m };
    folded as f64 / n as f64
}

/// Integer matrices on mesh triples: ±W⁻ᵀ rescaled by the divisions, where integer.
fn mesh_actions(
    divisions: &[u32; 3],
    supercell: &Supercell,
    group: &SpaceGroup,
) -> Vec<[[i64; 3]; 3]> {
    let n = divisions.map(i64::from);
    let mut actions: Vec<[[i64; 3]; 3]> = Vec::new();
    for op in &group.keeping(supercell).operations {
        let rotation = op.reciprocal_rotation();
        // q'_r n_r = Σ_c W_rc (n_r/n_c) m_c
        let maps_mesh = (0..3).all(|r| (0..3).all(|c| rotation[r][c] * n[r] % n[c] == 0));
        if !maps_mesh {
            continue;
        }
        for sign in [1, -1] {
            let action = std::array::from_fn(|r| {
                std::array::from_fn(|c| sign * rotation[r][c] * n[r] / n[c])
            });
            if !actions.contains(&action) {
                actions.push(action);
            }
        }
    }
    actions
}
