//! A package as large as the service takes in its stride: 264 atoms in the cell, four cells in the supercell.
//!
//! The molecule is invented: a cage of thirty carbon atoms cut from a diamond lattice, its dangling bonds closed by
//! hydrogen and four by fluorine. Four of them stand in P2₁/c. The potential is that of the demonstration data, a sum
//! of functions of distance, so that constants cancel exactly under translation and rotation. It is meant for
//! measuring the time and the memory of an examination, not for its physics.

use nalgebra::Vector3;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use tarehouse_demo_data::compound::{Bond, Bracing, Site};
use tarehouse_demo_data::noise::Disturbance;
use tarehouse_demo_data::packing::random_packing;
use tarehouse_demo_data::relax::Limits;
use tarehouse_demo_data::scenario::diagonal_supercell;
use tarehouse_demo_data::{
    Compound, Contribution, ModelError, MolecularCrystal, Package, RealSpaceConstants, SpaceGroup,
    relax,
};

/// Name of the package folder.
pub const NAME: &str = "plombigrade-large";
/// Diagonal of the supercell matrix.
pub const SUPERCELL: [i64; 3] = [2, 2, 1];
/// Standard deviation of the errors on the constants, eV/Å²: those of a careful contributor.
pub const SIGMA: f64 = 2e-5;
/// Seed of the packing and of the noise.
pub const SEED: u64 = 18;

/// Carbon atoms in quarters of the cube edge of diamond: even triples are one sublattice, odd ones the other.
const CAGE: [[i32; 3]; 30] = [
    [-4, 0, 0],
    [-3, -1, -1],
    [-3, 1, 1],
    [-2, -2, 0],
    [-2, 0, -2],
    [-2, 0, 2],
    [-2, 2, 0],
    [-1, -3, -1],
    [-1, -1, -3],
    [-1, -1, 1],
    [-1, 1, -1],
    [-1, 1, 3],
    [-1, 3, 1],
    [0, -2, -2],
    [0, 0, -4],
    [0, 0, 0],
    [0, 2, -2],
    [0, 2, 2],
    [0, 4, 0],
    [1, -1, -1],
    [1, 1, -3],
    [1, 1, 1],
    [1, 3, -1],
    [2, 0, -2],
    [2, 2, 0],
    [3, 1, -1],
    [3, 3, 1],
    [4, 0, 0],
    [4, 2, 2],
    [5, 1, 1],
];
/// Directions from an even site to its neighbours; those from an odd site are opposite.
const TETRAHEDRON: [[i32; 3]; 4] = [[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]];
/// Bond lengths carbon–carbon, carbon–hydrogen, carbon–fluorine, Å; common chemistry.
const BOND_LENGTHS_ANG: [f64; 3] = [1.54, 1.09, 1.36];
/// Every how manyeth dangling bond ends in fluorine.
const FLUORINE_EVERY: usize = 9;

/// Good enough for few soft modes: residual forces far below what a calculation leaves.
const LIMITS: Limits = Limits {
    force_ev_per_ang: 1e-6,
    stress_ev_per_ang3: 1e-7,
    iterations: 400,
};

/// The invented compound, 66 atoms.
///
/// # Errors
/// Never with these symbols; a test builds it.
pub fn compound() -> Result<Compound, ModelError> {
    let [carbon_bond, hydrogen_bond, fluorine_bond] = BOND_LENGTHS_ANG;
    let place =
        |site: [i32; 3]| Vector3::from(site.map(f64::from)) * (carbon_bond / 3.0_f64.sqrt());
    let mut sites = Vec::new();
    let mut bonds = Vec::new();
    for site in CAGE {
        sites.push(Site::new("C", place(site).into(), 1.85, 0.0080, 0.0)?);
    }
    for (index, site) in CAGE.into_iter().enumerate() {
        for neighbour in neighbours(site) {
            match CAGE.iter().position(|other| *other == neighbour) {
                Some(other) if other > index => bonds.push(bond(index, other, 28.0)),
                Some(_) => {}
                None => {
                    let out = (place(neighbour) - place(site)).normalize();
                    let fluorine = (sites.len() - CAGE.len()) % FLUORINE_EVERY == 0;
                    let (symbol, length, radius, depth, charge) = if fluorine {
                        ("F", fluorine_bond, 1.55, 0.0080, -0.08)
                    } else {
                        ("H", hydrogen_bond, 1.40, 0.0060, 0.01)
                    };
                    let end = place(site) + out * length;
                    bonds.push(bond(index, sites.len(), 30.0));
                    sites.push(Site::new(symbol, end.into(), radius, depth, charge)?);
                }
            }
        }
    }
    let bracing = Bracing {
        two_bonds: 4.0,
        farther: 0.15,
        bond_softening: 1.7,
    };
    let potential = "thimble pair potential 1";
    Ok(Compound::new(
        "plombigrade",
        potential,
        sites,
        &bonds,
        bracing,
        6.0,
    ))
}

fn neighbours(site: [i32; 3]) -> impl Iterator<Item = [i32; 3]> {
    let sign = if site[0] % 2 == 0 { 1 } else { -1 };
    TETRAHEDRON
        .into_iter()
        .map(move |step| std::array::from_fn(|c| site[c] + sign * step[c]))
}

fn bond(first: usize, second: usize, stiffness: f64) -> Bond {
    Bond {
        sites: (first, second),
        stiffness,
    }
}

/// The relaxed crystal grown from a random packing.
///
/// # Errors
/// [`ModelError`] when the packing with this seed does not relax.
pub fn crystal(seed: u64) -> Result<MolecularCrystal, ModelError> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let group = SpaceGroup::P21c;
    let start = random_packing(&compound()?, group, &mut rng)?
        .ok_or_else(|| ModelError::Crystal(format!("no packing without overlap from {seed}")))?;
    relax(&start, group, LIMITS)
}

/// The package: always the same bytes on the same machine.
///
/// # Errors
/// [`ModelError`].
pub fn large_package() -> Result<Package, ModelError> {
    let crystal = crystal(SEED)?;
    let exact = RealSpaceConstants::of(&crystal)?;
    let folded = exact.folded(&diagonal_supercell(SUPERCELL)?)?;
    let noise = Disturbance::White { sigma: SIGMA };
    let constants = noise.apply(exact.crystal(), &folded, SEED)?;
    let (_, package) = Contribution::new(NAME, "I", crystal, constants).seal()?;
    Ok(package)
}
