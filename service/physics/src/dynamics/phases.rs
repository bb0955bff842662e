//! Phases exp(2πi q·R) of lattice translations.

use std::f64::consts::TAU;

use nalgebra::Vector3;
use tarehouse_eigensolver::c64;

use crate::images::{ImageTranslation, image_vector};

/// exp(2πi q·R) for integer R, from powers along each axis.
pub(super) struct Phases {
    q: Vector3<f64>,
    tables: [Vec<c64>; 3],
}

/// Translations up to this many cells are looked up.
const PHASE_TABLE_REACH: i32 = 32;

impl Phases {
    pub(super) fn new(q: &Vector3<f64>) -> Self {
        let tables = std::array::from_fn(|axis| {
            (-PHASE_TABLE_REACH..=PHASE_TABLE_REACH)
                .map(|k| {
                    let angle = TAU * q[axis] * f64::from(k);
                    c64::new(angle.cos(), angle.sin())
                })
                .collect()
        });
        Self { q: *q, tables }
    }

    fn of(&self, image: &ImageTranslation) -> c64 {
        let look_up = |axis: usize| {
            let place = usize::try_from(image[axis] + PHASE_TABLE_REACH).ok()?;
            self.tables[axis].get(place).copied()
        };
        if let (Some(x), Some(y), Some(z)) = (look_up(0), look_up(1), look_up(2)) {
            return x * y * z;
        }
        let angle = TAU * self.q.dot(&image_vector(image));
        c64::new(angle.cos(), angle.sin())
    }

    pub(super) fn mean(&self, images: &[ImageTranslation]) -> c64 {
        let sum: c64 = images.iter().map(|image| self.of(image)).sum();
        sum / images.len() as f64
    }

    /// Mean phase with the shares given.
    pub(super) fn weighted(&self, shares: &[(ImageTranslation, f64)]) -> c64 {
        shares
            .iter()
            .map(|(image, share)| self.of(image) * *share)
            .sum()
    }
}
