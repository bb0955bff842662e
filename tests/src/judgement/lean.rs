//! A reference for blunders of arrangement: does an array die out sooner when it is read otherwise?
//!
//! lean = Σ |Φ|(d − d') / Σ |Φ||d − d'| over all blocks, d the distance of the nearest image as given and d' in the other
//! reading. Blocks at the same distance in both readings say nothing and do not count, so that the strong ones inside
//! molecules cannot hide the rest; noise adds to both signs alike. Near −1 where the array is read rightly, near +1 where
//! the other reading is the right one.

use tarehouse_assay::Submission;
use tarehouse_physics::Supercell;
use tarehouse_physics::images::PairImages;

use crate::judgement::exact::TIE_ANG;

/// Distances that differ by less say nothing, Å.
const SAME_ANG: f64 = 0.3;

/// Lean towards the opposite sign of all translations; `None` where no block tells.
pub fn towards_negated(submission: &Submission) -> Option<f64> {
    let supercell = submission.constants.supercell();
    let images = PairImages::find(&submission.crystal, supercell, TIE_ANG);
    lean(submission, |l, i, j| {
        images.distance(&submission.crystal, supercell.negative(l), i, j)
    })
}

/// The largest lean towards a supercell with exchanged axes: its translations exchanged too, or in the usual order.
pub fn towards_exchanged(submission: &Submission) -> Option<f64> {
    let supercell = submission.constants.supercell();
    let matrix = supercell.matrix();
    [[1, 2, 0], [2, 0, 1], [1, 0, 2], [0, 2, 1], [2, 1, 0]]
        .into_iter()
        .flat_map(|axes: [usize; 3]| {
            let exchanged = axes.map(|r| axes.map(|c| matrix[r][c]));
            let moved = supercell.translations().iter();
            let moved = moved.map(|t| axes.map(|c| t[c])).collect();
            let differs = exchanged != *matrix;
            let both = Supercell::new(exchanged, moved).ok();
            let anew = Supercell::with_default_translations(exchanged).ok();
            [both, anew].into_iter().flatten().filter(move |_| differs)
        })
        .filter_map(|other| {
            let images = PairImages::find(&submission.crystal, &other, TIE_ANG);
            lean(submission, |l, i, j| {
                images.distance(&submission.crystal, l, i, j)
            })
        })
        .reduce(f64::max)
}

fn lean(submission: &Submission, other: impl Fn(usize, usize, usize) -> f64) -> Option<f64> {
    let (crystal, constants) = (&submission.crystal, &submission.constants);
    let images = PairImages::find(crystal, constants.supercell(), TIE_ANG);
    let n = constants.atom_count();
    let (mut signed, mut whole) = (0.0, 0.0);
    for (flat, block) in constants.blocks().iter().enumerate() {
        let (l, i, j) = (flat / (n * n), flat / n % n, flat % n);
        let difference = images.distance(crystal, l, i, j) - other(l, i, j);
        if difference.abs() > SAME_ANG {
            signed += block.norm() * difference;
            whole += block.norm() * difference.abs();
        }
    }
    (whole > 0.0).then(|| signed / whole)
}
