//! What the upload itself says about its noise.
//!
//! Exact constants obey the families T (pair symmetry), Q (translation sums) and G (space group), in sequence. What each
//! projection removes from the upload, over what it removes from unit white noise, is the standard deviation of one
//! constant as that family sees it. A family that removes nothing was enforced before submission: its evidence is gone.

use nalgebra::Matrix3;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use tarehouse_physics::projection::{
    pair_symmetric, projected, space_group_symmetric, translation_free,
};
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::{Crystal, ForceConstants, images::PairImages};

use crate::policy::Limits;
use crate::report::Noise;
use crate::submission::{Digest, Displaced, Submission};

/// The measured noise of an upload.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct NoiseModel {
    /// For the report.
    pub(crate) summary: Noise,
    seed: Digest,
    pattern: Pattern,
}

/// Residual of one family in the upload and in unit noise.
struct Family {
    name: &'static str,
    upload: f64,
    unit_noise: f64,
}

impl Family {
    fn sigma(&self) -> f64 {
        if self.unit_noise > 0.0 {
            self.upload / self.unit_noise
        } else {
            0.0
        }
    }

    /// A family that removes nothing even from noise says nothing (a group of the identity only).
    fn speaks(&self) -> bool {
        self.unit_noise > 0.0
    }
}

impl NoiseModel {
    /// Measures the noise of a submission.
    pub(crate) fn measure(
        submission: &Submission,
        group: &SpaceGroup,
        crystal: &Crystal,
        images: &PairImages,
        limits: &Limits,
    ) -> Self {
        let constants = &submission.constants;
        let seed = submission.package_digest;
        let white = white_noise(constants, &mut stream(&seed, MEASURE_STREAM));
        let families = measure_families(constants, &white, group);
        let erased_below = limits.sums.erased_relative * rms(constants);
        let is_erased = |family: &Family| family.speaks() && family.sigma() < erased_below;
        let live = |name: &str| {
            families
                .iter()
                .any(|f| f.name == name && f.speaks() && f.sigma() >= erased_below)
        };
        let erased: Vec<&'static str> = families
            .iter()
            .filter(|f| is_erased(f))
            .map(|f| f.name)
            .collect();
        let group_erased = erased.contains(&SPACE_GROUP);
        let declared = submission.declaration.displaced == Displaced::Inequivalent;
        let symmetry_expanded =
            group_erased && (declared || (live(PAIR_SYMMETRY) && live(TRANSLATION_SUM)));
        let quantum = quantum(constants);
        let self_coherence = self_coherence(constants, &white).map(|measured| match quantum {
            Some(_) => measured.max(rounding_coherence(constants)),
            None => measured,
        });
        let pattern = Pattern {
            symmetry_expanded,
            self_coherence,
        };
        let remeasured;
        let heard = if symmetry_expanded || self_coherence.is_some() {
            remeasured = measure_families(constants, &pattern.applied_to(white, group), group);
            &remeasured
        } else {
            &families
        };
        let direct = heard
            .iter()
            .filter(|f| f.speaks() && !is_erased(f))
            .map(Family::sigma)
            .fold(None, |largest: Option<f64>, s| {
                Some(largest.map_or(s, |l| l.max(s)))
            });
        let truncated = live(TRANSLATION_SUM) && !live(PAIR_SYMMETRY) && !live(SPACE_GROUP);
        // Whatever the asymmetry shows: small constants that round to zero on both sides hide their error.
        let rounding = quantum.map_or(0.0, |q| q / 12.0_f64.sqrt());
        let sigma = direct.unwrap_or_else(|| farthest_rms(constants, crystal, images));
        let summary = Noise {
            sigma_ev_per_ang2: sigma.max(rounding),
            bound_only: direct.is_none(),
            erased,
            truncated,
            self_fixed: self_coherence.is_some(),
            symmetry_expanded,
            rounded: quantum.is_some(),
        };
        Self {
            summary,
            seed,
            pattern,
        }
    }

    /// One draw of the noise that is left after projection, eV/Å². The same index gives the same draw.
    pub(crate) fn draw(
        &self,
        index: u64,
        constants: &ForceConstants,
        group: &SpaceGroup,
    ) -> ForceConstants {
        let mut rng = stream(&self.seed, FIRST_DRAW_STREAM + index);
        let white = white_noise(constants, &mut rng);
        let noise = self.pattern.applied_to(white, group);
        scaled(&projected(&noise, group), self.summary.sigma_ev_per_ang2)
    }
}

pub(crate) const PAIR_SYMMETRY: &str = "pair-symmetry";
pub(crate) const TRANSLATION_SUM: &str = "translation-sum";
pub(crate) const SPACE_GROUP: &str = "space-group";

const MEASURE_STREAM: u64 = 0;
const FIRST_DRAW_STREAM: u64 = 16;

/// A random stream of the package: its digest is the seed, so that the same bytes give the same draws.
fn stream(seed: &Digest, index: u64) -> ChaCha8Rng {
    let mut rng = ChaCha8Rng::from_seed(*seed);
    rng.set_stream(index);
    rng
}

fn white_noise(like: &ForceConstants, rng: &mut ChaCha8Rng) -> ForceConstants {
    let mut normal = || -> f64 { StandardNormal.sample(rng) };
    map_blocks(like, |_, _| Matrix3::from_fn(|_, _| normal()))
}

fn measure_families(
    constants: &ForceConstants,
    white: &ForceConstants,
    group: &SpaceGroup,
) -> [Family; 3] {
    let step = |name, from: &[ForceConstants; 2], to: &[ForceConstants; 2]| Family {
        name,
        upload: distance(&from[0], &to[0]),
        unit_noise: if significant(&from[1], &to[1]) {
            distance(&from[1], &to[1])
        } else {
            0.0
        },
    };
    let start = [constants.clone(), white.clone()];
    let paired = [pair_symmetric(&start[0]), pair_symmetric(&start[1])];
    let summed = [translation_free(&paired[0]), translation_free(&paired[1])];
    let averaged = [
        space_group_symmetric(&summed[0], group),
        space_group_symmetric(&summed[1], group),
    ];
    [
        step(PAIR_SYMMETRY, &start, &paired),
        step(TRANSLATION_SUM, &paired, &summed),
        step(SPACE_GROUP, &summed, &averaged),
    ]
}

/// Whether a projection removed more than rounding.
fn significant(from: &ForceConstants, to: &ForceConstants) -> bool {
    const ROUNDING: f64 = 1e-10;
    distance(from, to) > ROUNDING * rms(from) * (9.0 * from.blocks().len() as f64).sqrt()
}

/// How the errors of an upload hang together.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Pattern {
    /// Only one atom of each orbit was displaced.
    symmetry_expanded: bool,
    /// Self blocks were set to minus the row sum, and errors of a row add up by this factor more than independent ones.
    self_coherence: Option<f64>,
}

impl Pattern {
    /// White noise brought into this pattern.
    fn applied_to(self, white: ForceConstants, group: &SpaceGroup) -> ForceConstants {
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
/// the factor returned; at least one.
fn self_coherence(constants: &ForceConstants, white: &ForceConstants) -> Option<f64> {
    let upload = self_to_pair_residual(constants)?;
    let free = self_to_pair_residual(white)?;
    let fixed = self_to_pair_residual(&with_self_fixed(white, 1.0))?;
    let is_fixed = fixed > 2.0 * free && upload > (free * fixed).sqrt();
    is_fixed.then(|| (upload / fixed).max(1.0))
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

/// The quantum of which every constant is a multiple, eV/Å², if there is one.
///
/// The smallest gap between distinct sizes is the candidate; rounding to a quantum leaves all values on its multiples,
/// while of unrounded values only a share 2·`NEAR` falls that near to one.
fn quantum(constants: &ForceConstants) -> Option<f64> {
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

/// rms of the constants between the farthest tenth of the pairs: an upper bound of the noise where nothing else is left.
fn farthest_rms(constants: &ForceConstants, crystal: &Crystal, images: &PairImages) -> f64 {
    let n = constants.atom_count();
    let mut pairs: Vec<(f64, f64)> = constants
        .blocks()
        .iter()
        .enumerate()
        .map(|(flat, block)| {
            let (l, i, j) = unflat(flat, n);
            (
                images.distance(crystal, l, i, j),
                block.norm_squared() / 9.0,
            )
        })
        .collect();
    pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
    let far = &pairs[pairs.len() - pairs.len().div_ceil(10)..];
    (far.iter().map(|pair| pair.1).sum::<f64>() / far.len().max(1) as f64).sqrt()
}

/// Root mean square of the elements.
pub(crate) fn rms(constants: &ForceConstants) -> f64 {
    let count = 9.0 * constants.blocks().len() as f64;
    (constants
        .blocks()
        .iter()
        .map(Matrix3::norm_squared)
        .sum::<f64>()
        / count)
        .sqrt()
}

/// Frobenius norm of the difference.
pub(crate) fn distance(a: &ForceConstants, b: &ForceConstants) -> f64 {
    let squares = a
        .blocks()
        .iter()
        .zip(b.blocks())
        .map(|(x, y)| (x - y).norm_squared());
    squares.sum::<f64>().sqrt()
}

fn scaled(constants: &ForceConstants, factor: f64) -> ForceConstants {
    map_blocks(constants, |_, block| block * factor)
}

fn unflat(flat: usize, n: usize) -> (usize, usize, usize) {
    (flat / (n * n), flat / n % n, flat % n)
}

/// Constants of the same shape with each block replaced; `f` sees ([l, i, j], block) and must return finite values.
pub(crate) fn map_blocks(
    constants: &ForceConstants,
    mut f: impl FnMut((usize, usize, usize), &Matrix3<f64>) -> Matrix3<f64>,
) -> ForceConstants {
    let n = constants.atom_count();
    constants.map_blocks(|flat, block| f(unflat(flat, n), block))
}
