//! The families of conditions, and what each removes from the upload and from noise.

use tarehouse_physics::ForceConstants;
use tarehouse_physics::projection::{pair_symmetric, space_group_symmetric, translation_free};
use tarehouse_physics::symmetry::SpaceGroup;

use super::{distance, rms};

pub(crate) const PAIR_SYMMETRY: &str = "pair-symmetry";
pub(crate) const TRANSLATION_SUM: &str = "translation-sum";
pub(crate) const SPACE_GROUP: &str = "space-group";

/// All families of one upload, measured in sequence.
pub(super) struct Families {
    list: [Family; 3],
    erased_below: f64,
}

impl Families {
    /// Measures the upload against noise of unit standard deviation. A family whose σ is below `erased_below` (eV/Å²) was
    /// enforced before submission.
    pub(super) fn measure(
        constants: &ForceConstants,
        noise: &ForceConstants,
        group: &SpaceGroup,
        erased_below: f64,
    ) -> Self {
        Self {
            list: measure(constants, noise, group),
            erased_below,
        }
    }

    fn speaking(&self) -> impl Iterator<Item = &Family> {
        self.list.iter().filter(|family| family.speaks())
    }

    pub(super) fn is_erased(&self, name: &str) -> bool {
        self.speaking()
            .any(|f| f.name == name && f.sigma() < self.erased_below)
    }

    pub(super) fn is_live(&self, name: &str) -> bool {
        self.speaking()
            .any(|f| f.name == name && f.sigma() >= self.erased_below)
    }

    /// The families that were enforced before submission, each with the σ that is left of it, eV/Å².
    pub(super) fn erased(&self) -> Vec<(&'static str, f64)> {
        let families = self.speaking().map(|f| (f.name, f.sigma()));
        families
            .filter(|(_, sigma)| *sigma < self.erased_below)
            .collect()
    }

    /// The largest σ of the live families; `None` where all were erased.
    pub(super) fn sigma(&self) -> Option<f64> {
        let live = self
            .speaking()
            .map(Family::sigma)
            .filter(|sigma| *sigma >= self.erased_below);
        live.fold(None, |largest, s| {
            Some(largest.map_or(s, |l: f64| l.max(s)))
        })
    }
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

fn measure(constants: &ForceConstants, white: &ForceConstants, group: &SpaceGroup) -> [Family; 3] {
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
