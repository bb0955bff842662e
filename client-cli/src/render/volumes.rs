//! Volume series: the free enthalpy of a form that may expand and be pressed.

use tarehouse_proto::v1::{Bracketed, QuasiHarmonic, QuasiHarmonicPoint};

use super::numbers::temperature;
use super::series::write_settings;
use super::table::{Kind, Table, fixed};
use super::text::{Page, View, clean};

/// Micro-units of an expansion coefficient.
const PER_MILLION: f64 = 1e6;

/// A volume series as a table of temperatures and pressures.
pub fn to_text(found: &QuasiHarmonic, view: View) -> String {
    let mut page = Page::new(view);
    page.title(&format!(
        "{}, form {}: volume series",
        clean(&found.compound),
        clean(&found.form)
    ));
    page.labelled(0, "energy", 9, &clean(&found.energy_level));
    page.labelled(0, "constants", 9, &clean(&found.constants_level));
    page.gap();
    for member in &found.members {
        let volume = fixed(member.volume_per_formula_unit_ang3, 2);
        page.hanging(
            "  ",
            "    ",
            &format!("{volume} Å³ is {}", clean(&member.name)),
        );
    }
    if !found.settings.is_empty() {
        page.gap();
        page.paragraph(
            0,
            "The members differ in more than their volume, which bends the fit:",
        );
        write_settings(&mut page, &found.settings);
    }
    let mut table = Table::new(&[
        ("T, K", Kind::Number),
        ("p, GPa", Kind::Number),
        ("G, kJ/mol", Kind::Number),
        ("V, Å³", Kind::Number),
        ("B, GPa", Kind::Number),
        ("expansion, 1e-6/K", Kind::Number),
        ("C_p, J/mol/K", Kind::Number),
    ]);
    for point in found.points.iter().filter(|point| point.defined) {
        table.row(row(point));
    }
    if !table.is_empty() {
        page.gap();
        table.write(&mut page, 2);
    }
    for point in found.points.iter().filter(|point| !point.defined) {
        page.gap();
        page.hanging(
            "  ",
            "    ",
            &format!("No answer: {}", clean(&point.refusal)),
        );
    }
    page.gap();
    page.paragraph(
        0,
        "Per formula unit; ± is half the bracket: those of the members, the scatter of the fit and the choice of fit. It \
         holds neither the level of theory nor anharmonic motion at constant volume.",
    );
    page.finish()
}

fn row(point: &QuasiHarmonicPoint) -> Vec<String> {
    let number = |of: Option<&Bracketed>, unit: f64, decimals: usize| {
        of.map_or_else(String::new, |x| {
            format!(
                "{} ± {}",
                fixed(x.central * unit, decimals),
                fixed(x.half_width * unit, decimals)
            )
        })
    };
    vec![
        temperature(point.temperature_k),
        fixed(point.pressure_gpa, 3),
        number(point.gibbs_kj_per_mol.as_ref(), 1.0, 3),
        number(point.volume_ang3.as_ref(), 1.0, 2),
        number(point.bulk_modulus_gpa.as_ref(), 1.0, 2),
        number(point.expansion_per_k.as_ref(), PER_MILLION, 0),
        point
            .heat_capacity_p_j_per_mol_k
            .map_or_else(String::new, |x| fixed(x, 2)),
    ]
}
