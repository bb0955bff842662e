//! Rankings: never two levels in one table, brackets beside numbers, exclusions below, changes of order named.

use tarehouse_client::render::rank::{order_changes, ranked_rows, to_text};
use tarehouse_client::render::text::{View, visible_width};
use tarehouse_proto::v1::{CellProtocol, RankPoint, RankRow, RankTable};

const TEMPERATURES_K: [f64; 3] = [0.0, 100.0, 300.0];

fn row(form: &str, energies: [Option<f64>; 3]) -> RankRow {
    let points = energies
        .into_iter()
        .zip(TEMPERATURES_K)
        .map(|(energy, temperature_k)| RankPoint {
            temperature_k,
            defined: energy.is_some(),
            exclusion_reason: energy
                .map_or("a soft mode may be physical".to_owned(), |_| String::new()),
            relative_kj_per_mol: energy,
            lower_kj_per_mol: energy.map(|energy| energy - 0.25),
            upper_kj_per_mol: energy.map(|energy| energy + 0.25),
            ..RankPoint::default()
        })
        .collect();
    RankRow {
        record: format!("records/{}", form.repeat(32)),
        form: form.to_owned(),
        points,
    }
}

fn table(level: &str) -> RankTable {
    RankTable {
        energy_level: level.to_owned(),
        constants_level: "constants level".to_owned(),
        cell_protocol: CellProtocol::Relaxed.into(),
        rows: vec![
            row("A", [Some(0.0), Some(0.0), Some(1.5)]),
            row("B", [Some(2.0), Some(1.0), Some(0.0)]),
            row("C", [Some(11.125), Some(10.0), Some(9.0)]),
            row("D", [None, None, None]),
        ],
    }
}

fn forms(table: &RankTable, sort_index: usize) -> Vec<&str> {
    ranked_rows(table, sort_index)
        .iter()
        .map(|row| row.form.as_str())
        .collect()
}

#[test]
fn rows_are_ordered_at_the_chosen_temperature_and_the_undefined_are_not_ranked() {
    let table = table("x");
    assert_eq!(forms(&table, 0), ["A", "B", "C"]);
    assert_eq!(forms(&table, 2), ["B", "A", "C"]);
    let text = to_text("velnaric acid", &[table], 0, View::plain(100));
    assert!(text.contains("form D is not ranked: a soft mode may be physical"));
}

#[test]
fn numbers_stand_beside_their_brackets_with_points_under_each_other() {
    let text = to_text("velnaric acid", &[table("x")], 0, View::plain(100));
    let rows: Vec<&str> = text
        .lines()
        .filter(|line| line.contains('[') && line.contains(", "))
        .filter(|line| line.trim_start().starts_with(['A', 'B', 'C']))
        .collect();
    assert_eq!(rows.len(), 3, "{text}");
    assert!(rows[1].contains("2.00 [ 1.75,  2.25]"), "{text}");
    let points: Vec<Vec<usize>> = rows
        .iter()
        .map(|row| row.match_indices('.').map(|(place, _)| place).collect())
        .collect();
    assert!(points.iter().all(|places| *places == points[0]), "{text}");
    assert_eq!(points[0].len(), 9);
}

#[test]
fn levels_never_mix() {
    let text = to_text(
        "velnaric acid",
        &[table("level one"), table("level two")],
        0,
        View::plain(100),
    );
    let one = text.find("level one").unwrap();
    let two = text.find("level two").unwrap();
    assert_eq!(text[one..two].matches("2.00 [").count(), 1);
    assert_eq!(text[two..].matches("2.00 [").count(), 1);
    assert!(text.contains("never compared"));
}

#[test]
fn narrow_screens_get_blocks_and_lose_no_number() {
    for width in [40, 60, 80, 120] {
        let text = to_text("velnaric acid", &[table("x")], 0, View::plain(width));
        for line in text.lines() {
            assert!(visible_width(line) <= width, "{width}: {line}");
        }
        for head in ["at 0 K", "at 100 K", "at 300 K"] {
            assert_eq!(text.matches(head).count(), 1, "{text}");
        }
        assert!(text.contains("11.12 [10.88, 11.38]"), "{text}");
    }
}

#[test]
fn changes_of_order_are_named_once_and_say_how_sure_they_are() {
    let sure = order_changes(&table("x"));
    assert_eq!(sure.len(), 1);
    assert!(
        sure[0].contains("between 100 and 300 K: form B falls below form A"),
        "{}",
        sure[0]
    );
    assert!(sure[0].contains("apart on both sides"));

    let mut close = table("x");
    close.rows[0] = row("A", [Some(0.0), Some(0.0), Some(0.1)]);
    let unsure = order_changes(&close);
    assert_eq!(unsure.len(), 1);
    assert!(unsure[0].contains("overlap"));

    close.rows.remove(1);
    assert!(order_changes(&close).is_empty());
}

#[test]
fn temperatures_in_any_order_give_the_same_changes() {
    let mut turned = table("x");
    for row in &mut turned.rows {
        row.points.reverse();
    }
    assert_eq!(order_changes(&turned), order_changes(&table("x")));
}
