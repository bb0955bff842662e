//! A compound: one molecule, its springs, and its contacts with its own kind.

use std::fmt::Write as _;

use nalgebra::Vector3;
use tarehouse_assay::submission::Formula;
use tarehouse_physics::Element;

use crate::ModelError;
use crate::potential::{Contact, Spring};

/// e²/(4πε₀) in eV Å, cut to four decimals: it is a parameter of an invented potential, not a measured constant.
const COULOMB_EV_ANG: f64 = 14.3996;

/// One atom of the molecule, with the parameters of its contacts.
#[derive(Debug, Clone, PartialEq)]
pub struct Site {
    /// Its element.
    pub element: Element,
    /// Place in the undisturbed molecule, Å.
    pub place: Vector3<f64>,
    /// Half the distance of least bare energy between two such sites, Å.
    pub radius: f64,
    /// Depth of that least energy, eV.
    pub depth: f64,
    /// Charge, e.
    pub charge: f64,
}

impl Site {
    /// A site from its parameters, in the order of the fields.
    ///
    /// # Errors
    /// [`ModelError::Element`].
    pub fn new(
        symbol: &str,
        place: [f64; 3],
        radius: f64,
        depth: f64,
        charge: f64,
    ) -> Result<Self, ModelError> {
        let element =
            Element::from_symbol(symbol).ok_or_else(|| ModelError::Element(symbol.to_owned()))?;
        Ok(Self {
            element,
            place: Vector3::from(place),
            radius,
            depth,
            charge,
        })
    }
}

/// A bond: two sites and its stiffness.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Bond {
    /// Indices of the sites.
    pub sites: (usize, usize),
    /// Stiffness, eV/Å².
    pub stiffness: f64,
}

/// Springs between sites that are not bonded.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Bracing {
    /// Stiffness between sites two bonds apart, eV/Å².
    pub two_bonds: f64,
    /// Stiffness between sites more than two bonds apart, eV/Å².
    pub farther: f64,
    /// Softening of the bonds, 1/Å; the other springs are harmonic.
    pub bond_softening: f64,
}

/// A molecule with its potential; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct Compound {
    name: String,
    potential_name: String,
    sites: Vec<Site>,
    springs: Vec<(usize, usize, Spring)>,
    contacts: Vec<Contact>,
    cutoff: f64,
}

impl Compound {
    /// A compound whose springs are at rest in the geometry of `sites`: bonds as listed, and bracing between all other
    /// sites. Contacts between sites i and j: distance of least energy ρ_i + ρ_j, depth √(ε_i ε_j), cut off at `cutoff` Å.
    pub fn new(
        name: &str,
        potential_name: &str,
        sites: Vec<Site>,
        bonds: &[Bond],
        bracing: Bracing,
        cutoff: f64,
    ) -> Self {
        let bonded = |i: usize, j: usize| {
            bonds
                .iter()
                .find(|bond| bond.sites == (i, j) || bond.sites == (j, i))
        };
        let mut springs = Vec::new();
        for i in 0..sites.len() {
            for j in i + 1..sites.len() {
                let shared =
                    (0..sites.len()).any(|k| bonded(i, k).is_some() && bonded(k, j).is_some());
                let (stiffness, softening) = match (bonded(i, j), shared) {
                    (Some(bond), _) => (bond.stiffness, bracing.bond_softening),
                    (None, true) => (bracing.two_bonds, 0.0),
                    (None, false) => (bracing.farther, 0.0),
                };
                let rest = (sites[j].place - sites[i].place).norm();
                springs.push((
                    i,
                    j,
                    Spring {
                        stiffness,
                        rest,
                        softening,
                    },
                ));
            }
        }
        let contacts = sites
            .iter()
            .flat_map(|a| sites.iter().map(move |b| contact(a, b, cutoff)))
            .collect();
        Self {
            name: name.to_owned(),
            potential_name: potential_name.to_owned(),
            sites,
            springs,
            contacts,
            cutoff,
        }
    }

    /// Its invented name.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// Name of the invented potential.
    pub fn potential_name(&self) -> &str {
        &self.potential_name
    }

    /// Atoms of the molecule.
    pub fn sites(&self) -> &[Site] {
        &self.sites
    }

    /// Springs, each with the indices of its two sites, the smaller first.
    pub fn springs(&self) -> &[(usize, usize, Spring)] {
        &self.springs
    }

    /// The contact between two sites of different molecules.
    pub fn contact(&self, first: usize, second: usize) -> &Contact {
        &self.contacts[first * self.sites.len() + second]
    }

    /// Range of the contacts, Å.
    pub fn cutoff(&self) -> f64 {
        self.cutoff
    }

    /// Sum formula of the molecule.
    pub fn formula(&self) -> Formula {
        let mut terms: Vec<(Element, u32)> = Vec::new();
        for site in &self.sites {
            match terms.iter_mut().find(|(known, _)| *known == site.element) {
                Some((_, count)) => *count += 1,
                None => terms.push((site.element, 1)),
            }
        }
        Formula::from_counts(terms)
    }

    /// Every parameter as text, in a fixed order.
    pub fn description(&self) -> String {
        let mut text = format!("{}\ncutoff {}\n", self.potential_name, self.cutoff);
        // Writing to a string cannot fail.
        for site in &self.sites {
            let (x, y, z) = (site.place.x, site.place.y, site.place.z);
            let _ = writeln!(
                text,
                "site {} {x} {y} {z} {} {} {}",
                site.element, site.radius, site.depth, site.charge
            );
        }
        for (i, j, spring) in &self.springs {
            let _ = writeln!(
                text,
                "spring {i} {j} {} {} {}",
                spring.stiffness, spring.rest, spring.softening
            );
        }
        text
    }

    /// BLAKE3 of [`Compound::description`], in hexadecimal digits.
    pub fn model_digest(&self) -> String {
        blake3::hash(self.description().as_bytes())
            .to_hex()
            .to_string()
    }
}

fn contact(a: &Site, b: &Site, cutoff: f64) -> Contact {
    let depth = (a.depth * b.depth).sqrt();
    let least = a.radius + b.radius;
    let least2 = least * least;
    let least6 = least2 * least2 * least2;
    Contact {
        repulsion: depth * least6 * least6,
        attraction: 2.0 * depth * least6,
        charge_product: COULOMB_EV_ANG * a.charge * b.charge,
        cutoff,
    }
}
