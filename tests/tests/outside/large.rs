//! The package made for measuring time and memory is what it says.

use tarehouse_physics::molecules::{Extent, Molecules};
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::wavenumber_per_cm;
use tarehouse_tests::large_package::{SIGMA, large_package};

use crate::service::dynamics_of;

#[test]
fn large_package_holds_four_molecules_of_66_atoms_near_a_minimum() {
    let package = large_package().unwrap();
    let arrays = [("constants.npy", package.constants.as_slice())];
    let submission =
        tarehouse_proto::package::decode(package.manifest.as_bytes(), &arrays).unwrap();
    assert_eq!(submission.crystal.atom_count(), 264);
    assert_eq!(submission.constants.supercell().cell_count(), 4);
    let group = SpaceGroup::find(&submission.crystal, 1e-3).unwrap();
    assert_eq!(group.number, 14);
    assert!(group.inversion().is_some());
    let molecules = Molecules::find(&submission.crystal, 0.35);
    assert_eq!(molecules.molecules().len(), 4);
    for molecule in molecules.molecules() {
        assert_eq!(molecule.extent(), Extent::Finite);
        assert_eq!(
            molecule.hill_formula(),
            submission.identity.formula.to_string()
        );
    }
    let dynamics = dynamics_of(&submission.crystal, &submission.constants);
    for q in submission.constants.supercell().commensurate_points() {
        let lowest = wavenumber_per_cm(dynamics.eigenvalues(&q).unwrap()[0]);
        assert!(lowest > -5.0, "{lowest} at {q:?}");
    }
    let force = submission.settings.force_residual_max_ev_per_angstrom;
    assert!(force.unwrap() < 1e-6);
    // White noise of the declared size, and nothing else: pairs differ by it.
    let constants = &submission.constants;
    let home = constants.home_cell();
    let differences = (0..263).map(|i| {
        let (there, back) = (
            constants.block(home, i, i + 1),
            constants.block(home, i + 1, i),
        );
        (there - back.transpose()).norm_squared()
    });
    let deviation = (differences.sum::<f64>() / (263.0 * 9.0 * 2.0)).sqrt();
    assert!((deviation / SIGMA - 1.0).abs() < 0.1, "{deviation}");
}
