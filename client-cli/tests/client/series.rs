//! Convergence and volume series as people see them.

use tarehouse_client::render::text::{View, visible_width};
use tarehouse_client::render::{series, volumes};
use tarehouse_proto::v1::{
    Bracketed, QuasiHarmonic, QuasiHarmonicPoint, Series, SeriesChange, SeriesConclusion,
    SeriesQuantity, SeriesQuantityKind, SeriesSetting, SeriesValue, VolumeMember,
};

fn value(central: f64) -> SeriesValue {
    SeriesValue {
        central: Some(central),
        lower: Some(central - 0.25),
        upper: Some(central + 0.25),
    }
}

fn moving() -> Series {
    Series {
        compound: "velnaric acid".to_owned(),
        form: "II".to_owned(),
        members: ["a", "b", "c"].map(|k| format!("submissions/{k}")).to_vec(),
        settings: vec![SeriesSetting {
            setting: "supercell".to_owned(),
            values: ["1×1×1", "2×2×1", "2×2×2"].map(str::to_owned).to_vec(),
        }],
        quantities: vec![SeriesQuantity {
            kind: SeriesQuantityKind::LowestBranch.into(),
            q: vec![0.5, 0.0, 0.0],
            values: vec![SeriesValue::default(), value(-12.0), value(31.5)],
            changes: vec![
                SeriesChange::default(),
                SeriesChange {
                    change: Some(43.5),
                    combined_half_width: Some(0.4),
                },
            ],
            conclusion: SeriesConclusion::StillMoving.into(),
            reason: "it moves\u{1b}[31m".to_owned(),
            ..SeriesQuantity::default()
        }],
        conclusion: SeriesConclusion::StillMoving.into(),
        reason: "the lowest branch moves".to_owned(),
    }
}

#[test]
fn a_series_shows_its_setting_its_steps_and_what_follows() {
    let text = series::to_text(&moving(), View::plain(100));
    for part in [
        "velnaric acid, form II",
        "still moving",
        "member 3 is submissions/c",
        "2×2×1",
        "not defined",
        "12.0i",
        "+43.5",
        "0.4",
    ] {
        assert!(text.contains(part), "{part} is missing from\n{text}");
    }
    assert!(
        !text.contains('\u{1b}'),
        "no control character reaches a terminal"
    );
    let place = |part: &str| text.find(part).unwrap();
    assert!(place("still moving") < place("supercell"));
    for width in [60, 80, 120] {
        let text = series::to_text(&moving(), View::plain(width));
        assert!(
            text.lines().all(|line| visible_width(line) <= width),
            "{text}"
        );
    }
}

#[test]
fn every_conclusion_has_its_own_words() {
    let mut words: Vec<&str> = [
        SeriesConclusion::Unspecified,
        SeriesConclusion::Stopped,
        SeriesConclusion::CannotBeTold,
        SeriesConclusion::StillMoving,
    ]
    .map(|conclusion| series::conclusion(conclusion).0)
    .to_vec();
    assert!(words.iter().all(|word| !word.contains("converged")));
    words.sort_unstable();
    words.dedup();
    assert_eq!(words.len(), 4);
}

#[test]
fn a_volume_series_shows_brackets_and_refusals() {
    let number = |central, half_width| {
        Some(Bracketed {
            central,
            half_width,
        })
    };
    let found = QuasiHarmonic {
        compound: "velnaric acid".to_owned(),
        form: "II".to_owned(),
        energy_level: "x".to_owned(),
        constants_level: "y".to_owned(),
        members: vec![VolumeMember {
            name: "records/a".to_owned(),
            volume_per_formula_unit_ang3: 141.5,
            static_kj_per_mol: -90.0,
        }],
        settings: moving().settings,
        points: vec![
            QuasiHarmonicPoint {
                temperature_k: 300.0,
                pressure_gpa: 0.5,
                defined: true,
                gibbs_kj_per_mol: number(-80.25, 0.125),
                volume_ang3: number(145.5, 0.25),
                bulk_modulus_gpa: number(8.5, 0.75),
                expansion_per_k: number(1.5e-4, 2e-5),
                heat_capacity_p_j_per_mol_k: Some(99.5),
                ..QuasiHarmonicPoint::default()
            },
            QuasiHarmonicPoint {
                refusal: "outside the volumes examined".to_owned(),
                ..QuasiHarmonicPoint::default()
            },
        ],
    };
    let text = volumes::to_text(&found, View::plain(110));
    for part in [
        "141.50 Å³ is records/a",
        "-80.250 ± 0.125",
        "145.50 ± 0.25",
        "8.50 ± 0.75",
        "150 ± 20",
        "99.50",
        "differ in more than their volume",
        "No answer: outside the volumes examined",
    ] {
        assert!(text.contains(part), "{part} is missing from\n{text}");
    }
}
