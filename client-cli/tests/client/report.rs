//! What a report looks like: structure and width, not every letter.

use tarehouse_client::render::report::{LEFT_OUT, Subject, to_text};
use tarehouse_client::render::text::{View, visible_width};
use tarehouse_proto::v1::{
    BracketParts, CrystalFacts, Finding, FreeEnergy, LikelyCause, Mesh, Noise, Remedy, Report,
    Severity, SoftMode, SoftModeTag, Strength, TruncationChange, Verdict,
};

fn finding(rule: &str, severity: Severity, cause: LikelyCause) -> Finding {
    Finding {
        rule: rule.to_owned(),
        severity: severity.into(),
        measured: Some(0.0021),
        limit: Some(0.001),
        unit: "eV/angstrom^2".to_owned(),
        location: "atom 3 (C)".to_owned(),
        likely_cause: cause.into(),
        message: format!(
            "what {rule} found, told in a sentence that is longer than a narrow screen"
        ),
        remedy: "tighten the convergence of the electronic structure and submit again".to_owned(),
    }
}

fn cluster() -> SoftMode {
    SoftMode {
        tag: SoftModeTag::PossiblyPhysical.into(),
        strength: Strength::Strong.into(),
        lowest_wavenumber_per_cm: -12.34,
        raw_wavenumber_per_cm: -13.0,
        q: vec![0.5, 0.0, 0.0],
        point_count: 3,
        commensurate: true,
        z: Some(-8.25),
        alias_share: Some(0.02),
        external_fraction: 0.97,
        acoustic_overlap: 0.1,
        participation: 0.43,
        truncation_changes: vec![TruncationChange {
            fraction: 1e-3,
            wavenumber_per_cm: 4.0,
        }],
        exclusion_limit_per_cm: Some(2.5),
        reason: "the mode lies far below zero at a sampled wave vector".to_owned(),
    }
}

fn curve() -> Vec<FreeEnergy> {
    [0.0, 10.0, 100.0, 300.0]
        .into_iter()
        .map(|temperature_k| FreeEnergy {
            temperature_k,
            defined: true,
            central_kj_per_mol: 50.0 - temperature_k / 10.0,
            lower_kj_per_mol: 49.75 - temperature_k / 10.0,
            upper_kj_per_mol: 50.25 - temperature_k / 10.0,
            ..FreeEnergy::default()
        })
        .collect()
}

fn report() -> Report {
    Report {
        program_version: "0.1.0".to_owned(),
        policy_digest: "ab".repeat(32),
        package_digest: "cd".repeat(32),
        verdict: Verdict::Hold.into(),
        verdict_reasons: vec![
            "the first reason, which is the worst of them and fills more than one narrow line"
                .to_owned(),
            "the second reason".to_owned(),
        ],
        findings: vec![
            finding("pair-symmetry", Severity::Pass, LikelyCause::None),
            finding("reach", Severity::Caution, LikelyCause::SmallSupercell),
            finding("masses", Severity::Fail, LikelyCause::WrongMasses),
        ],
        noise: Some(Noise {
            sigma_ev_per_ang2: 2e-5,
            bound_only: true,
            erased: vec!["pair-symmetry".to_owned()],
            ..Noise::default()
        }),
        soft_modes: vec![cluster()],
        bracket_parts: Some(BracketParts {
            noise_kj_per_mol: 0.5,
            alias_kj_per_mol: 1.25,
            ..BracketParts::default()
        }),
        free_energy_draws: Vec::new(),
        remedies: vec![
            Remedy {
                setting: "constants.supercell".to_owned(),
                advice: "double the supercell".to_owned(),
                effect_kj_per_mol: Some(1.25),
            },
            Remedy {
                setting: "masses".to_owned(),
                advice: "check the masses".to_owned(),
                effect_kj_per_mol: None,
            },
        ],
        mesh: Some(Mesh {
            divisions: vec![6, 4, 6],
            point_count: 144,
            irreducible_count: 48,
        }),
        crystal: Some(CrystalFacts {
            space_group_number: 14,
            space_group_symbol: "P 2_1/c".to_owned(),
            molecule_count: 4,
            ..CrystalFacts::default()
        }),
        zero_point_energy_kj_per_mol: 50.0,
        free_energy: curve(),
        curves: None,
        lowest_branches: Vec::new(),
    }
}

fn subject() -> Subject {
    Subject {
        compound: "velnaric acid".to_owned(),
        form: "II".to_owned(),
        formula: "C4 H6 O2".to_owned(),
        source: "submissions/0123456789abcdef0123456789abcdef".to_owned(),
    }
}

fn shown(report: &Report, show_all: bool, width: usize) -> String {
    to_text(report, &subject(), show_all, View::plain(width))
}

/// Places of the parts in the text, which must all be there, wherever its lines break.
fn places(text: &str, parts: &[&str]) -> Vec<usize> {
    let text = text.split_whitespace().collect::<Vec<_>>().join(" ");
    parts
        .iter()
        .map(|part| {
            text.find(part)
                .unwrap_or_else(|| panic!("{part} is missing from\n{text}"))
        })
        .collect()
}

#[test]
fn the_verdict_comes_first_then_what_is_worst() {
    for width in [60, 80, 100] {
        let text = shown(&report(), false, width);
        let order = places(
            &text,
            &[
                "velnaric acid",
                "HELD",
                "1. the first reason",
                "2. the second reason",
                "Findings",
                "masses",
                "reach",
                "1 check (--all",
                "Soft modes: 1 cluster",
                "Vibrational free energy",
                "symmetry",
                "package",
            ],
        );
        assert!(order.is_sorted(), "{text}");
        assert!(!text.contains("pair-symmetry found"), "passes are folded");
    }
}

#[test]
fn no_line_is_wider_than_the_screen() {
    for width in [40, 60, 80, 100, 120] {
        for show_all in [false, true] {
            let text = shown(&report(), show_all, width);
            for line in text.lines() {
                assert!(visible_width(line) <= width, "{width}: {line}");
            }
        }
    }
}

#[test]
fn a_finding_has_number_limit_unit_place_cause_and_remedy() {
    let text = shown(&report(), false, 100);
    places(
        &text,
        &[
            "measured 0.0021 eV/Å²; limit 0.001 eV/Å²",
            "where atom 3 (C)",
            "likely the supercell is too small",
            "do next tighten the convergence",
        ],
    );
}

#[test]
fn passes_show_their_numbers_when_asked_for() {
    let text = shown(&report(), true, 100);
    places(&text, &["what pair-symmetry found"]);
    assert!(!text.contains("--all"));
}

#[test]
fn a_cluster_shows_tag_strength_and_evidence() {
    let text = shown(&report(), false, 100);
    places(
        &text,
        &[
            "12.3i cm⁻¹ at q = (1/2, 0, 0): possibly physical, strong",
            "far below zero",
            "z = -8.25",
            "aliasing 0.02 of its depth",
            "rigid-molecule motion 97 %",
            "13.0i cm⁻¹ before projection",
            "4.0 cm⁻¹ without constants below 1e-3 of the largest",
            "weaker than 2.5i cm⁻¹",
        ],
    );
}

#[test]
fn free_energies_stand_beside_their_brackets_at_a_few_temperatures() {
    let text = shown(&report(), false, 100);
    places(
        &text,
        &["40.000 39.750 … 40.250 0.250", "20.000 19.750 … 20.250"],
    );
    assert!(!text.contains("49.000"), "10 K is not among the few");
    places(&shown(&report(), true, 100), &["49.000"]);
    // The bracket stays on a narrow screen.
    places(&shown(&report(), false, 60), &["40.000 39.750 … 40.250"]);
    let one_line: String = text.split_whitespace().collect::<Vec<_>>().join(" ");
    assert!(one_line.contains(LEFT_OUT), "what the numbers leave out");
}

#[test]
fn without_a_free_energy_no_number_is_shown() {
    let mut report = report();
    for point in &mut report.free_energy {
        *point = FreeEnergy {
            temperature_k: point.temperature_k,
            ..FreeEnergy::default()
        };
    }
    let text = shown(&report, false, 80);
    places(&text, &["Not defined"]);
    assert!(!text.contains("Zero-point energy"));
}

#[test]
fn a_clean_accept_is_short_and_a_rejected_number_is_marked() {
    let mut accepted = report();
    accepted.set_verdict(Verdict::Accept);
    accepted.verdict_reasons.clear();
    accepted.soft_modes.clear();
    accepted.findings.truncate(1);
    let text = shown(&accepted, false, 80);
    places(
        &text,
        &[
            "ACCEPTED",
            "0 fails, 0 cautions, 1 pass",
            "Soft modes: none",
        ],
    );
    assert!(text.contains("Every check passes"), "{text}");
    let mut with_cautions = accepted.clone();
    with_cautions.findings.push(finding(
        "translation-sum",
        Severity::Caution,
        LikelyCause::Unspecified,
    ));
    let text = shown(&with_cautions, false, 80);
    assert!(text.contains("ACCEPTED, with 1 caution."), "{text}");
    assert!(!text.contains("Every check passes"));
    assert!(!text.contains("rejected upload"));
    let mut rejected = report();
    rejected.set_verdict(Verdict::Reject);
    places(
        &shown(&rejected, false, 80),
        &["REJECTED", "rejected upload"],
    );
}

#[test]
fn what_a_report_says_cannot_steer_the_terminal() {
    let mut report = report();
    let evil = "\u{1b}]0;title\u{7}\u{1b}[2J".to_owned();
    report.verdict_reasons.push(evil.clone());
    for finding in &mut report.findings {
        finding.rule.clone_from(&evil);
        finding.message.clone_from(&evil);
        finding.location.clone_from(&evil);
        finding.remedy.clone_from(&evil);
        finding.unit.clone_from(&evil);
    }
    report.soft_modes[0].reason.clone_from(&evil);
    report.program_version.clone_from(&evil);
    report.policy_digest.clone_from(&evil);
    report.package_digest.clone_from(&evil);
    if let (Some(crystal), Some(noise)) = (&mut report.crystal, &mut report.noise) {
        crystal.space_group_symbol.clone_from(&evil);
        noise.erased = vec![evil.clone()];
    }
    let subject = Subject {
        compound: evil.clone(),
        form: evil.clone(),
        formula: evil.clone(),
        source: evil,
    };
    for show_all in [false, true] {
        let text = to_text(&report, &subject, show_all, View::plain(80));
        assert!(!text.contains('\u{1b}') && !text.contains('\u{7}'));
    }
}

#[test]
fn colour_changes_nothing_but_colour() {
    let colourful = View {
        width: 80,
        colour: true,
    };
    let painted = to_text(&report(), &subject(), false, colourful);
    assert!(painted.contains('\u{1b}'));
    let mut plain = String::new();
    let mut inside = false;
    for c in painted.chars() {
        match (inside, c) {
            (false, '\u{1b}') => inside = true,
            (true, 'm') => inside = false,
            (false, c) => plain.push(c),
            (true, _) => {}
        }
    }
    assert_eq!(plain, shown(&report(), false, 80));
}

#[test]
fn what_to_do_next_comes_in_order_with_its_effect() {
    let text = shown(&report(), false, 100);
    let found = places(
        &text,
        &[
            "What to do next",
            "1. constants.supercell: double the supercell (up to 1.25 kJ/mol of the half width)",
            "2. masses: check the masses",
            "aliasing 1.25",
        ],
    );
    assert!(found.is_sorted(), "{text}");
}
