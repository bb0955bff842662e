//! The two kinds of pair term: springs inside a molecule and contacts between molecules.
//!
//! Both are functions of one distance, built from products, quotients and square roots only, so that every machine with
//! IEEE arithmetic finds the same bits.

use nalgebra::{Matrix3, Vector3};

/// A pair function and its first two derivatives with respect to distance.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PairValue {
    /// V(r), eV.
    pub energy: f64,
    /// V'(r), eV/Å.
    pub slope: f64,
    /// V''(r), eV/Å².
    pub curvature: f64,
}

impl PairValue {
    /// Gradient of V(|d|) with respect to the separation d: V' d/r, eV/Å.
    pub fn gradient(&self, separation: &Vector3<f64>) -> Vector3<f64> {
        separation * (self.slope / separation.norm())
    }

    /// Second derivative of V(|d|) with respect to d: V'' d̂d̂ᵀ + V'/r (1 − d̂d̂ᵀ), eV/Å².
    pub fn hessian(&self, separation: &Vector3<f64>) -> Matrix3<f64> {
        let distance = separation.norm();
        let direction = separation / distance;
        let across = self.slope / distance;
        Matrix3::from_fn(|a, b| {
            let along = (self.curvature - across) * direction[a] * direction[b];
            if a == b { along + across } else { along }
        })
    }
}

/// A spring inside a molecule: V = ½k x²(1 − s x + 7/12 s² x²), x = r − r₀.
///
/// It is the expansion of the curve of Morse (Phys. Rev. 34, 57 (1929)) to fourth order; s = 0 is harmonic. It is bounded
/// below for every s.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Spring {
    /// k, eV/Å².
    pub stiffness: f64,
    /// r₀, Å.
    pub rest: f64,
    /// s, 1/Å.
    pub softening: f64,
}

impl Spring {
    /// The spring at a distance in Å.
    pub fn at(&self, distance: f64) -> PairValue {
        let (k, s, x) = (self.stiffness, self.softening, distance - self.rest);
        let quartic = 7.0 / 12.0 * s * s;
        PairValue {
            energy: 0.5 * k * x * x * (1.0 - s * x + quartic * x * x),
            slope: k * x * (1.0 - 1.5 * s * x + 2.0 * quartic * x * x),
            curvature: k * (1.0 - 3.0 * s * x + 6.0 * quartic * x * x),
        }
    }
}

/// A contact between molecules: V = (A/r¹² − C/r⁶ + Q/r)·(1 − (r/r_c)⁴)⁴ for r < r_c, else zero.
///
/// The last factor makes V, V', V'' and V''' continuous at the cutoff r_c.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Contact {
    /// A, eV Å¹².
    pub repulsion: f64,
    /// C, eV Å⁶.
    pub attraction: f64,
    /// Q, eV Å.
    pub charge_product: f64,
    /// r_c, Å.
    pub cutoff: f64,
}

impl Contact {
    /// The contact at a distance in Å, above zero.
    pub fn at(&self, distance: f64) -> PairValue {
        if distance >= self.cutoff {
            return PairValue {
                energy: 0.0,
                slope: 0.0,
                curvature: 0.0,
            };
        }
        let inverse = 1.0 / distance;
        let inverse2 = inverse * inverse;
        let inverse6 = inverse2 * inverse2 * inverse2;
        let repulsion = self.repulsion * inverse6 * inverse6;
        let attraction = self.attraction * inverse6;
        let charge = self.charge_product * inverse;
        let bare = repulsion - attraction + charge;
        let bare1 = (-12.0 * repulsion + 6.0 * attraction - charge) * inverse;
        let bare2 = (156.0 * repulsion - 42.0 * attraction + 2.0 * charge) * inverse2;
        let x = distance / self.cutoff;
        let x2 = x * x;
        let rest = 1.0 - x2 * x2;
        let (rest2, x6) = (rest * rest, x2 * x2 * x2);
        let taper = rest2 * rest2;
        let taper1 = -16.0 * rest2 * rest * x2 * x / self.cutoff;
        let taper2 = (192.0 * rest2 * x6 - 48.0 * rest2 * rest * x2) / (self.cutoff * self.cutoff);
        PairValue {
            energy: bare * taper,
            slope: bare1 * taper + bare * taper1,
            curvature: bare2 * taper + 2.0 * bare1 * taper1 + bare * taper2,
        }
    }
}
