//! Searches random packings of an invented compound: relaxes them, keeps the distinct minima, and lists energy, lowest
//! exact eigenvalue and free energy of the best. This is how the forms of the scenario were found.
//!
//! `search-packings COMPOUND STARTS SEED KEEP [GROUP…]`

use std::io::Write;

use nalgebra::Vector3;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rayon::prelude::*;
use tarehouse_demo_data::constants::RealSpaceConstants;
use tarehouse_demo_data::harmonic::{Mesh, Spectrum};
use tarehouse_demo_data::packing::random_packing;
use tarehouse_demo_data::relax::{Limits, TIGHT};
use tarehouse_demo_data::{Compound, ModelError, MolecularCrystal, SpaceGroup, forms, relax};
use tarehouse_physics::units::{EV_TO_KJ_PER_MOL, wavenumber_per_cm};

/// Good enough to tell minima apart.
const ROUGH: Limits = Limits {
    force_ev_per_ang: 1e-5,
    stress_ev_per_ang3: 1e-6,
    iterations: 250,
};

struct Minimum {
    group: SpaceGroup,
    crystal: MolecularCrystal,
    energy_kj: f64,
}

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let mut out = std::io::stdout().lock();
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let [name, starts, seed, keep, groups @ ..] = arguments.as_slice() else {
        writeln!(out, "search-packings COMPOUND STARTS SEED KEEP [GROUP...]")?;
        return Ok(());
    };
    let compound = match name.as_str() {
        "drosmelide" => forms::drosmelide()?,
        _ => forms::pelquonol()?,
    };
    let (starts, seed, keep): (u64, u64, usize) = (starts.parse()?, seed.parse()?, keep.parse()?);
    let mut found: Vec<Minimum> = Vec::new();
    for group in SpaceGroup::ALL {
        if groups.is_empty() || groups.iter().any(|g| g == group.symbol()) {
            found.extend(search(&compound, group, starts, seed));
        }
    }
    found.sort_by(|a, b| a.energy_kj.total_cmp(&b.energy_kj));
    // `dedup_by` removes its first argument; of equal minima the one with the least oblique cell stays.
    found.dedup_by(|a, b| {
        let same = (a.energy_kj - b.energy_kj).abs() < 2e-3;
        if same && a.crystal.cell_heights().norm() > b.crystal.cell_heights().norm() {
            std::mem::swap(a, b);
        }
        same
    });
    for (rank, minimum) in found.into_iter().take(keep).enumerate() {
        describe(&mut out, rank, &minimum)?;
    }
    Ok(())
}

fn search(compound: &Compound, group: SpaceGroup, starts: u64, seed: u64) -> Vec<Minimum> {
    (0..starts)
        .into_par_iter()
        .filter_map(|start| {
            let stream = seed * 1_000_000 + start;
            let mut rng = ChaCha8Rng::seed_from_u64(stream);
            let packing = random_packing(compound, group, &mut rng).ok()??;
            let crystal = relax(&packing, group, ROUGH).ok()?;
            let energy = crystal.energy_ev() / crystal.molecule_count() as f64;
            Some(Minimum {
                group,
                crystal,
                energy_kj: energy * EV_TO_KJ_PER_MOL,
            })
        })
        .collect()
}

fn describe(out: &mut impl Write, rank: usize, minimum: &Minimum) -> Result<(), std::io::Error> {
    let crystal = match relax(&minimum.crystal, minimum.group, TIGHT) {
        Ok(crystal) => crystal,
        Err(error) => return writeln!(out, "{rank} {:.3} {error}", minimum.energy_kj),
    };
    if let Err(error) = report(out, rank, minimum, &crystal) {
        writeln!(out, "{rank} {error}")?;
    }
    Ok(())
}

fn report(
    out: &mut impl Write,
    rank: usize,
    minimum: &Minimum,
    crystal: &MolecularCrystal,
) -> Result<(), ModelError> {
    let constants = RealSpaceConstants::of(crystal)?;
    let reciprocal = constants.crystal().reciprocal();
    let count = crystal.molecule_count() as f64;
    let shifted = Mesh::with_spacing(&reciprocal, 0.2, [1; 3], true);
    let centred = Mesh::with_spacing(&reciprocal, 0.2, [2; 3], false);
    let thermal = Spectrum::exact(&constants, &shifted)?;
    let free = |t: f64| minimum.energy_kj + thermal.free_energy_ev(t) / count * EV_TO_KJ_PER_MOL;
    let mut lowest = (0.0, Vector3::zeros());
    for (q, _) in centred.points() {
        let values = constants.eigenvalues(&q)?;
        if values[0] < lowest.0 - 1e-9 {
            lowest = (values[0], q);
        }
    }
    let (lowest, at) = lowest;
    let h = crystal.cell_heights();
    let line = format!(
        "{rank:3} {:11} E {:9.3} V {:6.2} low {:8.2} at {:.2} {:.2} {:.2} F0 {:9.3} F300 {:9.3} F500 {:9.3} h {:.2} {:.2} {:.2}",
        minimum.group.symbol(),
        minimum.energy_kj,
        crystal.cell().determinant() / count,
        wavenumber_per_cm(lowest),
        at.x,
        at.y,
        at.z,
        free(0.0),
        free(300.0),
        free(500.0),
        h.x,
        h.y,
        h.z,
    );
    let size = crystal.compound().sites().len();
    let cell: Vec<[f64; 3]> = (0..3)
        .map(|r| std::array::from_fn(|c| crystal.cell()[(r, c)]))
        .collect();
    let atoms: Vec<[f64; 3]> = crystal.fractional()[..size]
        .iter()
        .map(|x| (*x).into())
        .collect();
    writeln!(out, "{line}\n      cell {cell:?}\n      atoms {atoms:?}")
        .map_err(|error| ModelError::Crystal(error.to_string()))
}
