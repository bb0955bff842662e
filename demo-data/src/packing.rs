//! Random starting structures: one molecule in a random place, orientation and cell, multiplied by a space group.

use nalgebra::{Matrix3, Rotation3, Unit, Vector3};
use rand::{Rng, RngExt};

use crate::ModelError;
use crate::compound::Compound;
use crate::molecular_crystal::MolecularCrystal;
use crate::symmetry::{CrystalSystem, SpaceGroup};

/// Volume of a starting structure per atom, Å³: loose, so that few molecules overlap.
const VOLUME_PER_ATOM: (f64, f64) = (16.0, 30.0);
/// Range of the ratios of cell lengths before scaling.
const LENGTH_RATIO: (f64, f64) = (0.6, 1.7);
/// Range of the cosines of cell angles.
const COSINE: (f64, f64) = (-0.35, 0.35);
/// Molecules nearer than this share of the cutoffless contact distance are too close to start from.
const OVERLAP: f64 = 0.7;
/// Draws after which the search for a start without overlap is given up.
const ATTEMPTS: usize = 500;

/// A random packing without overlaps, or `None` if none was found in a bounded number of draws.
///
/// # Errors
/// As [`MolecularCrystal::new`].
pub fn random_packing(
    compound: &Compound,
    group: SpaceGroup,
    rng: &mut impl Rng,
) -> Result<Option<MolecularCrystal>, ModelError> {
    let copies = group.operations().len();
    let atoms = copies * compound.sites().len();
    for _ in 0..ATTEMPTS {
        let volume = atoms as f64 * rng.random_range(VOLUME_PER_ATOM.0..VOLUME_PER_ATOM.1);
        let cell = random_cell(group.system(), volume, rng);
        let turn = random_rotation(rng);
        let inverse = cell.try_inverse().unwrap_or_else(Matrix3::zeros);
        let centre = Vector3::from_fn(|_, _| rng.random_range(0.0..1.0));
        let molecule: Vec<Vector3<f64>> = compound
            .sites()
            .iter()
            .map(|site| inverse.tr_mul(&(turn * site.place)) + centre)
            .collect();
        let crystal = MolecularCrystal::from_group(compound.clone(), group, cell, &molecule)?;
        if !overlaps(&crystal) {
            return Ok(Some(crystal));
        }
    }
    Ok(None)
}

fn random_cell(system: CrystalSystem, volume: f64, rng: &mut impl Rng) -> Matrix3<f64> {
    let lengths: [f64; 3] =
        std::array::from_fn(|_| rng.random_range(LENGTH_RATIO.0..LENGTH_RATIO.1));
    let mut cosine = || rng.random_range(COSINE.0..COSINE.1);
    let (cos_a, cos_b, cos_c) = match system {
        CrystalSystem::Triclinic => (cosine(), cosine(), cosine()),
        CrystalSystem::Monoclinic => (0.0, cosine(), 0.0),
        CrystalSystem::Orthorhombic => (0.0, 0.0, 0.0),
    };
    let sin_c = (1.0 - cos_c * cos_c).sqrt();
    let across = (cos_a - cos_b * cos_c) / sin_c;
    let up = (1.0 - cos_b * cos_b - across * across).sqrt();
    let cell = Matrix3::new(
        lengths[0],
        0.0,
        0.0,
        lengths[1] * cos_c,
        lengths[1] * sin_c,
        0.0,
        lengths[2] * cos_b,
        lengths[2] * across,
        lengths[2] * up,
    );
    cell * (volume / cell.determinant()).cbrt()
}

fn random_rotation(rng: &mut impl Rng) -> Rotation3<f64> {
    let mut component = || rng.random_range(-1.0..1.0_f64);
    let axis = loop {
        let candidate: Vector3<f64> = Vector3::new(component(), component(), component());
        let square = candidate.norm_squared();
        if square > 0.01 && square < 1.0 {
            break Unit::new_normalize(candidate);
        }
    };
    // The axis is uniform on the sphere and the angle uniform on the circle: not Haar, but it reaches every orientation.
    Rotation3::from_axis_angle(&axis, component() * std::f64::consts::PI)
}

fn overlaps(crystal: &MolecularCrystal) -> bool {
    let size = crystal.compound().sites().len();
    let mut found = false;
    crystal.for_each_pair(|pair| {
        let inside = pair.first / size == pair.second / size && pair.translation == [0, 0, 0];
        let sites = crystal.compound().sites();
        let radii =
            sites[crystal.site(pair.first)].radius + sites[crystal.site(pair.second)].radius;
        found |= !inside && pair.separation.norm() < OVERLAP * radii;
    });
    found
}
