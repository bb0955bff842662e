//! The eigenvalue that a soft mode contributes with, given its noise.
//!
//! For a mode that the judgement calls numerical the true eigenvalue is positive. With a measured λ and standard
//! deviation s, its posterior under a flat prior on the positive axis is the normal N(λ, s) cut at zero. Free energies
//! depend on ln λ, so that the mode enters with
//!
//!   λ_eff = s · exp(E[ln x | x ~ N(λ/s, 1), x > 0]).
//!
//! Never dropped (that discards the largest contribution), never |ω|.

/// Half width of the range of t = ln x over which the integrand is not negligible, beyond its maximum.
const LOG_REACH: f64 = 40.0;
const NODES: usize = 1200;
/// Above this z the cut at zero is not felt; the series ln z − 1/(2z²) − 3/(4z⁴) is exact to 1e-9.
const SERIES_ABOVE: f64 = 30.0;

/// λ_eff for a measured eigenvalue and its standard deviation, in the unit of both. `sigma` must be positive.
pub(crate) fn effective_eigenvalue(eigenvalue: f64, sigma: f64) -> f64 {
    sigma * mean_log(eigenvalue / sigma).exp()
}

/// E[ln x | x ~ N(z, 1), x > 0].
fn mean_log(z: f64) -> f64 {
    if z > SERIES_ABOVE {
        let square = (z * z).recip();
        return z.ln() - 0.5 * square - 0.75 * square * square;
    }
    // In t = ln x the weight is exp(t − (eᵗ − z)²/2), smooth and decaying at both ends, so that the trapezoidal rule
    // converges exponentially. Below the maximum the decay is that of eᵗ, above it doubly exponential.
    let top = ((z.max(0.0)) + 10.0).ln();
    // −(x − z)²/2 without its constant −z²/2, which would drown the rest for a deep z.
    let log_weight = |t: f64| t - t.exp() * (0.5 * t.exp() - z);
    let step = (top + LOG_REACH) / NODES as f64;
    let nodes = (0..=NODES).map(|k| top - step * k as f64);
    let largest = nodes
        .clone()
        .map(log_weight)
        .fold(f64::NEG_INFINITY, f64::max);
    let (mut sum, mut weighted) = (0.0, 0.0);
    for t in nodes {
        let weight = (log_weight(t) - largest).exp();
        sum += weight;
        weighted += weight * t;
    }
    weighted / sum
}

#[cfg(test)]
mod tests {
    use super::*;

    /// At z = 0 x is half-normal: E[ln x] = −(γ + ln 2)/2 (exact; γ the Euler–Mascheroni constant).
    #[test]
    fn half_normal_mean_log_is_exact() {
        let euler = 0.577_215_664_901_532_9;
        let exact = -0.5 * (euler + std::f64::consts::LN_2);
        assert!((mean_log(0.0) - exact).abs() < 1e-12, "{}", mean_log(0.0));
    }

    /// Far below zero x is exponential with rate |z|: E[ln x] → −γ − ln|z|, with the next term −1/z² from the expansion
    /// of the weight e^{−|z|x}(1 − x²/2): ⟨ln x⟩ shifts by −(⟨x² ln x⟩ − ⟨x²⟩⟨ln x⟩)/2 = −3/(2z²).
    #[test]
    fn deep_soft_modes_follow_the_exponential_limit() {
        let euler = 0.577_215_664_901_532_9;
        for z in [-40.0_f64, -200.0, -3.0e4] {
            let limit = -euler - z.abs().ln() - 1.5 / (z * z);
            assert!((mean_log(z) - limit).abs() < 20.0 / z.powi(4) + 1e-9, "{z}");
        }
    }

    #[test]
    fn series_joins_the_integral() {
        let below = mean_log(SERIES_ABOVE);
        let above = mean_log(SERIES_ABOVE + 1e-9);
        assert!((below - above).abs() < 1e-7, "{below} {above}");
        assert!((effective_eigenvalue(5.0, 1e-3) - 5.0).abs() < 1e-6);
    }
}
