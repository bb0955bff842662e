//! House rules of the `.proto` files, read from their description.

use std::collections::BTreeMap;

use prost::Message as _;
use prost_types::{DescriptorProto, FileDescriptorProto, FileDescriptorSet};
use tarehouse_assay::report::{LikelyCause, Rule, Severity, Strength, Tag, Verdict};
use tarehouse_assay::submission::CellProtocol;
use tarehouse_proto::{convert, v1};

fn files() -> Vec<FileDescriptorProto> {
    let set = FileDescriptorSet::decode(tarehouse_proto::FILE_DESCRIPTOR_SET).unwrap();
    let ours: Vec<FileDescriptorProto> = set
        .file
        .into_iter()
        .filter(|f| f.package() == "tarehouse.v1")
        .collect();
    assert_eq!(ours.len(), 7);
    ours
}

/// Leading comment by path of the source info.
fn comments(file: &FileDescriptorProto) -> BTreeMap<Vec<i32>, String> {
    let info = file
        .source_code_info
        .as_ref()
        .expect("source info is there");
    info.location
        .iter()
        .map(|location| {
            (
                location.path.clone(),
                location.leading_comments().trim().to_owned(),
            )
        })
        .collect()
}

/// Every message, field, oneof, enum, value, service and method: its name and path. Field numbers of
/// `FileDescriptorProto` and its kin, from descriptor.proto.
fn elements(file: &FileDescriptorProto) -> Vec<(String, Vec<i32>, bool)> {
    let index = |k: usize| i32::try_from(k).unwrap();
    let mut all = Vec::new();
    for (m, message) in file.message_type.iter().enumerate() {
        message_elements(message, vec![4, index(m)], &mut all);
    }
    for (e, an_enum) in file.enum_type.iter().enumerate() {
        all.push((an_enum.name().to_owned(), vec![5, index(e)], false));
        for (v, value) in an_enum.value.iter().enumerate() {
            all.push((
                value.name().to_owned(),
                vec![5, index(e), 2, index(v)],
                false,
            ));
        }
    }
    for (s, service) in file.service.iter().enumerate() {
        all.push((service.name().to_owned(), vec![6, index(s)], false));
        for (m, method) in service.method.iter().enumerate() {
            all.push((
                method.name().to_owned(),
                vec![6, index(s), 2, index(m)],
                false,
            ));
        }
    }
    all
}

fn message_elements(
    message: &DescriptorProto,
    path: Vec<i32>,
    all: &mut Vec<(String, Vec<i32>, bool)>,
) {
    let at = |kind: i32, k: usize| [path.clone(), vec![kind, i32::try_from(k).unwrap()]].concat();
    let name = message.name();
    for (f, field) in message.field.iter().enumerate() {
        all.push((format!("{name}.{}", field.name()), at(2, f), true));
    }
    for (o, oneof) in message.oneof_decl.iter().enumerate() {
        // The compiler adds a oneof for each `optional` field; it has no place in the source.
        if !oneof.name().starts_with('_') {
            all.push((format!("{name}.{}", oneof.name()), at(8, o), false));
        }
    }
    for (n, nested) in message.nested_type.iter().enumerate() {
        message_elements(nested, at(3, n), all);
    }
    all.push((name.to_owned(), path, false));
}

/// Words that say a unit, or that there is none.
const UNITS: [&str; 21] = [
    "no unit",
    "units in the message",
    "kJ/mol",
    "cm^-1",
    "eV/angstrom^2",
    "angstrom",
    "g/cm^3",
    "J/mol/K",
    "m/s",
    " K",
    "UTC",
    "bytes",
    "count",
    "pure number",
    "hexadecimal",
    "in `unit`",
    "fractional",
    "GPa",
    "1/K",
    "unit of the",
    "units by kind",
];

#[test]
fn everything_has_a_comment_and_every_field_a_unit() {
    let mut field_count = 0;
    for file in files() {
        let comments = comments(&file);
        for (name, path, is_field) in elements(&file) {
            let comment = comments.get(&path).map_or("", String::as_str);
            assert!(comment.ends_with('.'), "{name}: \"{comment}\"");
            if is_field {
                field_count += 1;
                let exceptions = ["Finding.unit", "SoftMode.z"];
                let named = UNITS.iter().any(|unit| comment.contains(unit));
                assert!(
                    named || exceptions.contains(&name.as_str()),
                    "{name}: \"{comment}\""
                );
            }
        }
    }
    assert!(field_count > 150, "{field_count}");
}

#[test]
fn there_is_no_map_field() {
    for file in files() {
        for message in &file.message_type {
            let maps = message.nested_type.iter().filter(|nested| {
                nested
                    .options
                    .as_ref()
                    .is_some_and(prost_types::MessageOptions::map_entry)
            });
            assert_eq!(maps.count(), 0, "{}", message.name());
        }
    }
}

#[test]
fn lists_are_paginated_and_answers_wrapped() {
    let messages: BTreeMap<String, DescriptorProto> = files()
        .into_iter()
        .flat_map(|file| file.message_type)
        .map(|message| (message.name().to_owned(), message))
        .collect();
    let has =
        |message: &str, field: &str| messages[message].field.iter().any(|f| f.name() == field);
    let mut methods = Vec::new();
    for method in files()
        .into_iter()
        .flat_map(|f| f.service)
        .flat_map(|s| s.method)
    {
        let name = method.name().to_owned();
        assert_eq!(method.input_type(), format!(".tarehouse.v1.{name}Request"));
        assert_eq!(
            method.output_type(),
            format!(".tarehouse.v1.{name}Response")
        );
        if name.starts_with("List") {
            for (message, field) in [
                ("Request", "page_size"),
                ("Request", "page_token"),
                ("Response", "next_page_token"),
            ] {
                assert!(has(&format!("{name}{message}"), field), "{name} {field}");
            }
        }
        methods.push(name);
    }
    assert_eq!(methods.len(), 17, "{methods:?}");
}

/// `wrong-unit` and the prefix `LIKELY_CAUSE` give `LIKELY_CAUSE_WRONG_UNIT`.
fn upper(prefix: &str, kebab: &str) -> String {
    format!("{prefix}_{}", kebab.to_uppercase().replace('-', "_"))
}

/// Values of an enum in the order of their numbers, without the first, which is never sent.
fn values(name: &str) -> Vec<String> {
    let an_enum = files()
        .into_iter()
        .flat_map(|file| file.enum_type)
        .find(|e| e.name() == name)
        .expect(name);
    let numbers: Vec<i32> = an_enum
        .value
        .iter()
        .map(prost_types::EnumValueDescriptorProto::number)
        .collect();
    assert_eq!(
        numbers,
        (0..i32::try_from(numbers.len()).unwrap()).collect::<Vec<i32>>(),
        "{name}"
    );
    let names: Vec<String> = an_enum.value.iter().map(|v| v.name().to_owned()).collect();
    assert!(names[0].ends_with("_UNSPECIFIED"), "{name}");
    names[1..].to_vec()
}

#[test]
fn likely_causes_stand_in_the_order_of_the_domain() {
    let expected: Vec<String> = LikelyCause::ALL
        .iter()
        .map(|cause| upper("LIKELY_CAUSE", cause.name()))
        .collect();
    assert_eq!(values("LikelyCause"), expected);
    assert_eq!(convert::likely_cause_names(), expected);
    for (k, cause) in LikelyCause::ALL.iter().enumerate() {
        let wire = v1::LikelyCause::from(*cause);
        assert_eq!(wire as usize, k + 1);
        assert_eq!(LikelyCause::try_from(wire), Ok(*cause));
    }
    assert!(LikelyCause::try_from(v1::LikelyCause::Unspecified).is_err());
}

#[test]
fn rules_are_found_by_name() {
    assert_eq!(convert::rule_names().len(), Rule::ALL.len());
    for rule in Rule::ALL {
        assert_eq!(convert::rule_by_name(rule.name()), Some(*rule));
    }
    assert_eq!(convert::rule_by_name("Pair-Symmetry"), None);
}

/// The wire's enum has exactly these values of the domain, in this order and under these names, both ways.
fn stands<D, W>(name: &str, pairs: &[(&str, D)])
where
    D: Copy + PartialEq + std::fmt::Debug + TryFrom<W>,
    W: From<D> + Into<i32> + Copy + TryFrom<i32>,
{
    let expected: Vec<String> = pairs.iter().map(|(text, _)| (*text).to_owned()).collect();
    assert_eq!(values(name), expected);
    for (k, (text, value)) in pairs.iter().enumerate() {
        let wire = W::from(*value);
        assert_eq!(wire.into(), i32::try_from(k + 1).unwrap(), "{text}");
        assert_eq!(D::try_from(wire).ok(), Some(*value), "{text}");
    }
    let unspecified = W::try_from(0).ok().unwrap();
    assert!(D::try_from(unspecified).is_err(), "{name}");
}

#[test]
fn the_other_enums_stand_one_to_one() {
    stands::<Verdict, v1::Verdict>(
        "Verdict",
        &[
            ("VERDICT_ACCEPT", Verdict::Accept),
            ("VERDICT_HOLD", Verdict::Hold),
            ("VERDICT_REJECT", Verdict::Reject),
        ],
    );
    stands::<Severity, v1::Severity>(
        "Severity",
        &[
            ("SEVERITY_PASS", Severity::Pass),
            ("SEVERITY_CAUTION", Severity::Caution),
            ("SEVERITY_FAIL", Severity::Fail),
        ],
    );
    stands::<Tag, v1::SoftModeTag>(
        "SoftModeTag",
        &[
            ("SOFT_MODE_TAG_NUMERICAL", Tag::Numerical),
            ("SOFT_MODE_TAG_POSSIBLY_PHYSICAL", Tag::PossiblyPhysical),
        ],
    );
    stands::<Strength, v1::Strength>(
        "Strength",
        &[
            ("STRENGTH_STRONG", Strength::Strong),
            ("STRENGTH_WEAK", Strength::Weak),
        ],
    );
    stands::<CellProtocol, v1::CellProtocol>(
        "CellProtocol",
        &[
            ("CELL_PROTOCOL_RELAXED", CellProtocol::Relaxed),
            ("CELL_PROTOCOL_EXPERIMENTAL", CellProtocol::Experimental),
            ("CELL_PROTOCOL_EXPANDED", CellProtocol::Expanded),
            ("CELL_PROTOCOL_OTHER", CellProtocol::Other),
        ],
    );
}

#[test]
fn the_report_has_the_fields_that_scripts_rely_on() {
    let messages: BTreeMap<String, DescriptorProto> = files()
        .into_iter()
        .flat_map(|file| file.message_type)
        .map(|message| (message.name().to_owned(), message))
        .collect();
    for (message, fields) in [
        (
            "Report",
            "program_version policy_digest package_digest verdict findings noise soft_modes mesh \
          zero_point_energy_kj_per_mol free_energy curves",
        ),
        (
            "Finding",
            "rule severity measured limit unit location likely_cause message remedy",
        ),
        (
            "Noise",
            "sigma_ev_per_ang2 bound_only erased truncated self_fixed symmetry_expanded rounded",
        ),
        (
            "SoftMode",
            "tag strength lowest_wavenumber_per_cm raw_wavenumber_per_cm q point_count commensurate z \
          alias_share external_fraction acoustic_overlap participation truncation_changes \
          exclusion_limit_per_cm reason",
        ),
        ("Mesh", "divisions point_count irreducible_count"),
        (
            "FreeEnergy",
            "temperature_k defined central_kj_per_mol lower_kj_per_mol upper_kj_per_mol \
          entropy_j_per_mol_k heat_capacity_j_per_mol_k",
        ),
    ] {
        for field in fields.split_whitespace() {
            let found = messages[message].field.iter().any(|f| f.name() == field);
            assert!(found, "{message}.{field}");
        }
    }
}
