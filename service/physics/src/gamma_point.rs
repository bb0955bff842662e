//! What replaces the three acoustic modes at Γ in a sum over the q-mesh.
//!
//! ln det D is singular only at Γ. With u the mesh index (q = Σ uᵢ bᵢ/nᵢ), g(u) the sum of the thermodynamic function over
//! the three modes of the long-wave matrix at q(u), and a window w = e^{−s}(1 + s + s²/2 + s³/6), s = |u|²/2.2², cut at
//! |u| = 13, the acoustic modes at Γ are replaced by
//!
//!   c = ∫ w(u) g(u) d³u − Σ'_{u≠0} w(u) g(u),
//!
//! which enters the mesh sum with the weight of one point. The window's first powers of s cancel, so that what is left
//! of the error falls as the fifth power of the spacing (a plain Gaussian window is wrong already at the second). The
//! integral runs over 24 × 48 directions and 48 radii, Gauss–Legendre in cos θ and |u|, uniform in φ; by g(−u) = g(u) half
//! of the directions suffice.

use std::f64::consts::PI;

use nalgebra::{DMatrix, Matrix3, SymmetricEigen, Vector3};

use crate::crystal::Crystal;
use crate::long_wave::AcousticMatrix;
use crate::units::phonon_energy_unit_ev;

const WINDOW_WIDTH: f64 = 2.2;
const WINDOW_CUT: f64 = 13.0;
const POLAR_NODES: usize = 24;
const AZIMUTH_NODES: usize = 48;
const RADIAL_NODES: usize = 48;

/// The Γ correction of one crystal and mesh: long-wave phonon energies with signed weights.
#[derive(Debug, Clone, PartialEq)]
pub struct GammaCorrection {
    /// (ħω of the three modes in eV, weight).
    nodes: Vec<([f64; 3], f64)>,
    /// A long wave in some direction has negative stiffness and was lifted to the floor.
    pub unstable: bool,
}

impl GammaCorrection {
    /// Prepares the correction. Stiffnesses that are negative, or below `floor` times the mean of the three, are lifted
    /// to that floor.
    pub fn new(
        acoustic: &AcousticMatrix,
        crystal: &Crystal,
        divisions: [u32; 3],
        floor: f64,
    ) -> Self {
        let reciprocal = crystal.reciprocal();
        let steps = Vector3::from(divisions.map(|n| f64::from(n).recip()));
        let to_cartesian = reciprocal.transpose() * Matrix3::from_diagonal(&steps);
        let mut unstable = false;
        let mut energies = |u: &Vector3<f64>| {
            let (values, lifted) = acoustic.floored_eigenvalues(&(to_cartesian * u), floor);
            unstable |= lifted;
            values.map(|value| phonon_energy_unit_ev() * value.sqrt())
        };
        let mut nodes = Vec::new();
        let radii = gauss_legendre(RADIAL_NODES, 0.0, WINDOW_CUT);
        for (direction, solid_angle) in half_sphere() {
            let unit = energies(&direction);
            for &(radius, weight) in &radii {
                let volume = 2.0 * solid_angle * weight * radius * radius;
                nodes.push((unit.map(|e| e * radius), volume * window(radius)));
            }
        }
        for u in half_lattice() {
            nodes.push((energies(&u), -2.0 * window(u.norm())));
        }
        Self { nodes, unstable }
    }

    /// c for functions of the phonon energy ħω (eV): as many at once as `function` returns.
    pub fn apply<const K: usize>(&self, function: impl Fn(f64) -> [f64; K]) -> [f64; K] {
        let mut sums = [0.0; K];
        for (energies, weight) in &self.nodes {
            for energy in energies {
                let values = function(*energy);
                for (sum, value) in sums.iter_mut().zip(values) {
                    *sum += weight * value;
                }
            }
        }
        sums
    }
}

fn window(radius: f64) -> f64 {
    let s = (radius / WINDOW_WIDTH).powi(2);
    (-s).exp() * (1.0 + s + s * s / 2.0 + s * s * s / 6.0)
}

/// Directions with z > 0 and their solid angles; with their opposites they cover the sphere.
fn half_sphere() -> Vec<(Vector3<f64>, f64)> {
    let step = 2.0 * PI / AZIMUTH_NODES as f64;
    gauss_legendre(POLAR_NODES, -1.0, 1.0)
        .into_iter()
        .filter(|(z, _)| *z > 0.0)
        .flat_map(|(z, weight)| {
            let rho = (1.0 - z * z).sqrt();
            (0..AZIMUTH_NODES).map(move |k| {
                let phi = (k as f64 + 0.5) * step;
                (
                    Vector3::new(rho * phi.cos(), rho * phi.sin(), z),
                    weight * step,
                )
            })
        })
        .collect()
}

/// Directions that cover the sphere evenly up to inversion, as unit vectors.
pub fn directions() -> Vec<Vector3<f64>> {
    half_sphere()
        .into_iter()
        .map(|(direction, _)| direction)
        .collect()
}

/// One of each pair ±u of integer triples with 0 < |u| < cut.
fn half_lattice() -> Vec<Vector3<f64>> {
    /// Integers within the cut.
    const REACH: i32 = 13;
    let axis = -REACH..=REACH;
    let mut points = Vec::new();
    for x in axis.clone() {
        for y in axis.clone() {
            for z in axis.clone() {
                let u = Vector3::new(f64::from(x), f64::from(y), f64::from(z));
                if (x, y, z) > (0, 0, 0) && u.norm() < WINDOW_CUT {
                    points.push(u);
                }
            }
        }
    }
    points
}

/// Nodes and weights of Gauss–Legendre quadrature on [from, to] (Golub & Welsch, Math. Comp. 23, 221 (1969)).
pub fn gauss_legendre(count: usize, from: f64, to: f64) -> Vec<(f64, f64)> {
    let mut jacobi = DMatrix::zeros(count, count);
    for k in 1..count {
        let index = k as f64;
        let off_diagonal = index / (4.0 * index * index - 1.0).sqrt();
        jacobi[(k, k - 1)] = off_diagonal;
        jacobi[(k - 1, k)] = off_diagonal;
    }
    let eigen = SymmetricEigen::new(jacobi);
    let half = 0.5 * (to - from);
    let mut rule: Vec<(f64, f64)> = eigen
        .eigenvalues
        .iter()
        .enumerate()
        .map(|(k, x)| {
            let weight = 2.0 * eigen.eigenvectors[(0, k)].powi(2);
            (from + half * (x + 1.0), half * weight)
        })
        .collect();
    rule.sort_by(|a, b| a.0.total_cmp(&b.0));
    rule
}
