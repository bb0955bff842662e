//! What the command line takes and what it refuses.

use super::*;
use clap::CommandFactory as _;
use clap::error::ErrorKind;

fn parse(line: &str) -> Result<Arguments, clap::Error> {
    Arguments::try_parse_from(line.split_whitespace())
}

#[test]
fn the_definition_holds_together() {
    Arguments::command().debug_assert();
}

#[test]
fn every_command_has_examples_and_the_list_of_exit_codes_is_in_the_help() {
    let mut root = Arguments::command();
    let help = root.render_long_help().to_string();
    let words: Vec<&str> = help.split_whitespace().collect();
    assert!(words.join(" ").contains("3 rejected, 4 held, 5 not found"));
    for command in root.get_subcommands_mut() {
        let name = command.get_name().to_owned();
        if name == "help" {
            continue;
        }
        let help = command.render_long_help().to_string();
        assert!(help.contains(&format!("tarehouse {name}")), "{name}");
        assert!(help.contains("Examples:"), "{name}");
    }
}

#[test]
fn temperatures_are_a_list_of_kelvin() {
    let Command::Rank(rank) = parse("tarehouse rank x --temperature 0,100,298.15K")
        .unwrap()
        .command
    else {
        panic!("not rank");
    };
    assert_eq!(rank.temperature, [0.0, 100.0, 298.15]);
    for wrong in ["-1", "nan", "inf", "warm", ""] {
        assert!(
            parse(&format!("tarehouse rank x --temperature={wrong}")).is_err(),
            "{wrong}"
        );
    }
}

#[test]
fn series_want_members_and_pressures_are_gigapascal() {
    let Command::VolumeSeries(volumes) =
        parse("tarehouse volume-series a b c d --pressure 0,1.5GPa")
            .unwrap()
            .command
    else {
        panic!("not volume-series");
    };
    assert_eq!(volumes.members, ["a", "b", "c", "d"]);
    assert_eq!(
        (volumes.pressure, volumes.temperature),
        (vec![0.0, 1.5], vec![0.0, 300.0])
    );
    for wrong in [
        "series a",
        "volume-series a b c",
        "rank x --pressure=-1",
        "rank x --pressure=nan",
    ] {
        assert!(parse(&format!("tarehouse {wrong}")).is_err(), "{wrong}");
    }
    let Command::Series(series) = parse("tarehouse series a b c").unwrap().command else {
        panic!("not series");
    };
    assert_eq!(series.members.len(), 3);
}

#[test]
fn contradictions_are_refused() {
    for line in [
        "tarehouse submit a --server http://x --local y",
        "tarehouse precheck a --policy p --server http://x",
        "tarehouse fetch a --projected --array b --out c",
        "tarehouse submit a --no-wait --timeout 3",
    ] {
        assert_eq!(
            parse(line).unwrap_err().kind(),
            ErrorKind::ArgumentConflict,
            "{line}"
        );
    }
    for line in [
        "tarehouse submit",
        "tarehouse rank",
        "tarehouse fetch a",
        "tarehouse watch",
    ] {
        assert_eq!(
            parse(line).unwrap_err().kind(),
            ErrorKind::MissingRequiredArgument,
            "{line}"
        );
    }
}

#[test]
fn list_shows_records_unless_told_otherwise() {
    let Command::List(list) = parse("tarehouse list").unwrap().command else {
        panic!("not list");
    };
    assert_eq!(list.what, Listed::Records);
    let Command::List(list) = parse("tarehouse list submissions --state held")
        .unwrap()
        .command
    else {
        panic!("not list");
    };
    assert_eq!(
        (list.what, list.state),
        (Listed::Submissions, Some(StateFilter::Held))
    );
}
