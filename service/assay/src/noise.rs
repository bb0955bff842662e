//! What the upload itself says about its noise.
//!
//! Exact constants obey the families T (pair symmetry), Q (translation sums) and G (space group), in sequence. What each
//! projection removes from the upload, over what it removes from unit white noise, is the standard deviation of one
//! constant as that family sees it. A family that removes nothing was enforced before submission: its evidence is gone.

mod families;
mod pattern;

use nalgebra::Matrix3;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use tarehouse_physics::projection::projected;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::{Crystal, ForceConstants, images::PairImages};

use families::Families;
pub(crate) use families::{PAIR_SYMMETRY, SPACE_GROUP, TRANSLATION_SUM};
use pattern::Pattern;

use crate::policy::Limits;
use crate::report::Noise;
use crate::submission::{Digest, Displaced, Submission};

/// The measured noise of an upload.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct NoiseModel {
    /// For the report.
    pub(crate) summary: Noise,
    /// Families enforced before submission, with the σ that is left of each, eV/Å².
    pub(crate) erased: Vec<(&'static str, f64)>,
    seed: Digest,
    pattern: Pattern,
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
        let erased_below = limits.sums.erased_relative * rms(constants);
        let families = Families::measure(constants, &white, group, erased_below);
        let declared = submission.declaration.displaced == Displaced::Inequivalent;
        let symmetry_expanded = families.is_erased(SPACE_GROUP)
            && (declared || (families.is_live(PAIR_SYMMETRY) && families.is_live(TRANSLATION_SUM)));
        let quantum = pattern::quantum(constants);
        let self_coherence = pattern::self_coherence(constants, &white, quantum.is_some());
        let pattern = Pattern {
            symmetry_expanded,
            self_coherence,
        };
        let direct = if pattern.is_white() {
            families.sigma()
        } else {
            let noise = pattern.applied_to(white, group);
            Families::measure(constants, &noise, group, erased_below).sigma()
        };
        let sigma = direct.unwrap_or_else(|| {
            // Noise that is pair-symmetric already has lost half of its variance; draws lose it again by projection.
            let lost = if families.is_erased(PAIR_SYMMETRY) {
                2.0_f64.sqrt()
            } else {
                1.0
            };
            lost * farthest_rms(constants, crystal, images)
        });
        let erased = families.erased();
        let summary = Noise {
            // Whatever the asymmetry shows: small constants that round to zero on both sides hide their error.
            sigma_ev_per_ang2: sigma.max(quantum.map_or(0.0, pattern::rounding_deviation)),
            bound_only: direct.is_none(),
            erased: erased.iter().map(|(name, _)| (*name).to_owned()).collect(),
            truncated: families.is_live(TRANSLATION_SUM)
                && !families.is_live(PAIR_SYMMETRY)
                && !families.is_live(SPACE_GROUP),
            self_fixed: self_coherence.is_some(),
            symmetry_expanded,
            rounded: quantum.is_some(),
        };
        Self {
            summary,
            erased,
            seed,
            pattern,
        }
    }

    /// Standard normals for joint draws, from a stream of the package of their own.
    pub(crate) fn normal_stream(&self) -> impl FnMut() -> f64 + use<> {
        let mut rng = stream(&self.seed, JOINT_STREAM);
        move || StandardNormal.sample(&mut rng)
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

const MEASURE_STREAM: u64 = 0;
const JOINT_STREAM: u64 = 1;
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
