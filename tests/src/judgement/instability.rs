//! Genuine instabilities: couplings added to a stable crystal until it is soft to a chosen depth.
//!
//! All additions obey pair symmetry, translation sums and the space group exactly, so that nothing but their effect gives
//! them away.

use nalgebra::{Matrix3, Unit, Vector3};
use rand::{Rng, RngExt};
use tarehouse_demo_data::constants::Coupling;
use tarehouse_physics::supercell::Translation;
use tarehouse_physics::units::eigenvalue_of_wavenumber;

use crate::judgement::BenchError;
use crate::judgement::exact::{Exact, mesh_of, opposite};
use crate::judgement::pool::Member;

/// Where a crystal is made soft.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// Librations of neighbouring cells prefer opposite senses.
    ZoneBoundary,
    /// Librations of neighbouring cells prefer the same sense.
    Gamma,
    /// Rigid shifts of neighbouring cells against one another are favoured.
    Elastic,
    /// Every molecule turns by itself: a band that is soft everywhere.
    Rotor,
}

/// Depths drawn, cm⁻¹ below zero.
const DEPTH_PER_CM: (f64, f64) = (12.0, 80.0);
/// Spacing of the mesh on which the depth is set, Å⁻¹.
const SPACING_PER_ANG: f64 = 0.45;
/// Doublings and halvings of the strength.
const DOUBLINGS: usize = 24;
const HALVINGS: usize = 14;

/// The crystal made soft.
///
/// # Errors
/// [`BenchError`].
pub fn softened(member: &Member, kind: Kind, rng: &mut impl Rng) -> Result<Exact, BenchError> {
    let depth = rng.random_range(DEPTH_PER_CM.0..DEPTH_PER_CM.1);
    let target = eigenvalue_of_wavenumber(-depth);
    let unit = couplings(member, kind, rng);
    let mesh = mesh_of(member.exact.crystal(), SPACING_PER_ANG)?;
    let lowest_at = |strength: f64| -> Result<f64, BenchError> {
        Ok(strengthened(member, &unit, strength).lowest(&mesh)?.0)
    };
    let (mut weak, mut strong) = (0.0, 0.05);
    for _ in 0..DOUBLINGS {
        if lowest_at(strong)? < target {
            break;
        }
        weak = strong;
        strong *= 2.0;
    }
    for _ in 0..HALVINGS {
        let middle = 0.5 * (weak + strong);
        if lowest_at(middle)? < target {
            strong = middle;
        } else {
            weak = middle;
        }
    }
    let result = strengthened(member, &unit, strong);
    if result.lowest(&mesh)?.0 > 0.5 * target {
        return Err(BenchError::NoCase("the crystal could not be made soft"));
    }
    Ok(result)
}

fn strengthened(member: &Member, unit: &[Coupling], strength: f64) -> Exact {
    let scaled: Vec<Coupling> = unit
        .iter()
        .map(|coupling| Coupling {
            block: coupling.block * strength,
            ..*coupling
        })
        .collect();
    member.exact.with(&scaled)
}

/// The added couplings at unit strength, for every molecule of the cell.
fn couplings(member: &Member, kind: Kind, rng: &mut impl Rng) -> Vec<Coupling> {
    let size = member.model.compound().sites().len();
    let direction = random_direction(rng);
    let axis = rng.random_range(0..3_usize);
    let pattern = match kind {
        Kind::Elastic => vec![direction / size as f64; size],
        _ => libration(&member.model.positions()[..size], &direction),
    };
    let mut added = Vec::new();
    for (molecule, operation) in member.group.operations().iter().enumerate() {
        let turn = operation.cartesian(member.model.cell());
        let turned: Vec<Vector3<f64>> = pattern.iter().map(|w| turn * w).collect();
        let along = |c: usize| -> Translation {
            std::array::from_fn(|k| if k == c { operation.signs[k] } else { 0 })
        };
        let mut add = |translation, factor| {
            outer(&mut added, molecule * size, &turned, translation, factor);
        };
        let home = [0; 3];
        match kind {
            Kind::Rotor => add(home, -1.0),
            Kind::ZoneBoundary => {
                add(along(axis), 0.5);
                add(opposite(along(axis)), 0.5);
            }
            Kind::Gamma => {
                for c in 0..3 {
                    add(along(c), -0.5);
                    add(opposite(along(c)), -0.5);
                }
            }
            Kind::Elastic => {
                add(home, -2.0);
                add(along(axis), 1.0);
                add(opposite(along(axis)), 1.0);
            }
        }
    }
    added
}

/// factor · w_i w_jᵀ between all atoms of a molecule and of its copy at `translation`.
fn outer(
    added: &mut Vec<Coupling>,
    first: usize,
    pattern: &[Vector3<f64>],
    translation: Translation,
    factor: f64,
) {
    for (i, left) in pattern.iter().enumerate() {
        for (j, right) in pattern.iter().enumerate() {
            let block: Matrix3<f64> = left * right.transpose() * factor;
            added.push(Coupling {
                displaced: first + i,
                response: first + j,
                translation,
                block,
            });
        }
    }
}

/// A rigid turn about the centroid, of norm one; its sum over the atoms vanishes.
fn libration(positions: &[Vector3<f64>], axis: &Vector3<f64>) -> Vec<Vector3<f64>> {
    let centre = positions.iter().sum::<Vector3<f64>>() / positions.len() as f64;
    let turn: Vec<Vector3<f64>> = positions
        .iter()
        .map(|r| axis.cross(&(r - centre)))
        .collect();
    let norm = turn.iter().map(Vector3::norm_squared).sum::<f64>().sqrt();
    turn.iter().map(|w| w / norm).collect()
}

fn random_direction(rng: &mut impl Rng) -> Vector3<f64> {
    loop {
        let candidate = Vector3::from_fn(|_, _| rng.random_range(-1.0..1.0_f64));
        let square = candidate.norm_squared();
        if square > 0.01 && square < 1.0 {
            return Unit::new_normalize(candidate).into_inner();
        }
    }
}
