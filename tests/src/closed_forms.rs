//! Eigenvalues of the model crystals in closed form, in the unit stiffness/mass, ascending.
//!
//! Born & von Kármán, Phys. Z. 13, 297 (1912); Kittel, Introduction to Solid State Physics, ch. 4.
//! Phases are θ = q·a of the chain; zone-boundary values are those of
//! `reference/lattice_exact.toml`.

use std::f64::consts::PI;

/// λ = (2/m) Σ_n K_n (1 − cos nθ) of a chain with springs K_n to the n-th neighbour.
pub fn chain(along: &[f64], mass_u: f64, theta: f64) -> f64 {
    let terms = along.iter().zip(1..);
    let sum: f64 = terms
        .map(|(stiffness, n)| stiffness * (1.0 - (f64::from(n) * theta).cos()))
        .sum();
    2.0 * sum / mass_u
}

/// All three eigenvalues of [`crate::models::chain`] at the fractional wave vector q, ascending.
pub fn chain_in_net(along: &[f64], across: f64, mass_u: f64, q_frac: [f64; 3]) -> [f64; 3] {
    let [x, y, z] = q_frac.map(|q| 2.0 * PI * q);
    let net = chain(&[across], mass_u, y) + chain(&[across], mass_u, z);
    let sideways = chain(&[across], mass_u, x) + net;
    let mut values = [chain(along, mass_u, x) + net, sideways, sideways];
    values.sort_by(f64::total_cmp);
    values
}

/// Acoustic and optical λ of the chain with springs K, G and masses m₁, m₂:
/// λ = ½(K+G)(1/m₁+1/m₂) ∓ ½ sqrt[(K+G)²(1/m₁+1/m₂)² − 16 K G sin²(θ/2)/(m₁ m₂)].
pub fn diatomic_chain(springs: [f64; 2], masses_u: [f64; 2], theta: f64) -> [f64; 2] {
    let [k, g] = springs;
    let sum = (k + g) * (1.0 / masses_u[0] + 1.0 / masses_u[1]);
    let sine = (0.5 * theta).sin();
    let product = 4.0 * k * g * sine * sine / (masses_u[0] * masses_u[1]);
    let optical = 0.5 * (sum + (sum * sum - 4.0 * product).max(0.0).sqrt());
    [product / optical, optical]
}

/// Points of the fcc zone boundary in units of 2π/a and λ m/K there, nearest-neighbour central
/// springs K.
pub fn fcc_zone_boundary() -> [([f64; 3], [f64; 3]); 4] {
    let root = 2.0_f64.sqrt();
    [
        ([1.0, 0.0, 0.0], [4.0, 4.0, 8.0]),
        ([0.5, 0.5, 0.5], [2.0, 2.0, 8.0]),
        ([1.0, 0.5, 0.0], [4.0, 6.0, 6.0]),
        (
            [0.75, 0.75, 0.0],
            [2.0 + root, 4.0 + root, 4.0 + 2.0 * root],
        ),
    ]
}

/// λ m/K of nearest-neighbour fcc along [ζ00] in units of 2π/a: transverse 4(1 − cos πζ)/2 twice,
/// longitudinal 4(1 − cos πζ); from D_xx = 2[2 − c_x(c_y + c_z)].
pub fn fcc_along_cube_axis(zeta: f64) -> [f64; 3] {
    let longitudinal = 4.0 * (1.0 - (PI * zeta).cos());
    [0.5 * longitudinal, 0.5 * longitudinal, longitudinal]
}

/// Points of the bcc zone boundary in units of 2π/a and λ m there, springs K₁ and K₂.
pub fn bcc_zone_boundary(first: f64, second: f64) -> [([f64; 3], [f64; 3]); 3] {
    let at_n = {
        let mut values = [
            4.0 * second,
            8.0 / 3.0 * first,
            16.0 / 3.0 * first + 4.0 * second,
        ];
        values.sort_by(f64::total_cmp);
        values
    };
    [
        ([1.0, 0.0, 0.0], [16.0 / 3.0 * first; 3]),
        ([0.5, 0.5, 0.5], [8.0 / 3.0 * first + 4.0 * second; 3]),
        ([0.5, 0.5, 0.0], at_n),
    ]
}
