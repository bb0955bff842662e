//! The two invented compounds and the geometry of their relaxed forms.

use crate::ModelError;
use crate::compound::{Bond, Bracing, Compound, Site};

/// Range of all contacts, Å.
const CUTOFF: f64 = 6.0;

/// Drosmelide: a three-ring of carbon, oxygen and sulphur; the carbon carries hydrogen and fluorine. The molecule is
/// chiral. Invented.
///
/// # Errors
/// Never with these symbols; a test builds it.
pub fn drosmelide() -> Result<Compound, ModelError> {
    let sites = vec![
        Site::new("C", [0.0, 0.0, 0.0], 1.80, 0.0060, 0.20)?,
        Site::new("H", [-0.514, -0.308, 0.910], 1.35, 0.0025, 0.16)?,
        Site::new("F", [-0.642, -0.384, -1.136], 1.55, 0.0050, -0.16)?,
        Site::new("O", [1.42, 0.0, 0.0], 1.62, 0.0080, -0.26)?,
        Site::new("S", [0.8587, 1.6047, 0.0], 1.95, 0.0180, 0.06)?,
    ];
    let bond = |i, j, stiffness| Bond {
        sites: (i, j),
        stiffness,
    };
    let bonds = [
        bond(0, 1, 30.0),
        bond(0, 2, 36.0),
        bond(0, 3, 34.0),
        bond(0, 4, 20.0),
        bond(3, 4, 22.0),
    ];
    let bracing = Bracing {
        two_bonds: 4.5,
        farther: 1.0,
        bond_softening: 1.8,
    };
    let name = "drosmelide";
    Ok(Compound::new(
        name,
        "Ferrow pair potential 1",
        sites,
        &bonds,
        bracing,
        CUTOFF,
    ))
}

/// Pelquonol: a twisted chain hydrogen–sulphur–oxygen–fluorine. Invented.
///
/// # Errors
/// Never with these symbols; a test builds it.
pub fn pelquonol() -> Result<Compound, ModelError> {
    let sites = vec![
        Site::new("H", [-0.1865, 1.327, 0.0], 1.35, 0.0025, 0.14)?,
        Site::new("S", [0.0, 0.0, 0.0], 1.95, 0.0180, 0.06)?,
        Site::new("O", [1.66, 0.0, 0.0], 1.62, 0.0080, -0.12)?,
        Site::new("F", [2.0569, 0.1207, 1.3789], 1.55, 0.0050, -0.08)?,
    ];
    let bond = |i, j, stiffness| Bond {
        sites: (i, j),
        stiffness,
    };
    let bonds = [bond(0, 1, 25.0), bond(1, 2, 24.0), bond(2, 3, 26.0)];
    let bracing = Bracing {
        two_bonds: 4.0,
        farther: 0.6,
        bond_softening: 1.7,
    };
    let name = "pelquonol";
    Ok(Compound::new(
        name,
        "Ferrow pair potential 1",
        sites,
        &bonds,
        bracing,
        CUTOFF,
    ))
}
