//! Molecules of a crystal: which atoms are bonded, each molecule made whole across cell faces, and
//! how much of a mode moves molecules as rigid bodies.
//!
//! Works for any cell and any choice of lattice translation for the written positions; the answers
//! do not depend on them. What counts as a bond is the caller's tolerance.

mod bonds;

use std::collections::{BTreeMap, VecDeque};

use nalgebra::{Matrix3, Vector3};
use tarehouse_eigensolver::c64;

use crate::crystal::Crystal;
use crate::elements::Element;
use crate::supercell::Translation;
use bonds::ReducedLattice;

/// Radius of gyration about an axis below which turning about it is no motion, Å. A linear molecule
/// bent by the noise of a relaxation stays far below; the smallest of a truly bent molecule (water,
/// about 0.18 Å) far above.
const GYRATION_MIN_ANG: f64 = 0.05;

/// How far a molecule extends.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Extent {
    /// A finite molecule, or a single atom.
    Finite,
    /// A network without end in this many directions: 1 a chain, 2 a layer, 3 a framework.
    Periodic(u8),
}

/// An atom of a molecule: the atom of the cell, and the lattice translation that puts it beside its
/// neighbours.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Member {
    /// Index of the atom in the crystal.
    pub atom: usize,
    /// Translation to add to its written position, in the primitive basis.
    pub shift: Translation,
}

/// One molecule, made whole.
#[derive(Debug, Clone, PartialEq)]
pub struct Molecule {
    members: Vec<Member>,
    extent: Extent,
    formula: BTreeMap<Element, usize>,
    centre: Vector3<f64>,
    axis: Option<Translation>,
}

impl Molecule {
    /// Its atoms, by rising atom index. Of a periodic network, one repeat unit.
    pub fn members(&self) -> &[Member] {
        &self.members
    }

    /// Whether it ends.
    pub fn extent(&self) -> Extent {
        self.extent
    }

    /// Number of atoms of each element.
    pub fn formula(&self) -> &BTreeMap<Element, usize> {
        &self.formula
    }

    /// Its formula in the order of Hill (J. Am. Chem. Soc. 22, 478 (1900)), as in `C2 H6 O`:
    /// carbon, then hydrogen if there is carbon, then the rest by letter.
    pub fn hill_formula(&self) -> String {
        let symbols = || self.formula.keys().map(|element| element.symbol());
        let has_carbon = symbols().any(|symbol| symbol == "C");
        let rank = |symbol: &str| match symbol {
            "C" => 0,
            "H" if has_carbon => 1,
            _ => 2,
        };
        let mut parts: Vec<(&str, usize)> = symbols().zip(self.formula.values().copied()).collect();
        parts.sort_by_key(|&(symbol, _)| (rank(symbol), symbol));
        let text = |&(symbol, count): &(&str, usize)| match count {
            1 => symbol.to_owned(),
            _ => format!("{symbol}{count}"),
        };
        parts.iter().map(text).collect::<Vec<_>>().join(" ")
    }

    /// Centre of mass of the whole molecule, fractional, not wrapped. Of a periodic network, that
    /// of its repeat unit.
    pub fn centre(&self) -> &Vector3<f64> {
        &self.centre
    }
}

/// All molecules of a crystal; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct Molecules {
    list: Vec<Molecule>,
    of_atom: Vec<usize>,
    centre_distance_ang: f64,
}

impl Molecules {
    /// The molecules of `crystal`: atoms are bonded if they are nearer than the sum of their
    /// covalent radii plus `bond_tolerance_ang` (0.3 to 0.4 Å is common practice). Sorted by their
    /// first atom.
    ///
    /// Cost: atoms² × the lattice translations within a bond length.
    pub fn find(crystal: &Crystal, bond_tolerance_ang: f64) -> Self {
        let lattice = ReducedLattice::new(crystal.cell());
        let bonds = bonds::find(crystal, &lattice, bond_tolerance_ang);
        let atom_count = crystal.atom_count();
        let mut molecule_of_atom = vec![usize::MAX; atom_count];
        let mut molecules = Vec::new();
        for atom in 0..atom_count {
            if molecule_of_atom[atom] != usize::MAX {
                continue;
            }
            let (members, cycles) = walk(atom, &bonds);
            for member in &members {
                molecule_of_atom[member.atom] = molecules.len();
            }
            molecules.push(assemble(crystal, members, &cycles));
        }
        let centre_distance_ang = nearest_centres_ang(&molecules, &lattice);
        Self {
            list: molecules,
            of_atom: molecule_of_atom,
            centre_distance_ang,
        }
    }

    /// The molecules, sorted by their first atom.
    pub fn molecules(&self) -> &[Molecule] {
        &self.list
    }

    /// Index of the molecule of each atom.
    pub fn molecule_of_atom(&self) -> &[usize] {
        &self.of_atom
    }

    /// Whether some bonds run on without end, so that the crystal is not made of molecules.
    pub fn has_networks(&self) -> bool {
        self.list
            .iter()
            .any(|molecule| molecule.extent != Extent::Finite)
    }

    /// Shortest distance between the centres of two molecules, periodic images of one included, Å.
    pub fn nearest_centre_distance_ang(&self) -> f64 {
        self.centre_distance_ang
    }

    /// Share of a mode that moves molecules as rigid bodies, 0 to 1: Σ over molecules and their
    /// rigid motions g of |g†v|² / |e|², with v_i = e_i exp(2πi q·(x_i + R_i)) and R_i the
    /// translation that makes the molecule whole.
    ///
    /// `eigenvector` has the 3n mass-weighted components of the atom-phase dynamical matrix,
    /// D_ij(q) = Σ Φ exp(iq·(R + r_j − r_i))/√(m_i m_j), atom by atom; `q_frac` is in fractional
    /// reciprocal coordinates. The rigid motions are the three translations and the rotations about
    /// the principal axes through the centre of mass (Eckart, Phys. Rev. 47, 552 (1935)): two for a
    /// linear molecule, none for an atom, one about the axis of a chain, none for layers and
    /// frameworks. Zero for a vector without length.
    pub fn external_fraction(
        &self,
        crystal: &Crystal,
        q_frac: &Vector3<f64>,
        eigenvector: &[c64],
    ) -> f64 {
        debug_assert_eq!(eigenvector.len(), 3 * crystal.atom_count());
        let length = squared_length(eigenvector);
        let rigid: f64 = self
            .list
            .iter()
            .map(|molecule| rigid_part(molecule, crystal, q_frac, eigenvector))
            .sum();
        if length > 0.0 { rigid / length } else { 0.0 }
    }
}

/// Squared overlap Σ_a |Σ_i √(m_i/M) e_ia|² / |e|² of a mode at Γ with the three rigid translations
/// of the crystal, 0 to 1. `eigenvector` has the 3n mass-weighted components, atom by atom. Zero
/// for a vector without length.
pub fn acoustic_overlap(masses_u: &[f64], eigenvector: &[c64]) -> f64 {
    debug_assert_eq!(eigenvector.len(), 3 * masses_u.len());
    let total_mass: f64 = masses_u.iter().sum();
    let length = squared_length(eigenvector);
    let mut overlap = 0.0;
    for axis in 0..3 {
        let components = eigenvector.iter().skip(axis).step_by(3);
        let amplitude: c64 = masses_u
            .iter()
            .zip(components)
            .map(|(mass, component)| component * (mass / total_mass).sqrt())
            .sum();
        overlap += amplitude.norm_sqr();
    }
    if length > 0.0 { overlap / length } else { 0.0 }
}

fn squared_length(vector: &[c64]) -> f64 {
    vector.iter().map(c64::norm_sqr).sum()
}

/// The atoms connected to `start`, and the net translations of the closed walks among them.
fn walk(start: usize, bonds: &[Vec<bonds::Bond>]) -> (Vec<Member>, Vec<Translation>) {
    let mut shifts = BTreeMap::from([(start, [0_i64; 3])]);
    let mut cycles = Vec::new();
    let mut queue = VecDeque::from([start]);
    while let Some(atom) = queue.pop_front() {
        let shift = shifts[&atom];
        for bond in &bonds[atom] {
            let reached: Translation = std::array::from_fn(|c| shift[c] + bond.translation[c]);
            match shifts.get(&bond.to) {
                None => {
                    shifts.insert(bond.to, reached);
                    queue.push_back(bond.to);
                }
                Some(known) if *known != reached => {
                    cycles.push(std::array::from_fn(|c| reached[c] - known[c]));
                }
                Some(_) => {}
            }
        }
    }
    let members = shifts
        .into_iter()
        .map(|(atom, shift)| Member { atom, shift })
        .collect();
    (members, cycles)
}

fn assemble(crystal: &Crystal, members: Vec<Member>, cycles: &[Translation]) -> Molecule {
    let mut formula = BTreeMap::new();
    let (mut mass_u, mut moment) = (0.0, Vector3::zeros());
    for member in &members {
        *formula.entry(crystal.elements()[member.atom]).or_insert(0) += 1;
        let mass = crystal.masses_u()[member.atom];
        mass_u += mass;
        moment += whole_position(crystal, member) * mass;
    }
    let extent = match rank(cycles) {
        0 => Extent::Finite,
        dimension => Extent::Periodic(dimension),
    };
    let axis = cycles.first().copied();
    Molecule {
        members,
        extent,
        formula,
        centre: moment / mass_u,
        axis: axis.filter(|_| extent == Extent::Periodic(1)),
    }
}

/// Fractional position of an atom in its whole molecule.
fn whole_position(crystal: &Crystal, member: &Member) -> Vector3<f64> {
    crystal.positions()[member.atom] + Vector3::from(member.shift.map(|x| x as f64))
}

/// Number of independent vectors among non-zero integer vectors.
fn rank(vectors: &[Translation]) -> u8 {
    let Some(first) = vectors.first() else {
        return 0;
    };
    let Some(normal) = vectors
        .iter()
        .map(|vector| cross(first, vector))
        .find(|normal| *normal != [0, 0, 0])
    else {
        return 1;
    };
    let leaves_plane = |v: &Translation| (0..3).map(|c| normal[c] * v[c]).sum::<i64>() != 0;
    if vectors.iter().any(leaves_plane) {
        3
    } else {
        2
    }
}

fn cross(a: &Translation, b: &Translation) -> Translation {
    std::array::from_fn(|c| {
        let (next, last) = ((c + 1) % 3, (c + 2) % 3);
        a[next] * b[last] - a[last] * b[next]
    })
}

fn nearest_centres_ang(molecules: &[Molecule], lattice: &ReducedLattice) -> f64 {
    let mut nearest = lattice.shortest_ang();
    for (index, first) in molecules.iter().enumerate() {
        for second in molecules.iter().skip(index + 1) {
            let separation = second.centre - first.centre;
            for (_, distance) in lattice.images_within(&separation, nearest) {
                nearest = nearest.min(distance);
            }
        }
    }
    nearest
}

/// Σ |g†v|² over the rigid motions of one molecule.
fn rigid_part(
    molecule: &Molecule,
    crystal: &Crystal,
    q_frac: &Vector3<f64>,
    eigenvector: &[c64],
) -> f64 {
    let mut mass_u = 0.0;
    let mut inertia = Matrix3::zeros();
    let mut push = Vector3::<c64>::zeros();
    let mut twist = Vector3::<c64>::zeros();
    for member in &molecule.members {
        let position = whole_position(crystal, member);
        let arm = crystal.cartesian(&(position - molecule.centre));
        let mass = crystal.masses_u()[member.atom];
        let phase = c64::from_polar(mass.sqrt(), std::f64::consts::TAU * q_frac.dot(&position));
        let components = eigenvector.iter().skip(3 * member.atom);
        let mut moved = Vector3::<c64>::zeros();
        for (target, component) in moved.iter_mut().zip(components) {
            *target = component * phase;
        }
        mass_u += mass;
        inertia += (Matrix3::identity() * arm.norm_squared() - arm * arm.transpose()) * mass;
        push += moved;
        twist += arm.map(|x| c64::new(x, 0.0)).cross(&moved);
    }
    let translation = push.iter().map(c64::norm_sqr).sum::<f64>() / mass_u;
    let rotation: f64 = rotation_axes(molecule, crystal, &inertia)
        .into_iter()
        .map(|(axis, moment)| {
            let turned: c64 = twist.iter().zip(axis.iter()).map(|(z, x)| z * x).sum();
            (turned.norm_sqr(), moment)
        })
        .filter(|(_, moment)| *moment > GYRATION_MIN_ANG * GYRATION_MIN_ANG * mass_u)
        .map(|(turned, moment)| turned / moment)
        .sum();
    translation + rotation
}

/// Axes about which a molecule may turn as a rigid body, with the moments of inertia about them, u
/// Å². The motions √m (axis × arm) about principal axes are orthogonal to each other and to the
/// translations.
fn rotation_axes(
    molecule: &Molecule,
    crystal: &Crystal,
    inertia: &Matrix3<f64>,
) -> Vec<(Vector3<f64>, f64)> {
    match (molecule.extent, molecule.axis) {
        (Extent::Finite, _) => {
            let principal = inertia.symmetric_eigen();
            (0..3)
                .map(|k| {
                    let axis = principal.eigenvectors.column(k).into_owned();
                    (axis, principal.eigenvalues[k])
                })
                .collect()
        }
        (Extent::Periodic(_), Some(chain)) => {
            let along = crystal.cartesian(&Vector3::from(chain.map(|x| x as f64)));
            let axis = along.normalize();
            vec![(axis, axis.dot(&(inertia * axis)))]
        }
        (Extent::Periodic(_), None) => Vec::new(),
    }
}

#[cfg(test)]
mod tests;
