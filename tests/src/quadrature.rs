//! Gauss–Legendre quadrature (Abramowitz & Stegun 25.4.29).

/// Nodes and weights on (0, 1) for `order` points, by Newton iteration on the Legendre polynomial.
pub fn gauss_legendre(order: u32) -> Vec<(f64, f64)> {
    let n = f64::from(order);
    (1..=order)
        .map(|index| {
            let mut x = (std::f64::consts::PI * (f64::from(index) - 0.25) / (n + 0.5)).cos();
            let mut slope = 1.0;
            for _ in 0..8 {
                let value;
                (value, slope) = legendre(order, x);
                x -= value / slope;
            }
            (0.5 * (1.0 - x), 1.0 / ((1.0 - x * x) * slope * slope))
        })
        .collect()
}

/// ∫₀¹ f(x) dx after the substitution x = u³, which tames logarithms at zero.
pub fn integrate_from_zero(order: u32, mut f: impl FnMut(f64) -> f64) -> f64 {
    gauss_legendre(order)
        .into_iter()
        .map(|(u, weight)| weight * 3.0 * u * u * f(u * u * u))
        .sum()
}

/// P_n(x) and its derivative.
fn legendre(order: u32, x: f64) -> (f64, f64) {
    let (mut before, mut value) = (1.0, x);
    for k in 2..=order {
        let k = f64::from(k);
        (before, value) = (
            value,
            ((2.0 * k - 1.0) * x * value - (k - 1.0) * before) / k,
        );
    }
    let n = f64::from(order);
    (value, n * (x * value - before) / (x * x - 1.0))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn polynomials_are_exact_and_logarithms_accurate() {
        for order in [1, 2, 5, 40] {
            let nodes = gauss_legendre(order);
            for power in 0..2 * order {
                let power = i32::try_from(power).unwrap();
                let sum: f64 = nodes.iter().map(|(x, w)| w * x.powi(power)).sum();
                assert!((sum - 1.0 / f64::from(power + 1)).abs() < 1e-14);
            }
        }
        assert!((integrate_from_zero(40, f64::ln) + 1.0).abs() < 1e-6);
        assert!((integrate_from_zero(40, |x| x * x * x.ln()) + 1.0 / 9.0).abs() < 1e-13);
    }
}
