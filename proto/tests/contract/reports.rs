//! A report goes over the wire and comes back the same.

use proptest::collection::vec;
use proptest::option;
use proptest::prelude::*;
use prost::Message as _;
use tarehouse_assay::report::{
    BracketParts, CrystalFacts, Curves, Finding, FreeEnergy, LikelyCause, LowestBranch, Mesh,
    Noise, PolarModes, Remedy, Report, Rule, Severity, SoftMode, Strength, Tag, TruncationChange,
    Verdict,
};
use tarehouse_proto::convert::ConvertError;
use tarehouse_proto::v1;

fn number() -> impl Strategy<Value = f64> {
    prop_oneof![
        Just(0.0),
        -1e3..1e3,
        any::<f64>().prop_filter("finite", |x| x.is_finite())
    ]
}

fn maybe() -> impl Strategy<Value = Option<f64>> {
    option::of(number())
}

fn word() -> impl Strategy<Value = String> {
    "[a-zé /]{0,12}"
}

fn finding() -> impl Strategy<Value = Finding> {
    (
        proptest::sample::select(Rule::ALL),
        proptest::sample::select(vec![Severity::Pass, Severity::Caution, Severity::Fail]),
        (maybe(), maybe()),
        word(),
        proptest::sample::select(LikelyCause::ALL),
        (word(), word(), word()),
    )
        .prop_map(
            |(rule, severity, (measured, limit), unit, likely_cause, words)| Finding {
                rule,
                severity,
                measured,
                limit,
                unit,
                location: words.0,
                likely_cause,
                message: words.1,
                remedy: words.2,
            },
        )
}

fn soft_mode() -> impl Strategy<Value = SoftMode> {
    (
        (any::<bool>(), any::<bool>(), any::<bool>(), any::<u32>()),
        vec(number(), 8),
        vec(maybe(), 3),
        vec((number(), number()), 0..3),
        word(),
    )
        .prop_map(
            |((a, b, commensurate, point_count), x, y, changes, reason)| SoftMode {
                tag: if a {
                    Tag::Numerical
                } else {
                    Tag::PossiblyPhysical
                },
                strength: if b { Strength::Strong } else { Strength::Weak },
                lowest_wavenumber_per_cm: x[0],
                raw_wavenumber_per_cm: x[1],
                q: [x[2], x[3], x[4]],
                point_count,
                commensurate,
                z: y[0],
                alias_share: y[1],
                external_fraction: x[5],
                acoustic_overlap: x[6],
                participation: x[7],
                truncation_changes: changes
                    .into_iter()
                    .map(|(fraction, wavenumber_per_cm)| TruncationChange {
                        fraction,
                        wavenumber_per_cm,
                    })
                    .collect(),
                exclusion_limit_per_cm: y[2],
                reason,
            },
        )
}

fn noise() -> impl Strategy<Value = Noise> {
    (number(), vec(word(), 0..3), vec(any::<bool>(), 5)).prop_map(|(sigma, erased, flags)| Noise {
        sigma_ev_per_ang2: sigma,
        bound_only: flags[0],
        erased,
        truncated: flags[1],
        self_fixed: flags[2],
        symmetry_expanded: flags[3],
        rounded: flags[4],
    })
}

fn facts() -> impl Strategy<Value = CrystalFacts> {
    (any::<[u32; 2]>(), word(), vec(number(), 5), vec(maybe(), 4)).prop_map(|(n, symbol, x, y)| {
        CrystalFacts {
            space_group_number: n[0],
            space_group_symbol: symbol,
            volume_per_formula_unit_ang3: x[0],
            density_g_per_cm3: x[1],
            molecule_count: n[1],
            sound_velocity_min_m_per_s: y[0],
            sound_velocity_max_m_per_s: y[1],
            projection_relative_norm: x[2],
            projection_largest_ev_per_ang2: x[3],
            projection_free_energy_kj_per_mol: y[2],
            lattice_energy_kj_per_mol: x[4],
            polar_modes: vec![PolarModes {
                direction: [x[0], x[1], x[2]],
                wavenumbers_per_cm: x.clone(),
            }],
            compressibility_per_gpa: y[3],
        }
    })
}

fn free_energy() -> impl Strategy<Value = FreeEnergy> {
    (any::<bool>(), vec(number(), 7)).prop_map(|(defined, x)| FreeEnergy {
        temperature_k: x[0],
        defined,
        central_kj_per_mol: x[1],
        lower_kj_per_mol: x[2],
        upper_kj_per_mol: x[3],
        internal_energy_kj_per_mol: x[4],
        entropy_j_per_mol_k: x[5],
        heat_capacity_j_per_mol_k: x[6],
    })
}

fn curves() -> impl Strategy<Value = Curves> {
    vec(vec(number(), 0..4), 5).prop_map(|mut x| Curves {
        dos_wavenumber_per_cm: std::mem::take(&mut x[0]),
        dos_total: std::mem::take(&mut x[1]),
        dos_external: std::mem::take(&mut x[2]),
        reach_distance_ang: std::mem::take(&mut x[3]),
        reach_largest_ev_per_ang2: std::mem::take(&mut x[4]),
    })
}

type NextSteps = (Option<BracketParts>, Vec<Vec<f64>>, Vec<Remedy>);

fn next_steps() -> impl Strategy<Value = NextSteps> {
    let parts = [(); 5].map(|()| number()).prop_map(|n| BracketParts {
        noise_kj_per_mol: n[0],
        bias_kj_per_mol: n[1],
        alias_kj_per_mol: n[2],
        residual_force_kj_per_mol: n[3],
        floor_kj_per_mol: n[4],
    });
    let remedy = (word(), word(), proptest::option::of(number())).prop_map(
        |(setting, advice, effect_kj_per_mol)| Remedy {
            setting,
            advice,
            effect_kj_per_mol,
        },
    );
    (
        proptest::option::of(parts),
        vec(vec(number(), 0..4), 0..3),
        vec(remedy, 0..3),
    )
}

fn branch() -> impl Strategy<Value = LowestBranch> {
    vec(number(), 6).prop_map(|x| LowestBranch {
        q: [x[0], x[1], x[2]],
        wavenumber_per_cm: x[3],
        lower_per_cm: x[4],
        upper_per_cm: x[5],
    })
}

fn report() -> impl Strategy<Value = Report> {
    (
        (any::<[u8; 32]>(), any::<[u8; 32]>(), number(), word()),
        proptest::sample::select(vec![Verdict::Accept, Verdict::Hold, Verdict::Reject]),
        (
            vec(word(), 0..3),
            vec(finding(), 0..4),
            noise(),
            vec(soft_mode(), 0..3),
        ),
        any::<[u32; 5]>(),
        (
            facts(),
            vec(free_energy(), 0..3),
            curves(),
            next_steps(),
            vec(branch(), 0..3),
        ),
    )
        .prop_map(
            |((policy, package, zero_point, version), verdict, judged, mesh, found)| Report {
                program_version: version,
                policy_digest: policy,
                package_digest: package,
                verdict,
                verdict_reasons: judged.0,
                findings: judged.1,
                noise: judged.2,
                soft_modes: judged.3,
                mesh: Mesh {
                    divisions: [mesh[0], mesh[1], mesh[2]],
                    point_count: mesh[3],
                    irreducible_count: mesh[4],
                },
                crystal: found.0,
                zero_point_energy_kj_per_mol: zero_point,
                free_energy: found.1,
                bracket_parts: found.3.0,
                free_energy_draws: found.3.1,
                remedies: found.3.2,
                curves: found.2,
                lowest_branches: found.4,
            },
        )
}

proptest! {
    #[test]
    fn a_report_comes_back_the_same(report in report()) {
        let bytes = v1::Report::from(report.clone()).encode_to_vec();
        let wire = v1::Report::decode(bytes.as_slice()).unwrap();
        prop_assert_eq!(Report::try_from(wire.clone()).unwrap(), report);
        // The bytes are what is stored: the same report, the same bytes.
        prop_assert_eq!(wire.encode_to_vec(), bytes);
    }
}

#[test]
fn what_the_contract_does_not_promise_is_named() {
    let refused = |change: fn(&mut v1::Report)| {
        let mut wire = good();
        change(&mut wire);
        Report::try_from(wire).unwrap_err()
    };
    assert!(Report::try_from(good()).is_ok());
    assert_eq!(refused(|r| r.noise = None), ConvertError::Missing("noise"));
    assert_eq!(
        refused(|r| r.policy_digest.truncate(63)),
        ConvertError::Digest("policy_digest")
    );
    let field = "verdict";
    assert_eq!(
        refused(|r| r.verdict = 0),
        ConvertError::UnknownEnum { field, value: 0 }
    );
    assert_eq!(
        refused(|r| r.verdict = 99),
        ConvertError::UnknownEnum { field, value: 99 }
    );
    let (field, expected, found) = ("divisions", 3, 2);
    assert_eq!(
        refused(|r| r.mesh = Some(v1::Mesh {
            divisions: vec![1, 2],
            ..v1::Mesh::default()
        })),
        ConvertError::Length {
            field,
            expected,
            found
        }
    );
    assert_eq!(
        refused(|r| r.findings = vec![v1::Finding {
            rule: "luck".to_owned(),
            ..v1::Finding::default()
        }]),
        ConvertError::UnknownRule("luck".to_owned())
    );
}

fn good() -> v1::Report {
    v1::Report {
        policy_digest: "00".repeat(32),
        package_digest: "ff".repeat(32),
        verdict: v1::Verdict::Hold as i32,
        noise: Some(v1::Noise::default()),
        mesh: Some(v1::Mesh {
            divisions: vec![1, 2, 3],
            ..v1::Mesh::default()
        }),
        crystal: Some(v1::CrystalFacts::default()),
        curves: Some(v1::Curves::default()),
        ..v1::Report::default()
    }
}
