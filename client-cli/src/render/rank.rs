//! Rankings: one table per level, brackets beside numbers, and what changes order with temperature.

use tarehouse_proto::v1::{RankPoint, RankRow, RankTable};

use super::numbers::temperature;
use super::table::{Kind, Table, aligned};
use super::text::{Page, View, clean};
use super::words;

/// Temperatures closer than this are the same, K.
const SAME_TEMPERATURE_K: f64 = 1e-6;

/// All tables of a compound.
///
/// Rows are ordered by energy at temperature number `sort_index` of the request.
pub fn to_text(compound: &str, tables: &[RankTable], sort_index: usize, view: View) -> String {
    let mut page = Page::new(view);
    page.title(&format!(
        "{}: free energy above the lowest form, kJ/mol per formula unit",
        clean(compound)
    ));
    for (k, table) in tables.iter().enumerate() {
        page.gap();
        if tables.len() > 1 {
            page.hanging("", "  ", &format!("Level {} of {}", k + 1, tables.len()));
        }
        write_table(&mut page, table, sort_index);
    }
    page.gap();
    if tables.len() > 1 {
        page.paragraph(0, "Energies of different levels are never compared.");
    }
    page.paragraph(
        0,
        "In square brackets: where the harmonic value lies, given the upload's own noise, aliasing and residual \
         force; not the level of theory, anharmonic motion or thermal expansion.",
    );
    page.finish()
}

/// Writes one table, the forms that it cannot rank, and what changes order.
pub fn write_table(page: &mut Page, table: &RankTable, sort_index: usize) {
    page.labelled(0, "energy", 9, &clean(&table.energy_level));
    page.labelled(0, "constants", 9, &clean(&table.constants_level));
    page.labelled(0, "cells", 9, words::cell_protocol(table.cell_protocol()));
    let ranked = ranked_rows(table, sort_index);
    if ranked.is_empty() {
        page.gap();
        page.paragraph(2, "No form of this level can be ranked.");
    } else {
        write_blocks(page, &ranked);
    }
    write_unranked(page, table);
    for sentence in order_changes(table) {
        page.hanging("  ", "    ", &sentence);
    }
    page.gap();
    for row in &table.rows {
        page.hanging(
            "  ",
            "    ",
            &format!("form {} is {}", clean(&row.form), clean(&row.record)),
        );
    }
}

/// Rows with a free energy at some temperature, lowest at the chosen one first.
pub fn ranked_rows(table: &RankTable, sort_index: usize) -> Vec<&RankRow> {
    let mut rows: Vec<&RankRow> = table
        .rows
        .iter()
        .filter(|row| row.points.iter().any(|point| point.defined))
        .collect();
    let energy = |row: &RankRow| {
        row.points
            .get(sort_index)
            .and_then(|point| point.relative_kj_per_mol)
            .unwrap_or(f64::INFINITY)
    };
    rows.sort_by(|a, b| energy(a).total_cmp(&energy(b)));
    rows
}

/// Writes as many temperatures side by side as there is room for, then the next ones below.
fn write_blocks(page: &mut Page, rows: &[&RankRow]) {
    let count = rows.iter().map(|row| row.points.len()).max().unwrap_or(0);
    let room = page.view().width.saturating_sub(2);
    let mut start = 0;
    while start < count {
        let mut end = start + 1;
        while end < count && block(rows, start, end + 1).natural_width() <= room {
            end += 1;
        }
        page.gap();
        block(rows, start, end).write(page, 2);
        start = end;
    }
}

fn block(rows: &[&RankRow], start: usize, end: usize) -> Table {
    let titles: Vec<String> = (start..end)
        .map(|index| {
            let kelvin = rows
                .iter()
                .find_map(|row| row.points.get(index))
                .map_or(0.0, |point| point.temperature_k);
            format!("at {} K", temperature(kelvin))
        })
        .collect();
    let mut columns = vec![("form", Kind::Name)];
    columns.extend(titles.iter().map(|title| (title.as_str(), Kind::Number)));
    let mut table = Table::new(&columns);
    let cells: Vec<Vec<String>> = (start..end).map(|index| column(rows, index)).collect();
    for (k, row) in rows.iter().enumerate() {
        let mut line = vec![clean(&row.form).into_owned()];
        line.extend(cells.iter().filter_map(|column| column.get(k)).cloned());
        table.row(line);
    }
    table
}

/// The cells of one temperature: number and bracket, points under each other.
fn column(rows: &[&RankRow], index: usize) -> Vec<String> {
    let values = |pick: fn(&RankPoint) -> Option<f64>| {
        let numbers: Vec<Option<f64>> = rows
            .iter()
            .map(|row| {
                row.points
                    .get(index)
                    .filter(|point| point.defined)
                    .and_then(pick)
            })
            .collect();
        aligned(&numbers, 2)
    };
    let relative = values(|point| point.relative_kj_per_mol);
    let lower = values(|point| point.lower_kj_per_mol);
    let upper = values(|point| point.upper_kj_per_mol);
    relative
        .iter()
        .zip(&lower)
        .zip(&upper)
        .map(|((relative, lower), upper)| {
            if relative.trim().is_empty() {
                "not defined".to_owned()
            } else if lower.trim().is_empty() || upper.trim().is_empty() {
                format!("{relative} [unknown]")
            } else {
                format!("{relative} [{lower}, {upper}]")
            }
        })
        .collect()
}

fn write_unranked(page: &mut Page, table: &RankTable) {
    let unranked: Vec<(&RankRow, &RankPoint)> = table
        .rows
        .iter()
        .filter_map(|row| {
            let point = row.points.iter().find(|point| !point.defined)?;
            Some((row, point))
        })
        .collect();
    if unranked.is_empty() {
        return;
    }
    page.gap();
    for (row, point) in unranked {
        let reason = if point.exclusion_reason.is_empty() {
            "it has no harmonic free energy".into()
        } else {
            clean(&point.exclusion_reason)
        };
        let somewhere = row.points.iter().any(|other| other.defined);
        let what = if somewhere {
            "partly ranked"
        } else {
            "not ranked"
        };
        page.hanging(
            "  ",
            "    ",
            &format!("form {} is {what}: {reason}", clean(&row.form)),
        );
    }
}

/// One sentence for every pair of forms that change places between two neighbouring temperatures.
pub fn order_changes(table: &RankTable) -> Vec<String> {
    let mut temperatures: Vec<f64> = table
        .rows
        .iter()
        .flat_map(|row| row.points.iter().map(|point| point.temperature_k))
        .collect();
    temperatures.sort_by(f64::total_cmp);
    temperatures.dedup_by(|a, b| (*a - *b).abs() < SAME_TEMPERATURE_K);
    let mut sentences = Vec::new();
    for pair in temperatures.windows(2) {
        let &[colder, warmer] = pair else { continue };
        for (k, first) in table.rows.iter().enumerate() {
            for second in table.rows.iter().skip(k + 1) {
                sentences.extend(swap_sentence(first, second, colder, warmer));
            }
        }
    }
    sentences
}

fn swap_sentence(first: &RankRow, second: &RankRow, colder: f64, warmer: f64) -> Option<String> {
    let before = gap_of(first, second, colder)?;
    let after = gap_of(first, second, warmer)?;
    if before * after >= 0.0 {
        return None;
    }
    let (riser, sinker) = if after < 0.0 {
        (second, first)
    } else {
        (first, second)
    };
    let sure = |kelvin| brackets_apart(first, second, kelvin) == Some(true);
    let certainty = if sure(colder) && sure(warmer) {
        "the brackets are apart on both sides"
    } else {
        "the brackets overlap, so the change is not certain"
    };
    Some(format!(
        "Order changes between {} and {} K: form {} falls below form {} ({certainty}).",
        temperature(colder),
        temperature(warmer),
        clean(&sinker.form),
        clean(&riser.form),
    ))
}

fn point_at(row: &RankRow, kelvin: f64) -> Option<&RankPoint> {
    row.points
        .iter()
        .find(|point| point.defined && (point.temperature_k - kelvin).abs() < SAME_TEMPERATURE_K)
}

/// Energy of `first` above `second`, kJ/mol.
fn gap_of(first: &RankRow, second: &RankRow, kelvin: f64) -> Option<f64> {
    Some(
        point_at(first, kelvin)?.relative_kj_per_mol?
            - point_at(second, kelvin)?.relative_kj_per_mol?,
    )
}

fn brackets_apart(first: &RankRow, second: &RankRow, kelvin: f64) -> Option<bool> {
    let first = point_at(first, kelvin)?;
    let second = point_at(second, kelvin)?;
    Some(
        first.upper_kj_per_mol? < second.lower_kj_per_mol?
            || second.upper_kj_per_mol? < first.lower_kj_per_mol?,
    )
}
