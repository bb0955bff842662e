//! Proto JSON as scripts see it.

use tarehouse_proto::json::{JsonError, Layout, bytes_to_json, to_json};
use tarehouse_proto::v1;

#[test]
fn names_defaults_enums_and_numbers() {
    let finding = v1::Finding {
        rule: "pair-symmetry".to_owned(),
        severity: v1::Severity::Fail as i32,
        measured: Some(0.1 + 0.2),
        likely_cause: v1::LikelyCause::WrongUnit as i32,
        ..v1::Finding::default()
    };
    assert_eq!(
        to_json(&finding, Layout::Compact).unwrap(),
        "{\"rule\":\"pair-symmetry\",\"severity\":\"SEVERITY_FAIL\",\"measured\":0.30000000000000004,\
         \"unit\":\"\",\"location\":\"\",\"likely_cause\":\"LIKELY_CAUSE_WRONG_UNIT\",\"message\":\"\",\
         \"remedy\":\"\"}"
    );
}

#[test]
fn sixty_four_bits_are_strings_and_times_are_texts() {
    let submission = v1::Submission {
        name: "submissions/1".to_owned(),
        state: v1::State::Draft as i32,
        create_time: Some(prost_types::Timestamp {
            seconds: 1_000_000_000,
            nanos: 500_000_000,
        }),
        arrays: vec![v1::Array {
            size_bytes: u64::MAX,
            ..v1::Array::default()
        }],
        ..v1::Submission::default()
    };
    let text = to_json(&submission, Layout::Compact).unwrap();
    let value: serde_json::Value = serde_json::from_str(&text).unwrap();
    assert_eq!(value["state"], "STATE_DRAFT");
    assert_eq!(value["create_time"], "2001-09-09T01:46:40.500Z");
    assert_eq!(value["arrays"][0]["size_bytes"], "18446744073709551615");
    assert_eq!(value["arrays"][0]["committed_bytes"], "0");
    assert_eq!(value["verdict"], "VERDICT_UNSPECIFIED");
    assert_eq!(value["verdict_reasons"], serde_json::json!([]));
}

#[test]
fn pretty_and_compact_say_the_same() {
    let mesh = v1::Mesh {
        divisions: vec![2, 3, 4],
        point_count: 24,
        irreducible_count: 0,
    };
    let compact = to_json(&mesh, Layout::Compact).unwrap();
    assert_eq!(
        compact,
        "{\"divisions\":[2,3,4],\"point_count\":24,\"irreducible_count\":0}"
    );
    let pretty = to_json(&mesh, Layout::Pretty).unwrap();
    assert!(pretty.contains("\n  \"point_count\": 24"), "{pretty}");
    let values =
        [compact, pretty].map(|text| serde_json::from_str::<serde_json::Value>(&text).unwrap());
    assert_eq!(values[0], values[1]);
}

#[test]
fn floats_read_back_exactly() {
    for value in [0.1, 1e300, 5e-324, f64::MAX, 1.0 / 3.0, 123_456_789.0] {
        let energy = v1::FreeEnergy {
            central_kj_per_mol: value,
            ..v1::FreeEnergy::default()
        };
        let text = to_json(&energy, Layout::Compact).unwrap();
        let read: serde_json::Value = serde_json::from_str(&text).unwrap();
        let read = read["central_kj_per_mol"].as_f64().unwrap();
        assert_eq!(read.to_bits(), value.to_bits(), "{text}");
    }
}

#[test]
fn what_is_no_message_is_named() {
    let unknown = bytes_to_json("tarehouse.v1.Nothing", b"", Layout::Compact);
    assert!(matches!(unknown, Err(JsonError::UnknownMessage(_))));
    let broken = bytes_to_json("tarehouse.v1.Mesh", &[0xff; 3], Layout::Compact);
    assert!(matches!(broken, Err(JsonError::Bytes { .. })));
}
