//! decode(encode(x)) = x.

use nalgebra::{Matrix3, Vector3};
use proptest::collection::vec;
use proptest::option;
use proptest::prelude::*;
use proptest::sample::select;
use tarehouse_assay::Submission;
use tarehouse_assay::submission::{
    CellProtocol, Claims, Component, Declaration, Dielectric, Differences, Displaced, Energy,
    Enforced, Formula, Identity, LevelParts, LongRange, MethodKind, Scheme, Settings,
};
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_physics::{Crystal, Element, ForceConstants, Supercell};
use tarehouse_proto::package::{check_manifest, decode, encode};

fn number() -> impl Strategy<Value = f64> {
    prop_oneof![-10.0..10.0, -1e-12..1e-12, -1e14..1e14]
}

fn size() -> impl Strategy<Value = Option<f64>> {
    option::of(prop_oneof![0.0..10.0, 1e-13..1e-9])
}

/// Never empty, no blanks at the ends; quotes, backslashes and letters of other alphabets inside.
fn name() -> impl Strategy<Value = String> {
    "[a-zA-Zäβ][a-z \"\\\\=#']{0,8}[a-z]"
}

fn words() -> impl Strategy<Value = Option<String>> {
    option::of(name())
}

fn level() -> impl Strategy<Value = LevelParts> {
    (words(), words(), words(), words()).prop_map(
        |(functional, dispersion, basis, pseudopotentials)| LevelParts {
            functional,
            dispersion,
            basis,
            pseudopotentials,
        },
    )
}

fn matrix() -> impl Strategy<Value = Matrix3<f64>> {
    vec(number(), 9).prop_map(|x| Matrix3::from_row_slice(&x))
}

fn settings() -> impl Strategy<Value = Settings> {
    (
        option::of(select(vec![
            MethodKind::Dft,
            MethodKind::Wavefunction,
            MethodKind::TightBinding,
            MethodKind::MlPotential,
            MethodKind::ForceField,
        ])),
        (words(), level(), words(), option::of(1_u32..=256)),
        vec(size(), 7),
        option::of(matrix()),
        option::of(select(vec![
            Scheme::FiniteDisplacement,
            Scheme::LinearResponse,
        ])),
        option::of(select(vec![Differences::Central, Differences::Forward])),
    )
        .prop_map(
            |(
                kind,
                (program, level, model_digest, float_bits),
                x,
                stress_gpa,
                scheme,
                differences,
            )| Settings {
                kind,
                program,
                level,
                model_digest,
                float_bits,
                orbital_cutoff_ev: x[0],
                density_to_orbital_cutoff: x[1],
                k_spacing_per_angstrom: x[2],
                scf_tolerance_ev_per_atom: x[3],
                force_residual_rms_ev_per_angstrom: x[4],
                force_residual_max_ev_per_angstrom: x[5],
                stress_gpa,
                scheme,
                differences,
                displacement_angstrom: x[6],
            },
        )
}

fn declaration() -> impl Strategy<Value = Declaration> {
    (
        select(vec![FirstIndex::Displaced, FirstIndex::Response]),
        select(vec![Displaced::All, Displaced::Inequivalent]),
        vec(
            select(vec![
                Enforced::PairSymmetry,
                Enforced::TranslationSum,
                Enforced::RotationSum,
                Enforced::SpaceGroup,
            ]),
            0..4,
        ),
        select(vec![LongRange::Included, LongRange::Removed]),
    )
        .prop_map(
            |(first_index, displaced, enforced, long_range)| Declaration {
                unit: ForceConstantUnit::EvPerAngstrom2,
                first_index,
                displaced,
                raw: enforced.is_empty(),
                enforced,
                long_range,
            },
        )
}

fn element(symbol: &str) -> Element {
    Element::from_symbol(symbol).unwrap()
}

/// Two formula units of H2 O or D2 O in a cell that is neither rectangular nor always right-handed.
fn crystal() -> impl Strategy<Value = (Crystal, bool)> {
    let shifts = vec(-0.02..0.02, 27);
    (
        shifts,
        select(vec!["H", "D"]),
        any::<bool>(),
        option::of(vec(0.5..40.0, 6)),
    )
        .prop_map(|(x, hydrogen, left_handed, masses)| {
            let hand = if left_handed { -1.0 } else { 1.0 };
            let mut cell = Matrix3::from_diagonal(&Vector3::new(6.0, 7.0, 8.0 * hand));
            let mut positions = Vec::new();
            for (k, place) in [
                [0.0, 0.0, 0.0],
                [0.2, 0.0, 0.0],
                [0.0, 0.2, 0.0],
                [1.5, 0.5, -0.5],
                [0.7, 0.5, 0.5],
                [0.5, 0.7, 0.5],
            ]
            .into_iter()
            .enumerate()
            {
                positions.push(Vector3::from_fn(|c, _| place[c] + x[3 * k + c]));
            }
            cell += Matrix3::from_fn(|r, c| 10.0 * x[18 + 3 * r + c]);
            let elements = ["O", hydrogen, hydrogen, "O", hydrogen, hydrogen]
                .map(element)
                .to_vec();
            let declared = masses.is_some();
            (
                Crystal::new(cell, elements, positions, masses).unwrap(),
                declared,
            )
        })
}

fn supercell() -> impl Strategy<Value = Supercell> {
    let matrices = vec![
        [[1, 0, 0], [0, 1, 0], [0, 0, 1]],
        [[1, 1, 0], [-1, 1, 0], [0, 0, 1]],
        [[1, 0, 2], [0, -1, 0], [0, 1, 3]],
    ];
    (select(matrices), any::<bool>()).prop_map(|(matrix, reverse)| {
        let supercell = Supercell::with_default_translations(matrix).unwrap();
        let mut translations = supercell.translations().to_vec();
        if reverse {
            translations.reverse();
        }
        Supercell::new(matrix, translations).unwrap()
    })
}

fn identity() -> impl Strategy<Value = (Identity, Option<String>)> {
    (name(), name(), words(), "[a-z\n\t\"]{0,20}", words()).prop_map(
        |(compound, form, key, note, inchi)| {
            let identity = Identity {
                compound,
                formula: Formula::default(),
                form,
                formula_units: 2,
                contributor_key: key,
                note,
            };
            (identity, inchi)
        },
    )
}

fn submission() -> impl Strategy<Value = Submission> {
    let charges = option::of((vec(matrix(), 6), matrix()));
    let protocols = vec![
        CellProtocol::Relaxed,
        CellProtocol::Experimental,
        CellProtocol::Expanded,
        CellProtocol::Other,
    ];
    (
        (identity(), any::<bool>(), -3..3_i32),
        (crystal(), select(protocols), option::of(0.0..400.0)),
        (supercell(), vec(number(), 9 * 36 * 3), declaration()),
        (number(), option::of(level()), number()),
        charges,
        (option::of(number()), vec((0.0..1000.0, number()), 0..3)),
        settings(),
    )
        .prop_map(
            |((names, declare, charge), cell, constants, energy, charges, claims, settings)| {
                let ((mut identity, inchi), ((crystal, masses_declared), protocol, temperature_k)) =
                    (names, cell);
                identity.formula =
                    Formula::from_counts(vec![(crystal.elements()[1], 2), (element("O"), 1)]);
                let formula = identity.formula.clone();
                let component = Component {
                    name: "water".to_owned(),
                    formula,
                    count: 1,
                    charge,
                    inchi,
                };
                let (supercell, mut values, declaration) = constants;
                values.truncate(9 * 36 * supercell.cell_count());
                let first = FirstIndex::Displaced;
                let unit = ForceConstantUnit::EvPerAngstrom2;
                Submission {
                    package_digest: [0; 32],
                    identity,
                    components: if declare { vec![component] } else { Vec::new() },
                    constants: ForceConstants::from_array(supercell, 6, &values, unit, first)
                        .unwrap(),
                    crystal,
                    masses_declared,
                    cell_protocol: protocol,
                    cell_temperature_k: temperature_k,
                    declaration,
                    energy: Energy {
                        lattice_energy_ev: energy.0,
                        level: energy.1,
                        conformational_correction_ev: energy.2,
                    },
                    dielectric: charges.map(|(effective_charges, permittivity)| Dielectric {
                        effective_charges,
                        permittivity,
                    }),
                    claims: Claims {
                        zero_point_energy_ev: claims.0,
                        free_energy_ev: claims.1,
                    },
                    settings,
                }
            },
        )
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn a_package_comes_back_the_same(mut submission in submission()) {
        let package = encode(&submission);
        let decoded = decode(package.manifest.as_bytes(), &package.array_refs());
        submission.package_digest = package.digest();
        prop_assert_eq!(decoded, Ok(submission));
        let summary = check_manifest(package.manifest.as_bytes()).unwrap();
        let expected: Vec<&str> = summary.arrays.iter().map(|array| array.name.as_str()).collect();
        let names: Vec<&str> = package.arrays.iter().map(|(name, _)| name.as_str()).collect();
        prop_assert_eq!(expected, names);
        for (array, (_, bytes)) in summary.arrays.iter().zip(&package.arrays) {
            prop_assert!(array.accepts_size(bytes.len() as u64));
        }
    }

    #[test]
    fn other_units_come_back_to_the_last_place(
        mut submission in submission(),
        unit in select(ForceConstantUnit::ALL.to_vec()),
    ) {
        submission.declaration.unit = unit;
        let package = encode(&submission);
        let decoded = decode(package.manifest.as_bytes(), &package.array_refs()).unwrap();
        let (new, old) = (decoded.constants.to_array(), submission.constants.to_array());
        for (new, old) in new.iter().zip(&old) {
            prop_assert!((new - old).abs() <= 2.0 * f64::EPSILON * old.abs(), "{new} {old}");
        }
    }

    #[test]
    fn broken_text_never_breaks_the_reader(
        submission in submission(),
        at in any::<prop::sample::Index>(),
        piece in "[\\PC\n]{0,6}",
    ) {
        let package = encode(&submission);
        let mut text: Vec<char> = package.manifest.chars().collect();
        let at = at.index(text.len());
        text.splice(at..(at + 2).min(text.len()), piece.chars());
        let text: String = text.into_iter().collect();
        if let Err(violations) = decode(text.as_bytes(), &package.array_refs()) {
            prop_assert!(!violations.is_empty());
        }
    }
}
