//! Cubic least squares in one strain measure, and the minimum of the fitted curve plus pV.
//!
//! Linear in the data: the fit of a derivative of the data is the derivative of the fit. Cost O(m) per evaluation.

use nalgebra::{DMatrix, DVector};

/// Coefficients of the fit.
const COEFFICIENTS: usize = 4;
/// Steps of the search for the lowest point before bisection.
const SCAN_STEPS: u32 = 400;
/// Halvings: a step of the scan shrinks to rounding.
const BISECTIONS: usize = 60;
/// Singular values below this share of the largest are none.
const SINGULAR: f64 = 1e-12;

/// The strain measure.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Basis {
    /// V^(−2/3): the third-order equation of Birch (1947).
    Birch,
    /// V.
    Volume,
}

/// Where the lowest point lies.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Minimum {
    /// At this volume, Å³.
    Inside(f64),
    /// At or below the smallest volume.
    Below,
    /// At or above the largest volume.
    Above,
}

/// A fit through given volumes.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Fit {
    basis: Basis,
    first_ang3: f64,
    last_ang3: f64,
    middle_ang3: f64,
    scale: f64,
    volumes_ang3: Vec<f64>,
    /// Coefficients from data, 4 × m.
    weights: DMatrix<f64>,
}

impl Fit {
    /// A fit through volumes in ascending order; `None` where they do not determine it.
    pub(super) fn new(basis: Basis, volumes_ang3: &[f64]) -> Option<Self> {
        let (&first_ang3, &last_ang3) = (volumes_ang3.first()?, volumes_ang3.last()?);
        let mut fit = Self {
            basis,
            first_ang3,
            last_ang3,
            middle_ang3: 0.5 * (first_ang3 + last_ang3),
            scale: 1.0,
            volumes_ang3: volumes_ang3.to_vec(),
            weights: DMatrix::zeros(0, 0),
        };
        fit.scale = fit.strain(first_ang3)[0]
            .abs()
            .max(fit.strain(last_ang3)[0].abs());
        let rows = volumes_ang3.len();
        let design = DMatrix::from_fn(rows, COEFFICIENTS, |row, k| {
            fit.powers(volumes_ang3[row])[k]
        });
        let singular = design.clone().svd(true, true);
        let largest = singular.singular_values.max();
        if rows < COEFFICIENTS || singular.rank(SINGULAR * largest) < COEFFICIENTS {
            return None;
        }
        fit.weights = singular.pseudo_inverse(SINGULAR * largest).ok()?;
        Some(fit)
    }

    /// The strain measure with its first two derivatives in V.
    fn strain(&self, volume: f64) -> [f64; 3] {
        let (u, v0, s) = (volume / self.middle_ang3, self.middle_ang3, self.scale);
        match self.basis {
            Basis::Birch => [
                (u.powf(-2.0 / 3.0) - 1.0) / s,
                -2.0 / 3.0 * u.powf(-5.0 / 3.0) / (v0 * s),
                10.0 / 9.0 * u.powf(-8.0 / 3.0) / (v0 * v0 * s),
            ],
            Basis::Volume => [(u - 1.0) / s, 1.0 / (v0 * s), 0.0],
        }
    }

    fn powers(&self, volume: f64) -> [f64; COEFFICIENTS] {
        let x = self.strain(volume)[0];
        [1.0, x, x * x, x * x * x]
    }

    fn coefficients(&self, data: &[f64]) -> [f64; COEFFICIENTS] {
        let found = &self.weights * DVector::from_column_slice(data);
        [found[0], found[1], found[2], found[3]]
    }

    /// The fitted curve.
    pub(super) fn value(&self, data: &[f64], volume: f64) -> f64 {
        let powers = self.powers(volume);
        self.coefficients(data)
            .iter()
            .zip(powers)
            .map(|(c, p)| c * p)
            .sum()
    }

    /// Its derivative in V.
    pub(super) fn first(&self, data: &[f64], volume: f64) -> f64 {
        self.slope(&self.coefficients(data), volume)
    }

    fn slope(&self, [_, b, c, d]: &[f64; COEFFICIENTS], volume: f64) -> f64 {
        let [x, dx, _] = self.strain(volume);
        (b + 2.0 * c * x + 3.0 * d * x * x) * dx
    }

    /// Its second derivative in V.
    pub(super) fn second(&self, data: &[f64], volume: f64) -> f64 {
        let [_, b, c, d] = self.coefficients(data);
        let [x, dx, ddx] = self.strain(volume);
        (2.0 * c + 6.0 * d * x) * dx * dx + (b + 2.0 * c * x + 3.0 * d * x * x) * ddx
    }

    /// Root mean square of what is left, per degree of freedom; zero where none is left.
    pub(super) fn residual(&self, data: &[f64]) -> f64 {
        let freedom = data.len().saturating_sub(COEFFICIENTS);
        if freedom == 0 {
            return 0.0;
        }
        let left = self.volumes_ang3.iter().zip(data);
        let squares: f64 = left.map(|(v, x)| (self.value(data, *v) - x).powi(2)).sum();
        (squares / freedom as f64).sqrt()
    }

    /// The lowest point of the curve plus `pressure` · V between the first and the last volume.
    pub(super) fn minimum(&self, data: &[f64], pressure: f64) -> Minimum {
        let coefficients = self.coefficients(data);
        let step = (self.last_ang3 - self.first_ang3) / f64::from(SCAN_STEPS);
        let volume = |k: u32| self.first_ang3 + step * f64::from(k);
        let height = |k: u32| {
            let powers = self.powers(volume(k));
            let sum: f64 = coefficients.iter().zip(powers).map(|(c, p)| c * p).sum();
            sum + pressure * volume(k)
        };
        let lowest = (0..=SCAN_STEPS).min_by(|a, b| height(*a).total_cmp(&height(*b)));
        let lowest = lowest.unwrap_or_default();
        let slope = |v: f64| self.slope(&coefficients, v) + pressure;
        let (mut low, mut high) = (
            volume(lowest.saturating_sub(1)),
            volume((lowest + 1).min(SCAN_STEPS)),
        );
        if slope(low) >= 0.0 {
            return Minimum::Below;
        }
        if slope(high) <= 0.0 {
            return Minimum::Above;
        }
        for _ in 0..BISECTIONS {
            let middle = 0.5 * (low + high);
            if slope(middle) < 0.0 {
                low = middle;
            } else {
                high = middle;
            }
        }
        Minimum::Inside(0.5 * (low + high))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_birch_crystal_comes_back_with_its_volume_and_stiffness() {
        // Birch 1947: E = 9/16 B V₀ [(x−1)³ B′ + (x−1)² (6 − 4x)], x = (V₀/V)^(2/3).
        let (v0, b, derivative) = (150.0, 5.0, 7.3);
        let energy = |v: f64| {
            let x = (v0 / v).powf(2.0 / 3.0);
            9.0 / 16.0
                * b
                * v0
                * ((x - 1.0).powi(3) * derivative + (x - 1.0).powi(2) * (6.0 - 4.0 * x))
        };
        let volumes = [138.0, 143.0, 149.0, 154.0, 160.0];
        let data: Vec<f64> = volumes.iter().map(|v| energy(*v) - 9.0).collect();
        let fit = Fit::new(Basis::Birch, &volumes).unwrap();
        let Minimum::Inside(volume) = fit.minimum(&data, 0.0) else {
            panic!("no minimum")
        };
        assert!((volume - v0).abs() < 1e-7, "{volume}");
        assert!((fit.value(&data, v0) + 9.0).abs() < 1e-10);
        assert!((fit.second(&data, v0) * v0 - b).abs() < 1e-8);
        assert!(fit.residual(&data) < 1e-10);
        // B′ = −V (dB/dV)/B with B = V E″.
        let stiffness = |v: f64| v * fit.second(&data, v);
        let slope = (stiffness(v0 + 0.01) - stiffness(v0 - 0.01)) / 0.02;
        assert!((-v0 * slope / b - derivative).abs() < 1e-4);
        assert_eq!(fit.minimum(&data, 50.0), Minimum::Below);
        assert_eq!(fit.minimum(&data, -50.0), Minimum::Above);
        let step = 1e-4;
        let numeric =
            (fit.value(&data, 145.0 + step) - fit.value(&data, 145.0 - step)) / (2.0 * step);
        assert!((numeric - fit.first(&data, 145.0)).abs() < 1e-7);
    }

    #[test]
    fn too_few_volumes_determine_nothing() {
        assert_eq!(Fit::new(Basis::Birch, &[1.0, 2.0, 3.0]), None);
        assert_eq!(Fit::new(Basis::Volume, &[1.0, 2.0, 2.0, 3.0]), None);
        assert_eq!(Fit::new(Basis::Volume, &[]), None);
    }
}
