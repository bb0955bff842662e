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
//!
//! In a polar crystal the optical modes at Γ depend on the direction too. Their value there is replaced by the same
//! windowed c, with g(q̂) the sum over the eigenvalues of D_o + N_A(q̂); the lattice sum of this function of the direction is
//! taken through its spherical harmonics up to degree 10, so that 144 directions serve both terms.

use std::f64::consts::PI;

use nalgebra::{DMatrix, Matrix3, SymmetricEigen, Vector3};
use rayon::prelude::*;

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
    /// (ħω in eV, weight) of what the direction changes in the optical modes at Γ; empty without dipoles.
    optical: Vec<(f64, f64)>,
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
        for (direction, solid_angle) in half_sphere(POLAR_NODES, AZIMUTH_NODES) {
            let unit = energies(&direction);
            for &(radius, weight) in &radii {
                let volume = 2.0 * solid_angle * weight * radius * radius;
                nodes.push((unit.map(|e| e * radius), volume * window(radius)));
            }
        }
        for u in half_lattice() {
            nodes.push((energies(&u), -2.0 * window(u.norm())));
        }
        let optical = optical_nodes(acoustic, &to_cartesian);
        Self {
            nodes,
            optical,
            unstable,
        }
    }

    /// c for functions of the phonon energy ħω (eV): as many at once as `function` returns.
    pub fn apply<const K: usize>(&self, function: impl Fn(f64) -> [f64; K]) -> [f64; K] {
        let acoustic = self
            .nodes
            .iter()
            .flat_map(|(energies, weight)| energies.iter().map(move |energy| (*energy, *weight)));
        let mut sums = [0.0; K];
        for (energy, weight) in acoustic.chain(self.optical.iter().copied()) {
            for (sum, value) in sums.iter_mut().zip(function(energy)) {
                *sum += weight * value;
            }
        }
        sums
    }
}

const OPTICAL_POLAR_NODES: usize = 12;
const OPTICAL_AZIMUTH_NODES: usize = 24;
/// Largest degree whose products the optical directions integrate exactly.
const OPTICAL_DEGREE: usize = 10;
/// Optical eigenvalues below this share of the largest are lifted to it, with and without the field: soft modes are not
/// corrected.
const OPTICAL_FLOOR: f64 = 1e-6;

/// Optical modes of every direction with the weight of the direction, and those without the field with weight −1.
fn optical_nodes(acoustic: &AcousticMatrix, to_cartesian: &Matrix3<f64>) -> Vec<(f64, f64)> {
    if acoustic.field().is_none() {
        return Vec::new();
    }
    let bare = acoustic.optical_modes().eigenvalues;
    let floor = OPTICAL_FLOOR * bare.iter().fold(0.0_f64, |m, x| m.max(x.abs()));
    let energy = |value: f64| phonon_energy_unit_ev() * value.max(floor).sqrt();
    let lattice = half_lattice();
    let sphere = half_sphere(OPTICAL_POLAR_NODES, OPTICAL_AZIMUTH_NODES);
    let volume: f64 = gauss_legendre(RADIAL_NODES, 0.0, WINDOW_CUT)
        .into_iter()
        .map(|(radius, weight)| weight * radius * radius * window(radius))
        .sum();
    let along: Vec<Vec<(f64, f64)>> = sphere
        .into_par_iter()
        .map(|(direction, solid_angle)| {
            let discrete: f64 = lattice
                .iter()
                .map(|u| window(u.norm()) * even_kernel(direction.dot(u) / u.norm()))
                .sum();
            // The half lattice stands for the whole, and the half sphere too.
            let weight = 2.0 * solid_angle * (volume - 2.0 * discrete);
            let values = acoustic.optical_along(&(to_cartesian * direction));
            values.into_iter().map(|x| (energy(x), weight)).collect()
        })
        .collect();
    let mut nodes: Vec<(f64, f64)> = along.into_iter().flatten().collect();
    nodes.extend(bare.into_iter().map(|x| (energy(x), -1.0)));
    nodes
}

/// Σ_l (2l + 1)/4π P_l(x) over even l up to [`OPTICAL_DEGREE`]: integrates an even function of the direction, of at most
/// that degree, to its value at the pole.
fn even_kernel(x: f64) -> f64 {
    let (mut before, mut legendre, mut sum) = (0.0, 1.0, 0.0);
    for degree in 0..=OPTICAL_DEGREE {
        let l = degree as f64;
        if degree % 2 == 0 {
            sum += (2.0 * l + 1.0) / (4.0 * PI) * legendre;
        }
        (before, legendre) = (
            legendre,
            ((2.0 * l + 1.0) * x * legendre - l * before) / (l + 1.0),
        );
    }
    sum
}

fn window(radius: f64) -> f64 {
    let s = (radius / WINDOW_WIDTH).powi(2);
    (-s).exp() * (1.0 + s + s * s / 2.0 + s * s * s / 6.0)
}

/// Directions with z > 0 and their solid angles; with their opposites they cover the sphere.
fn half_sphere(polar_nodes: usize, azimuth_nodes: usize) -> Vec<(Vector3<f64>, f64)> {
    let step = 2.0 * PI / azimuth_nodes as f64;
    gauss_legendre(polar_nodes, -1.0, 1.0)
        .into_iter()
        .filter(|(z, _)| *z > 0.0)
        .flat_map(|(z, weight)| {
            let rho = (1.0 - z * z).sqrt();
            (0..azimuth_nodes).map(move |k| {
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
    half_sphere(POLAR_NODES, AZIMUTH_NODES)
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
