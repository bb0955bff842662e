//! Convergence series: what differs, how the results move, and what follows.

use tarehouse_proto::v1::{
    Series, SeriesChange, SeriesConclusion, SeriesQuantity, SeriesQuantityKind, SeriesSetting,
    SeriesValue,
};

use super::numbers::{temperature, wave_vector, wavenumber};
use super::table::{Kind, Table, fixed};
use super::text::{Page, Style, View, clean};

/// A series as tables: settings, then one table per quantity.
pub fn to_text(series: &Series, view: View) -> String {
    let mut page = Page::new(view);
    page.title(&format!(
        "{}, form {}",
        clean(&series.compound),
        clean(&series.form)
    ));
    let (word, style) = conclusion(series.conclusion());
    page.gap();
    page.paragraph(0, &view.paint(style, word));
    page.paragraph(0, &clean(&series.reason));
    page.gap();
    for (k, member) in series.members.iter().enumerate() {
        page.hanging(
            "  ",
            "    ",
            &format!("member {} is {}", k + 1, clean(member)),
        );
    }
    write_settings(&mut page, &series.settings);
    for quantity in &series.quantities {
        write_quantity(&mut page, quantity);
    }
    page.gap();
    page.paragraph(
        0,
        "A change is held against both brackets together. Three members are the least, and a value that looks right \
         proves nothing.",
    );
    page.finish()
}

/// The settings that differ, one row each.
pub fn write_settings(page: &mut Page, settings: &[SeriesSetting]) {
    let count = settings
        .iter()
        .map(|setting| setting.values.len())
        .max()
        .unwrap_or(0);
    if count == 0 {
        return;
    }
    let titles: Vec<String> = (1..=count).map(|k| k.to_string()).collect();
    let mut columns = vec![("differs", Kind::Name)];
    columns.extend(titles.iter().map(|title| (title.as_str(), Kind::Words)));
    let mut table = Table::new(&columns);
    for setting in settings {
        let mut row = vec![clean(&setting.setting).into_owned()];
        row.extend(setting.values.iter().map(|value| clean(value).into_owned()));
        table.row(row);
    }
    page.gap();
    table.write(page, 2);
}

fn write_quantity(page: &mut Page, quantity: &SeriesQuantity) {
    page.gap();
    page.line(&title(quantity));
    let mut table = Table::new(&[
        ("member", Kind::Number),
        ("value", Kind::Number),
        ("bracket", Kind::Number),
        ("change", Kind::Number),
        ("explained", Kind::Number),
    ]);
    let is_width = quantity.kind() == SeriesQuantityKind::BracketHalfWidth;
    for (k, value) in quantity.values.iter().enumerate() {
        let step = k
            .checked_sub(1)
            .and_then(|before| quantity.changes.get(before));
        let mut row = vec![(k + 1).to_string(), shown(quantity, value.central)];
        row.push(if is_width {
            String::new()
        } else {
            bracket(quantity, value)
        });
        row.extend(change(quantity, step, is_width));
        table.row(row);
    }
    table.write(page, 2);
    if quantity.conclusion() != SeriesConclusion::Unspecified {
        let (word, style) = conclusion(quantity.conclusion());
        let word = page.view().paint(style, word);
        page.hanging(
            "  ",
            "    ",
            &format!("{word}: {}", clean(&quantity.reason)),
        );
    }
}

fn title(quantity: &SeriesQuantity) -> String {
    let at = temperature(quantity.temperature_k.unwrap_or_default());
    match quantity.kind() {
        SeriesQuantityKind::FreeEnergy => {
            format!("Vibrational free energy at {at} K, kJ/mol per formula unit")
        }
        SeriesQuantityKind::BracketHalfWidth => {
            format!("Half width of its bracket at {at} K, kJ/mol per formula unit")
        }
        SeriesQuantityKind::LowestBranch => {
            format!(
                "Lowest non-acoustic branch at {}, cm⁻¹",
                wave_vector(&quantity.q)
            )
        }
        SeriesQuantityKind::Unspecified => "A quantity this program does not know".to_owned(),
    }
}

fn shown(quantity: &SeriesQuantity, value: Option<f64>) -> String {
    match (value, quantity.kind()) {
        (None, _) => "not defined".to_owned(),
        (Some(value), SeriesQuantityKind::LowestBranch) => wavenumber(value),
        (Some(value), _) => fixed(value, 3),
    }
}

fn bracket(quantity: &SeriesQuantity, value: &SeriesValue) -> String {
    match (value.lower, value.upper) {
        (Some(lower), Some(upper)) => {
            format!(
                "[{}, {}]",
                shown(quantity, Some(lower)),
                shown(quantity, Some(upper))
            )
        }
        _ => String::new(),
    }
}

fn change(quantity: &SeriesQuantity, step: Option<&SeriesChange>, is_width: bool) -> [String; 2] {
    let Some((step, change)) = step.and_then(|step| Some((step, step.change?))) else {
        return [String::new(), String::new()];
    };
    let decimals = if quantity.kind() == SeriesQuantityKind::LowestBranch {
        1
    } else {
        3
    };
    let explained = match step.combined_half_width {
        Some(width) if !is_width => fixed(width, decimals),
        _ => String::new(),
    };
    let sign = if change > 0.0 { "+" } else { "" };
    [format!("{sign}{}", fixed(change, decimals)), explained]
}

/// A conclusion in words.
pub fn conclusion(of: SeriesConclusion) -> (&'static str, Style) {
    match of {
        SeriesConclusion::Stopped => ("stopped within the brackets", Style::Good),
        SeriesConclusion::CannotBeTold => ("cannot be told", Style::Care),
        SeriesConclusion::StillMoving => ("still moving", Style::Bad),
        SeriesConclusion::Unspecified => ("not judged", Style::Quiet),
    }
}
