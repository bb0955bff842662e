//! Patterns in which the errors of an upload hang together, and how to recognise them.

use nalgebra::Matrix3;
use tarehouse_physics::ForceConstants;
use tarehouse_physics::projection::{pair_symmetric, space_group_symmetric};
use tarehouse_physics::symmetry::SpaceGroup;

use super::{map_blocks, unflat};

/// How the errors of an upload hang together.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Pattern {
    /// Only one atom of each orbit was displaced.
    pub(super) symmetry_expanded: bool,
    /// Self blocks were set to minus the row sum, and errors of a row add up by this factor more than independent ones.
    pub(super) self_coherence: Option<f64>,
}

impl Pattern {
    /// Whether errors are independent of each other.
    pub(super) fn is_white(self) -> bool {
        !self.symmetry_expanded && self.self_coherence.is_none()
    }

    /// White noise brought into this pattern.
    pub(super) fn applied_to(self, white: ForceConstants, group: &SpaceGroup) -> ForceConstants {
        let noise = if self.symmetry_expanded {
            expanded(&white, group)
        } else {
            white
        };
        match self.self_coherence {
            Some(factor) => with_self_fixed(&noise, factor),
            None => noise,
        }
    }
}

/// Noise of an upload in which only one atom of each orbit was displaced: rows of the representatives carried to the
/// others by the group. Averaging over the group does not reduce it further.
fn expanded(noise: &ForceConstants, group: &SpaceGroup) -> ForceConstants {
    let kept = group.keeping(noise.supercell());
    let representative = kept.orbit_representatives();
    let size = |i: usize| {
        representative
            .iter()
            .filter(|r| **r == representative[i])
            .count() as f64
    };
    let rows = map_blocks(noise, |(_, i, _), block| {
        if representative[i] == i {
            block * size(i)
        } else {
            Matrix3::zeros()
        }
    });
    space_group_symmetric(&rows, group)
}

/// Noise of an upload whose self blocks were set to minus the sum of the row, times `coherence`.
fn with_self_fixed(noise: &ForceConstants, coherence: f64) -> ForceConstants {
    let (home, n) = (noise.home_cell(), noise.atom_count());
    let mut rows = vec![Matrix3::zeros(); n];
    for (flat, block) in noise.blocks().iter().enumerate() {
        let (l, i, j) = unflat(flat, n);
        if !(l == home && i == j) {
            rows[i] += block;
        }
    }
    map_blocks(noise, |(l, i, j), block| {
        if l == home && i == j {
            rows[i] * -coherence
        } else {
            *block
        }
    })
}

/// Self-fixed uploads: the asymmetry of the self blocks is far larger than that of the pairs, as the sum of a whole row of
/// errors sits in them. Where it is larger still than for independent errors (rounding adds coherently), the excess is
/// the factor returned; at least one, and for rounded uploads at least that of errors of one sign.
pub(super) fn self_coherence(
    constants: &ForceConstants,
    white: &ForceConstants,
    rounded: bool,
) -> Option<f64> {
    let upload = self_to_pair_residual(constants)?;
    let free = self_to_pair_residual(white)?;
    let fixed = self_to_pair_residual(&with_self_fixed(white, 1.0))?;
    let is_fixed = fixed > 2.0 * free && upload > (free * fixed).sqrt();
    let least = if rounded {
        rounding_coherence(constants)
    } else {
        1.0
    };
    is_fixed.then(|| (upload / fixed).max(least))
}

/// The sum of a row of N rounding errors q/4 of one sign, over that of N independent errors of q/√12: √(3N/4). Forces on
/// atoms far from the displaced one round to zero all from the same side.
fn rounding_coherence(constants: &ForceConstants) -> f64 {
    let pairs = constants.supercell().cell_count() * constants.atom_count();
    (0.75 * pairs as f64).sqrt()
}

/// rms asymmetry of the self blocks over that of the pairs.
fn self_to_pair_residual(constants: &ForceConstants) -> Option<f64> {
    let (home, n) = (constants.home_cell(), constants.atom_count());
    let symmetric = pair_symmetric(constants);
    let (mut own, mut pair) = ((0.0, 0.0), (0.0, 0.0));
    for (flat, (a, b)) in constants
        .blocks()
        .iter()
        .zip(symmetric.blocks())
        .enumerate()
    {
        let (l, i, j) = unflat(flat, n);
        let square = (a - b).norm_squared();
        let target = if l == home && i == j {
            &mut own
        } else {
            &mut pair
        };
        target.0 += square;
        target.1 += 1.0;
    }
    let rms = |(sum, count): (f64, f64)| {
        if count > 0.0 {
            (sum / count).sqrt()
        } else {
            0.0
        }
    };
    (rms(pair) > 0.0).then(|| rms(own) / rms(pair))
}

/// Standard deviation of an error of rounding to a quantum.
pub(super) fn rounding_deviation(quantum: f64) -> f64 {
    quantum / 12.0_f64.sqrt()
}

/// The quantum of which every constant is a multiple, eV/Å², if there is one.
///
/// The smallest gap between distinct sizes is the candidate; rounding to a quantum leaves all values on its multiples,
/// while of unrounded values only a share 2·`NEAR` falls that near to one.
pub(super) fn quantum(constants: &ForceConstants) -> Option<f64> {
    const NEAR: f64 = 0.02;
    const SMALLEST_RELATIVE: f64 = 1e-7;
    let mut sizes: Vec<f64> = constants
        .blocks()
        .iter()
        .flatten()
        .map(|x| x.abs())
        .filter(|x| *x > 0.0)
        .collect();
    sizes.sort_by(f64::total_cmp);
    let largest = *sizes.last()?;
    let gaps = sizes
        .windows(2)
        .map(|pair| pair[1] - pair[0])
        .chain(sizes.first().copied());
    let candidate = gaps
        .filter(|gap| *gap > SMALLEST_RELATIVE * largest)
        .fold(f64::INFINITY, f64::min);
    let on_multiple = |x: &&f64| {
        let ratio = **x / candidate;
        (ratio - ratio.round()).abs() < NEAR
    };
    let all_on = sizes.iter().filter(on_multiple).count() == sizes.len();
    // Few distinct values prove nothing: they may be equal by symmetry.
    (all_on && sizes.len() > 32 && candidate.is_finite()).then_some(candidate)
}
