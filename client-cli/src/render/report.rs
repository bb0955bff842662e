//! A report for people: the verdict with its reasons first, then what needs attention, soft modes, free energies.

use tarehouse_proto::v1::{CrystalFacts, Finding, FreeEnergy, Noise, Report, Severity, Verdict};

use super::numbers::{counted, quantity, temperature, with_unit};
use super::table::{Kind, Table, aligned};
use super::text::{Page, Style, View, clean};
use super::words;
use super::{remedies, soft_modes};

/// Temperatures shown where the report has them, K.
const TEMPERATURES_SHOWN_K: [f64; 6] = [0.0, 100.0, 200.0, 300.0, 400.0, 500.0];

/// What the numbers leave out.
pub const LEFT_OUT: &str = "These numbers are harmonic and for one static cell: they leave out anharmonic motion, \
    thermal expansion and any error of the level of theory, and the bracket holds only the upload's own noise, \
    aliasing and residual force.";

/// What the report is about, as far as the caller knows.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Subject {
    /// Compound.
    pub compound: String,
    /// Label of the polymorph.
    pub form: String,
    /// One formula unit.
    pub formula: String,
    /// Resource name or folder.
    pub source: String,
}

/// The report as text.
pub fn to_text(report: &Report, subject: &Subject, show_all: bool, view: View) -> String {
    let mut page = Page::new(view);
    write_head(&mut page, subject);
    write_verdict(&mut page, report);
    write_findings(&mut page, &report.findings, show_all);
    soft_modes::write(&mut page, &report.soft_modes, show_all);
    write_free_energy(&mut page, report, show_all);
    remedies::write(&mut page, &report.remedies, report.bracket_parts.as_ref());
    write_facts(&mut page, report);
    page.finish()
}

fn write_head(page: &mut Page, subject: &Subject) {
    let parts: Vec<String> = [
        clean(&subject.compound).into_owned(),
        if subject.form.is_empty() {
            String::new()
        } else {
            format!("form {}", clean(&subject.form))
        },
        clean(&subject.formula).into_owned(),
    ]
    .into_iter()
    .filter(|part| !part.is_empty())
    .collect();
    if !parts.is_empty() {
        page.title(&parts.join(" · "));
    }
    if !subject.source.is_empty() {
        page.paragraph(0, &clean(&subject.source));
    }
}

/// Writes the verdict in words and the reasons for it.
pub fn write_verdict(page: &mut Page, report: &Report) {
    let verdict = report.verdict();
    let word = words::verdict(verdict).to_uppercase();
    let word = page.view().paint(words::verdict_style(verdict), &word);
    page.gap();
    page.hanging(
        "",
        "  ",
        &format!(
            "{word}{}",
            words::verdict_sentence(verdict, caution_count(report))
        ),
    );
    for (k, reason) in report.verdict_reasons.iter().enumerate() {
        let first = format!("{:>3}. ", k + 1);
        page.hanging(&first, "     ", &words::reason(reason));
    }
}

/// How many findings of a report are cautions.
pub fn caution_count(report: &Report) -> usize {
    let findings = report.findings.iter();
    findings
        .filter(|finding| finding.severity() == Severity::Caution)
        .count()
}

fn write_findings(page: &mut Page, findings: &[Finding], show_all: bool) {
    let of = |severity| {
        findings
            .iter()
            .filter(move |finding| finding.severity() == severity)
    };
    page.title(&format!(
        "Findings: {}, {}, {}",
        counted(of(Severity::Fail).count(), "fail", "fails"),
        counted(of(Severity::Caution).count(), "caution", "cautions"),
        counted(of(Severity::Pass).count(), "pass", "passes"),
    ));
    for severity in [Severity::Fail, Severity::Caution, Severity::Unspecified] {
        for finding in of(severity) {
            write_finding(page, finding);
        }
    }
    if show_all {
        for finding in of(Severity::Pass) {
            write_finding(page, finding);
        }
        return;
    }
    let passes = of(Severity::Pass).count();
    if passes > 0 {
        let pass = page.view().paint(Style::Good, "pass");
        let checks = counted(passes, "check", "checks");
        page.hanging(
            &format!("  {pass}     "),
            "           ",
            &format!("{checks} (--all shows each with its number)"),
        );
    }
}

fn write_finding(page: &mut Page, finding: &Finding) {
    const LABEL: usize = 8;
    let view = page.view();
    let severity = finding.severity();
    let word = words::severity(severity);
    let blanks = " ".repeat(9_usize.saturating_sub(word.len()));
    let painted = view.paint(words::severity_style(severity), word);
    page.hanging(
        &format!("  {painted}{blanks}"),
        "           ",
        &view.paint(Style::Strong, &clean(&finding.rule)),
    );
    if !finding.message.is_empty() {
        page.paragraph(11, &clean(&finding.message));
    }
    if let Some(numbers) = measured_against_limit(finding) {
        page.labelled(11, "measured", LABEL, &numbers);
    }
    if !finding.location.is_empty() {
        page.labelled(11, "where", LABEL, &clean(&finding.location));
    }
    if severity == Severity::Pass {
        return;
    }
    if let Some(cause) = words::likely_cause(finding.likely_cause()) {
        page.labelled(11, "likely", LABEL, cause);
    }
    if !finding.remedy.is_empty() {
        page.labelled(11, "do next", LABEL, &clean(&finding.remedy));
    }
}

fn measured_against_limit(finding: &Finding) -> Option<String> {
    let measured = with_unit(finding.measured?, &clean(&finding.unit));
    Some(match finding.limit {
        Some(limit) => format!(
            "{measured}; limit {}",
            with_unit(limit, &clean(&finding.unit))
        ),
        None => measured,
    })
}

fn shown(report: &Report, show_all: bool) -> Vec<&FreeEnergy> {
    let chosen: Vec<&FreeEnergy> = report
        .free_energy
        .iter()
        .filter(|point| {
            show_all
                || TEMPERATURES_SHOWN_K
                    .iter()
                    .any(|wanted| (wanted - point.temperature_k).abs() < 1e-6)
        })
        .collect();
    if chosen.is_empty() {
        report
            .free_energy
            .iter()
            .take(TEMPERATURES_SHOWN_K.len())
            .collect()
    } else {
        chosen
    }
}

fn write_free_energy(page: &mut Page, report: &Report, show_all: bool) {
    let points = shown(report, show_all);
    page.title("Vibrational free energy, kJ/mol per formula unit");
    if points.iter().all(|point| !point.defined) {
        page.paragraph(
            2,
            "Not defined: a crystal with a soft mode that may be physical has no harmonic free energy.",
        );
    } else {
        if report.verdict() == Verdict::Reject {
            page.paragraph(2, "Of a rejected upload: not to be used.");
        }
        free_energy_table(&points, page.view().width.saturating_sub(2)).write(page, 2);
        page.paragraph(
            2,
            &format!(
                "Zero-point energy {:.3}",
                report.zero_point_energy_kj_per_mol
            ),
        );
    }
    page.paragraph(2, LEFT_OUT);
}

/// The table of free energies, with as many of its columns as `room` has place for; the first three are always there.
fn free_energy_table(points: &[&FreeEnergy], room: usize) -> Table {
    let column = |value: fn(&FreeEnergy) -> f64, decimals| {
        let values: Vec<Option<f64>> = points
            .iter()
            .map(|point| point.defined.then(|| value(point)))
            .collect();
        aligned(&values, decimals)
    };
    let temperatures = points
        .iter()
        .map(|point| temperature(point.temperature_k))
        .collect();
    let columns = [
        ("T/K", Kind::Number, temperatures),
        (
            "F",
            Kind::Number,
            column(|point| point.central_kj_per_mol, 3),
        ),
        ("bracket", Kind::Name, brackets(points)),
        (
            "±",
            Kind::Number,
            column(
                |point| 0.5 * (point.upper_kj_per_mol - point.lower_kj_per_mol),
                3,
            ),
        ),
        (
            "S/(J/mol/K)",
            Kind::Number,
            column(|point| point.entropy_j_per_mol_k, 2),
        ),
        (
            "C_V/(J/mol/K)",
            Kind::Number,
            column(|point| point.heat_capacity_j_per_mol_k, 2),
        ),
    ];
    let first_columns = |count: usize| {
        let columns = &columns[..count.min(columns.len())];
        let heads: Vec<(&str, Kind)> = columns
            .iter()
            .map(|(head, kind, _)| (*head, *kind))
            .collect();
        let mut table = Table::new(&heads);
        for row in 0..points.len() {
            let cells = columns
                .iter()
                .filter_map(|(_, _, cells)| cells.get(row).cloned());
            table.row(cells.collect());
        }
        table
    };
    (4..=columns.len())
        .rev()
        .map(first_columns)
        .find(|table| table.natural_width() <= room)
        .unwrap_or_else(|| first_columns(3))
}

fn brackets(points: &[&FreeEnergy]) -> Vec<String> {
    let end = |value: fn(&FreeEnergy) -> f64| {
        let values: Vec<Option<f64>> = points.iter().map(|point| Some(value(point))).collect();
        aligned(&values, 3)
    };
    let lower = end(|point| point.lower_kj_per_mol);
    let upper = end(|point| point.upper_kj_per_mol);
    points
        .iter()
        .zip(lower.iter().zip(&upper))
        .map(|(point, (lower, upper))| {
            if point.defined {
                format!("{lower} … {upper}")
            } else {
                "not defined".to_owned()
            }
        })
        .collect()
}

fn write_facts(page: &mut Page, report: &Report) {
    const LABEL: usize = 10;
    page.title("The crystal and its constants, as found");
    if let Some(crystal) = &report.crystal {
        page.labelled(2, "symmetry", LABEL, &symmetry(crystal));
        page.labelled(2, "packing", LABEL, &packing(crystal));
        page.labelled(2, "sound", LABEL, &sound(crystal));
        page.labelled(2, "projection", LABEL, &projection(crystal));
        let static_energy = format!("{:.4} kJ/mol", crystal.lattice_energy_kj_per_mol);
        page.labelled(2, "static", LABEL, &static_energy);
    }
    if let Some(noise) = &report.noise {
        page.labelled(2, "noise", LABEL, &noise_text(noise));
    }
    if let Some(mesh) = &report.mesh {
        let divisions: Vec<String> = mesh.divisions.iter().map(u32::to_string).collect();
        let text = format!(
            "{} wave vectors, {} points, {} after symmetry",
            divisions.join(" × "),
            mesh.point_count,
            mesh.irreducible_count
        );
        page.labelled(2, "mesh", LABEL, &text);
    }
    page.labelled(
        2,
        "program",
        LABEL,
        &format!("tarehouse {}", clean(&report.program_version)),
    );
    page.labelled(2, "policy", LABEL, &clean(&report.policy_digest));
    page.labelled(2, "package", LABEL, &clean(&report.package_digest));
}

fn symmetry(crystal: &CrystalFacts) -> String {
    format!(
        "{} (No. {})",
        clean(&crystal.space_group_symbol),
        crystal.space_group_number
    )
}

fn packing(crystal: &CrystalFacts) -> String {
    format!(
        "{} in the cell, {:.2} Å³ per formula unit, {:.4} g/cm³",
        counted(
            usize::try_from(crystal.molecule_count).unwrap_or(usize::MAX),
            "molecule",
            "molecules"
        ),
        crystal.volume_per_formula_unit_ang3,
        crystal.density_g_per_cm3
    )
}

fn sound(crystal: &CrystalFacts) -> String {
    match (
        crystal.sound_velocity_min_m_per_s,
        crystal.sound_velocity_max_m_per_s,
    ) {
        (Some(slowest), Some(fastest)) => format!("{slowest:.0} to {fastest:.0} m/s"),
        _ => "not defined: the long-wave limit is unstable".to_owned(),
    }
}

fn projection(crystal: &CrystalFacts) -> String {
    let mut text = format!(
        "sum rules and symmetry moved the constants by {} of their norm, at most {} eV/Å²",
        quantity(crystal.projection_relative_norm),
        quantity(crystal.projection_largest_ev_per_ang2)
    );
    if let Some(change) = crystal.projection_free_energy_kj_per_mol {
        text.push_str(", and F(300 K) by ");
        text.push_str(&quantity(change));
        text.push_str(" kJ/mol");
    }
    text
}

fn noise_text(noise: &Noise) -> String {
    let relation = if noise.bound_only { "at most " } else { "" };
    let mut text = format!(
        "{relation}{} eV/Å² per constant",
        quantity(noise.sigma_ev_per_ang2)
    );
    let mut remarks = Vec::new();
    if !noise.erased.is_empty() {
        remarks.push(format!(
            "evidence erased: {}",
            clean(&noise.erased.join(", "))
        ));
    }
    for (flag, words) in [
        (noise.truncated, "cut off at a distance"),
        (noise.self_fixed, "self blocks set from the row sums"),
        (noise.symmetry_expanded, "generated from inequivalent atoms"),
        (noise.rounded, "rounded"),
    ] {
        if flag {
            remarks.push(words.to_owned());
        }
    }
    if !remarks.is_empty() {
        text.push_str("; ");
        text.push_str(&remarks.join("; "));
    }
    text
}
