//! Readings of one array of constants, and how plausible each is.

use nalgebra::{Matrix3, SymmetricEigen, Vector3};
use tarehouse_physics::images::PairImages;
use tarehouse_physics::{ForceConstants, Supercell};

use crate::checks::sums::show_block;
use crate::policy::BlunderLimits;
use crate::workup::Workup;

/// One way to read the array.
#[derive(Clone)]
pub(super) struct Arrangement<'a> {
    constants: &'a ForceConstants,
    /// Row r of the reading is row `axes[r]` of the array.
    axes: [usize; 3],
    sign: f64,
}

impl<'a> Arrangement<'a> {
    pub(super) fn as_given(constants: &'a ForceConstants) -> Self {
        Self {
            constants,
            axes: [0, 1, 2],
            sign: 1.0,
        }
    }

    pub(super) fn negated(&self) -> Self {
        Self {
            sign: -self.sign,
            ..self.clone()
        }
    }

    pub(super) fn axis_permutations(&self) -> [Self; 5] {
        AXIS_EXCHANGES.map(|axes| Self {
            axes,
            ..self.clone()
        })
    }

    fn block(&self, cell: usize, displaced: usize, response: usize) -> Matrix3<f64> {
        let block = self.constants.block(cell, displaced, response);
        Matrix3::from_fn(|r, c| self.sign * block[(self.axes[r], self.axes[c])])
    }
}

/// A bond inside a finite molecule.
struct Bond {
    cell: usize,
    from: usize,
    to: usize,
    direction: Vector3<f64>,
    to_hydrogen: bool,
}

/// All bonds of a molecular crystal, each in both directions.
pub(super) struct Bonds(Vec<Bond>);

impl Bonds {
    pub(super) fn find(workup: &Workup<'_>) -> Self {
        if workup.molecules.has_networks() {
            return Self(Vec::new());
        }
        let tolerance = workup.limits.structure.bond_tolerance_angstrom;
        let elements = workup.crystal.elements();
        let n = elements.len();
        let home = workup.projected.home_cell();
        let mut bonds = Vec::new();
        for cell in 0..workup.projected.supercell().cell_count() {
            for from in 0..n {
                for to in 0..n {
                    if cell == home && from == to {
                        continue;
                    }
                    let radii = [from, to].map(|k| elements[k].covalent_radius_angstrom());
                    let mut vectors = workup.images.separations(&workup.crystal, cell, from, to);
                    let (Some(x), true) = (vectors.next(), vectors.len() == 0) else {
                        continue;
                    };
                    if x.norm() < radii[0] + radii[1] + tolerance {
                        let to_hydrogen =
                            [from, to].iter().any(|k| elements[*k].atomic_number() == 1);
                        bonds.push(Bond {
                            cell,
                            from,
                            to,
                            direction: x.normalize(),
                            to_hydrogen,
                        });
                    }
                }
            }
        }
        Self(bonds)
    }

    pub(super) fn is_empty(&self) -> bool {
        self.0.is_empty()
    }

    pub(super) fn len(&self) -> usize {
        self.0.len()
    }

    fn share(&self, passes: impl Fn(&Bond) -> bool) -> f64 {
        self.0.iter().filter(|bond| passes(bond)).count() as f64 / self.0.len().max(1) as f64
    }

    /// Share of bonds that are stiffest along the bond.
    pub(super) fn share_along(&self, reading: &Arrangement<'_>, limits: &BlunderLimits) -> f64 {
        self.share(|bond| is_along(bond, reading, limits))
    }

    /// Share of bonds stiffest along the bond, with a longitudinal constant of usual size after multiplication.
    pub(super) fn share_stiff(
        &self,
        reading: &Arrangement<'_>,
        limits: &BlunderLimits,
        factor: f64,
    ) -> f64 {
        let [least, largest] = limits.bond_constant_ev_per_ang2;
        self.share(|bond| {
            let constant = factor * longitudinal(bond, reading);
            constant >= least && constant <= largest && is_along(bond, reading, limits)
        })
    }

    /// Median longitudinal constant, eV/Å².
    pub(super) fn median_constant(&self, reading: &Arrangement<'_>) -> f64 {
        median(
            self.0
                .iter()
                .map(|bond| longitudinal(bond, reading))
                .collect(),
        )
        .unwrap_or_default()
    }

    /// Median longitudinal constant of bonds to hydrogen, eV/Å².
    pub(super) fn median_constant_to_hydrogen(&self, reading: &Arrangement<'_>) -> Option<f64> {
        let bonds = self.0.iter().filter(|bond| bond.to_hydrogen);
        median(bonds.map(|bond| longitudinal(bond, reading)).collect())
    }

    /// Share of the bonded atoms whose strongest block, their own left out, is nearer than `distance_ang`.
    pub(super) fn share_near(
        &self,
        reading: &Arrangement<'_>,
        workup: &Workup<'_>,
        distance_ang: f64,
    ) -> Option<f64> {
        let mut bonded: Vec<usize> = self.0.iter().map(|bond| bond.from).collect();
        bonded.sort_unstable();
        bonded.dedup();
        let home = workup.projected.home_cell();
        let strongest_distance = |i: usize| {
            let mut best = (0.0, f64::INFINITY);
            for cell in 0..workup.projected.supercell().cell_count() {
                for j in 0..workup.crystal.atom_count() {
                    let size = reading.block(cell, i, j).norm();
                    if !(cell == home && i == j) && size > best.0 {
                        best = (size, workup.images.distance(&workup.crystal, cell, i, j));
                    }
                }
            }
            best.1
        };
        let near = bonded
            .iter()
            .filter(|i| strongest_distance(**i) < distance_ang)
            .count();
        (!bonded.is_empty()).then(|| near as f64 / bonded.len() as f64)
    }
}

fn median(mut values: Vec<f64>) -> Option<f64> {
    values.sort_by(f64::total_cmp);
    values.get(values.len() / 2).copied()
}

/// −d̂ᵀ Φ d̂.
fn longitudinal(bond: &Bond, reading: &Arrangement<'_>) -> f64 {
    -bond
        .direction
        .dot(&(reading.block(bond.cell, bond.from, bond.to) * bond.direction))
}

fn is_along(bond: &Bond, reading: &Arrangement<'_>, limits: &BlunderLimits) -> bool {
    let block = -reading.block(bond.cell, bond.from, bond.to);
    let eigen = SymmetricEigen::new((block + block.transpose()) * 0.5);
    let stiffest = eigen.eigenvalues.iamax();
    let cosine = eigen
        .eigenvectors
        .column(stiffest)
        .dot(&bond.direction)
        .abs();
    cosine > limits.bond_direction_cosine
}

/// How far the array leans towards another reading, −1 to 1:
/// Σ|Φ|(d − d')/Σ|Φ||d − d'|, with d the distance of each block as given and d' in the other reading, over the blocks that
/// the other reading moves by more than the policy's `moved_angstrom`. Blocks that both readings leave in place say nothing.
fn lean(workup: &Workup<'_>, other_distance: impl Fn(usize, usize, usize) -> f64) -> f64 {
    let raw = &workup.submission.constants;
    let n = raw.atom_count();
    let least = workup.limits.blunders.moved_angstrom;
    let (mut towards, mut total) = (0.0, 0.0);
    for (flat, block) in raw.blocks().iter().enumerate() {
        let (l, i, j) = (flat / (n * n), flat / n % n, flat % n);
        let moved = workup.images.distance(&workup.crystal, l, i, j) - other_distance(l, i, j);
        if moved.abs() > least {
            towards += block.norm() * moved;
            total += block.norm() * moved.abs();
        }
    }
    if total > 0.0 { towards / total } else { 0.0 }
}

/// How far the array leans towards translations with the opposite sign: the same thing as a swapped index order.
pub(super) fn lean_mirrored(workup: &Workup<'_>) -> f64 {
    let supercell = workup.projected.supercell();
    lean(workup, |l, i, j| {
        workup
            .images
            .distance(&workup.crystal, supercell.negative(l), i, j)
    })
}

/// How far the array leans towards the supercell with its axes exchanged, at most over all exchanges; with the translations
/// exchanged alike, or in the order that a script would give them for that matrix.
pub(super) fn lean_exchanged(workup: &Workup<'_>) -> f64 {
    let tolerance = workup.limits.structure.tie_tolerance_angstrom;
    exchanged(workup.projected.supercell())
        .iter()
        .map(|supercell| {
            let images = PairImages::find(&workup.crystal, supercell, tolerance);
            lean(workup, |l, i, j| images.distance(&workup.crystal, l, i, j))
        })
        .fold(-1.0, f64::max)
}

/// Other readings of the supercell: its axes exchanged.
fn exchanged(supercell: &Supercell) -> Vec<Supercell> {
    let mut readings: Vec<Supercell> = Vec::new();
    for axes in AXIS_EXCHANGES {
        let matrix = axes.map(|r| axes.map(|c| supercell.matrix()[r][c]));
        let translations = supercell
            .translations()
            .iter()
            .map(|t| axes.map(|c| t[c]))
            .collect();
        let alike = Supercell::new(matrix, translations);
        let remade = Supercell::with_default_translations(matrix);
        for reading in [alike, remade].into_iter().flatten() {
            if reading != *supercell && !readings.contains(&reading) {
                readings.push(reading);
            }
        }
    }
    readings
}

/// The five exchanges of three axes.
const AXIS_EXCHANGES: [[usize; 3]; 5] = [[1, 2, 0], [2, 0, 1], [1, 0, 2], [0, 2, 1], [2, 1, 0]];

/// A block that is zero where its partner under exchange, or a bond, says that it should not be.
pub(super) fn zeroed(workup: &Workup<'_>, bonds: &Bonds) -> Option<String> {
    let raw = &workup.submission.constants;
    let (supercell, n) = (raw.supercell(), raw.atom_count());
    let scale = raw.largest_self_constant();
    let least = workup.limits.sums.translation_fail * scale;
    let is_zero = |l: usize, i: usize, j: usize| raw.block(l, i, j).iter().all(|x| x.abs() <= 0.0);
    for l in 0..supercell.cell_count() {
        for i in 0..n {
            for j in 0..n {
                let partner = raw.block(supercell.negative(l), j, i).amax();
                if is_zero(l, i, j) && partner > least {
                    return Some(show_block(workup, l, i, j));
                }
            }
        }
    }
    let missing = bonds
        .0
        .iter()
        .find(|bond| is_zero(bond.cell, bond.from, bond.to));
    missing.map(|bond| show_block(workup, bond.cell, bond.from, bond.to))
}

/// A block that equals another one to the last bit, and does not fit its own partner.
///
/// Equal blocks alone prove nothing: symmetry-expanded constants have them. A copy put in the wrong place breaks pair
/// symmetry there.
pub(super) fn duplicated(workup: &Workup<'_>) -> Option<String> {
    let raw = &workup.submission.constants;
    let (supercell, n) = (raw.supercell(), raw.atom_count());
    let outlier = workup.limits.sums.space_group_fail * raw.largest_self_constant();
    let asymmetric = |flat: usize| {
        let (l, i, j) = (flat / (n * n), flat / n % n, flat % n);
        let partner = raw.block(supercell.negative(l), j, i).transpose();
        (raw.blocks()[flat] - partner).amax() > outlier
    };
    let bits = |block: &Matrix3<f64>| -> Vec<u64> { block.iter().map(|x| x.to_bits()).collect() };
    let mut seen = std::collections::HashMap::new();
    for (flat, block) in raw.blocks().iter().enumerate() {
        if block.amax() > 0.0 {
            seen.entry(bits(block)).or_insert_with(Vec::new).push(flat);
        }
    }
    let copies = raw.blocks().iter().enumerate().filter(|(flat, block)| {
        asymmetric(*flat)
            && seen
                .get(&bits(block))
                .is_some_and(|places| places.len() > 1)
    });
    let place = copies.map(|(flat, _)| flat).next()?;
    Some(show_block(
        workup,
        place / (n * n),
        place / n % n,
        place % n,
    ))
}
