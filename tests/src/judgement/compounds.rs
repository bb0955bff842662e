//! Invented compounds of several shapes and masses, beside the two of the demonstration data.
//!
//! Names, shapes and parameters are invented; no potential here describes a real substance. No molecule is flat or
//! straight, so that springs between pairs of atoms hold its shape.

use tarehouse_demo_data::compound::{Bond, Bracing, Compound, Site};
use tarehouse_demo_data::{ModelError, forms};

/// Range of all contacts, Å.
pub const CUTOFF: f64 = 6.0;
const BRACING: Bracing = Bracing {
    two_bonds: 4.5,
    farther: 0.8,
    bond_softening: 1.8,
};

/// Which compound.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Shape {
    /// Three-ring with two substituents, 5 atoms.
    Drosmelide,
    /// Twisted chain, 4 atoms.
    Pelquonol,
    /// Nearly round: silicon with three fluorines and a chlorine, 5 atoms.
    Vondelane,
    /// Staggered: two carbons with unlike ends, 8 atoms.
    Tremsolin,
    /// Heavy and lopsided, 6 atoms.
    Brassovine,
    /// Cage of carbon and nitrogen, 12 atoms.
    Orbulane,
    /// Cage of carbon and silicon with hydrogen outside, 16 atoms.
    Quevandole,
}

impl Shape {
    /// The compound.
    ///
    /// # Errors
    /// Never with these symbols.
    pub fn compound(self) -> Result<Compound, ModelError> {
        match self {
            Self::Drosmelide => forms::drosmelide(),
            Self::Pelquonol => forms::pelquonol(),
            Self::Vondelane => vondelane(),
            Self::Tremsolin => tremsolin(),
            Self::Brassovine => brassovine(),
            Self::Orbulane => orbulane(),
            Self::Quevandole => quevandole(),
        }
    }
}

fn site(symbol: &str, place: [f64; 3], charge: f64) -> Result<Site, ModelError> {
    let (radius, depth) = match symbol {
        "H" => (1.35, 0.0025),
        "C" => (1.80, 0.0060),
        "N" => (1.70, 0.0065),
        "O" => (1.62, 0.0080),
        "F" => (1.55, 0.0050),
        "Si" => (2.05, 0.0120),
        "S" => (1.95, 0.0180),
        "Cl" => (1.90, 0.0150),
        "Se" => (2.00, 0.0200),
        _ => (2.02, 0.0190),
    };
    Site::new(symbol, place, radius, depth, charge)
}

fn bond(first: usize, second: usize, stiffness: f64) -> Bond {
    Bond {
        sites: (first, second),
        stiffness,
    }
}

fn built(name: &str, sites: Vec<Site>, bonds: &[Bond]) -> Compound {
    let potential = "bench pair potential 1";
    Compound::new(name, potential, sites, bonds, BRACING, CUTOFF)
}

fn vondelane() -> Result<Compound, ModelError> {
    let a = 1.57 / 3.0_f64.sqrt();
    let c = 2.03 / 3.0_f64.sqrt();
    let sites = vec![
        site("Si", [0.0, 0.0, 0.0], 0.40)?,
        site("F", [a, -a, -a], -0.12)?,
        site("F", [-a, a, -a], -0.12)?,
        site("F", [-a, -a, a], -0.12)?,
        site("Cl", [c, c, c], -0.04)?,
    ];
    let bonds = [
        bond(0, 1, 33.0),
        bond(0, 2, 33.0),
        bond(0, 3, 33.0),
        bond(0, 4, 19.0),
    ];
    Ok(built("vondelane", sites, &bonds))
}

fn tremsolin() -> Result<Compound, ModelError> {
    // Substituents of the second carbon stand half-way between those of the first.
    let end = |base: f64, outward: f64, length: f64, turn: f64| {
        let (along, across) = (length / 3.0, length * 8.0_f64.sqrt() / 3.0);
        let (sin, cos) = turn.to_radians().sin_cos();
        [base + outward * along, across * cos, across * sin]
    };
    let sites = vec![
        site("C", [0.0, 0.0, 0.0], 0.10)?,
        site("C", [1.53, 0.0, 0.0], 0.16)?,
        site("H", end(0.0, -1.0, 1.09, 0.0), 0.06)?,
        site("H", end(0.0, -1.0, 1.09, 120.0), 0.06)?,
        site("Cl", end(0.0, -1.0, 1.77, 240.0), -0.14)?,
        site("F", end(1.53, 1.0, 1.36, 60.0), -0.15)?,
        site("F", end(1.53, 1.0, 1.36, 180.0), -0.15)?,
        site("H", end(1.53, 1.0, 1.09, 300.0), 0.06)?,
    ];
    let bonds = [
        bond(0, 1, 26.0),
        bond(0, 2, 29.0),
        bond(0, 3, 29.0),
        bond(0, 4, 20.0),
        bond(1, 5, 34.0),
        bond(1, 6, 34.0),
        bond(1, 7, 29.0),
    ];
    Ok(built("tremsolin", sites, &bonds))
}

fn brassovine() -> Result<Compound, ModelError> {
    let sites = vec![
        site("C", [0.0, 0.0, 0.0], 0.12)?,
        site("Br", [1.10, 1.10, 1.12], -0.06)?,
        site("H", [-0.63, -0.63, 0.63], 0.08)?,
        site("F", [-0.78, 0.78, -0.79], -0.14)?,
        site("Se", [1.12, -1.13, -1.11], 0.02)?,
        site("Cl", [2.85, -0.10, -1.85], -0.02)?,
    ];
    let bonds = [
        bond(0, 1, 17.0),
        bond(0, 2, 30.0),
        bond(0, 3, 35.0),
        bond(0, 4, 18.0),
        bond(4, 5, 14.0),
    ];
    Ok(built("brassovine", sites, &bonds))
}

/// Corners of a cube of edge `edge`; those of one colour come first.
fn cube(edge: f64) -> Vec<[f64; 3]> {
    let half = 0.5 * edge;
    let corner = |bits: u32| std::array::from_fn(|c| if bits >> c & 1 == 0 { -half } else { half });
    let colour = |parity: u32| (0..8_u32).filter(move |b| b.count_ones() % 2 == parity);
    colour(0).chain(colour(1)).map(corner).collect()
}

/// Bonds along the edges of [`cube`].
fn cube_bonds(stiffness: f64) -> Vec<Bond> {
    let places = cube(1.0);
    let apart =
        |i: usize, j: usize| -> f64 { (0..3).map(|c| (places[i][c] - places[j][c]).powi(2)).sum() };
    (0..8)
        .flat_map(|i| (i + 1..8).map(move |j| (i, j)))
        .filter(|&(i, j)| apart(i, j) < 1.5)
        .map(|(i, j)| bond(i, j, stiffness))
        .collect()
}

fn outward(place: [f64; 3], length: f64) -> [f64; 3] {
    let norm = place.iter().map(|x| x * x).sum::<f64>().sqrt();
    place.map(|x| x * (1.0 + length / norm))
}

fn orbulane() -> Result<Compound, ModelError> {
    let places = cube(1.52);
    let mut sites = Vec::new();
    for (k, place) in places.iter().enumerate() {
        sites.push(if k < 4 {
            site("C", *place, 0.06)?
        } else {
            site("N", *place, -0.12)?
        });
    }
    let mut bonds = cube_bonds(22.0);
    for (k, place) in places.iter().take(4).enumerate() {
        sites.push(site("H", outward(*place, 1.09), 0.06)?);
        bonds.push(bond(k, 8 + k, 30.0));
    }
    Ok(built("orbulane", sites, &bonds))
}

fn quevandole() -> Result<Compound, ModelError> {
    let places = cube(1.88);
    let mut sites = Vec::new();
    for (k, place) in places.iter().enumerate() {
        sites.push(if k < 4 {
            site("C", *place, -0.20)?
        } else {
            site("Si", *place, 0.22)?
        });
    }
    let mut bonds = cube_bonds(17.0);
    for (k, place) in places.iter().enumerate() {
        let (length, stiffness, charge) = if k < 4 {
            (1.09, 30.0, 0.06)
        } else {
            (1.48, 19.0, -0.08)
        };
        sites.push(site("H", outward(*place, length), charge)?);
        bonds.push(bond(k, 8 + k, stiffness));
    }
    Ok(built("quevandole", sites, &bonds))
}
