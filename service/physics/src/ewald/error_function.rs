//! The complementary error function.

use std::f64::consts::PI;

/// Below this the series of erf is used, above it the continued fraction of erfc.
const SERIES_BELOW: f64 = 2.0;

/// erfc(x) for x ≥ 0, absolute error below 1e-15.
///
/// Below 2: 1 − 2/√π · e^(−x²) Σ 2ⁿ x^(2n+1)/(2n+1)!! (Abramowitz & Stegun 7.1.6), all terms positive. Above: the continued
/// fraction e^(−x²)/√π · 1/(x + ½/(x + 1/(x + 3⁄2/(x + …)))) (ibid. 7.1.14), evaluated from its end.
pub(super) fn erfc(x: f64) -> f64 {
    /// Enough for the smallest argument of the fraction.
    const LEVELS: u32 = 120;
    let gauss = (-x * x).exp() / PI.sqrt();
    if x < SERIES_BELOW {
        let mut term = x;
        let mut sum = x;
        let mut odd = 3.0;
        while term > f64::EPSILON * 1e-2 * sum {
            term *= 2.0 * x * x / odd;
            sum += term;
            odd += 2.0;
        }
        return 1.0 - 2.0 * gauss * sum;
    }
    let tail = (1..=LEVELS)
        .rev()
        .fold(x, |tail, level| x + 0.5 * f64::from(level) / tail);
    gauss / tail
}

#[cfg(test)]
mod tests {
    use super::erfc;

    /// Abramowitz & Stegun, Table 7.1 (erf, ten decimals) and 7.3; more digits from the DLMF's defining integral.
    #[test]
    fn values_of_the_tables() {
        for (x, expected) in [
            (0.0, 1.0),
            (0.5, 1.0 - 0.520_499_877_8),
            (1.0, 1.0 - 0.842_700_792_9),
            (1.5, 1.0 - 0.966_105_146_5),
            (2.0, 1.0 - 0.995_322_265_0),
        ] {
            assert!((erfc(x) - expected).abs() < 1e-10, "{x}: {}", erfc(x));
        }
    }

    #[test]
    fn series_joins_the_fraction_and_the_slope_is_the_gaussian() {
        let step = 1e-4;
        for x in [0.3_f64, 1.1, 2.0 - 1e-13, 2.0, 3.3, 5.0] {
            let slope = (erfc(x + step) - erfc(x - step)) / (2.0 * step);
            let gauss = -2.0 / std::f64::consts::PI.sqrt() * (-x * x).exp();
            assert!((slope - gauss).abs() < 1e-8, "{x}: {slope} {gauss}");
        }
        assert!((erfc(2.0 - 1e-15) - erfc(2.0)).abs() < 2e-15);
    }
}
