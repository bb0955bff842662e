//! The text of `package.toml` for a submission.
//!
//! This module alone knows the words of the manifest, so that the shared writer can take its place.

use std::fmt::Write as _;

use nalgebra::Matrix3;
use tarehouse_assay::Submission;
use tarehouse_assay::submission::{
    CellProtocol, Differences, Displaced, Enforced, LongRange, MethodKind, Scheme,
};
use tarehouse_physics::force_constants::FirstIndex;

/// First line of the format.
pub(crate) const FORMAT: &str = "tarehouse-package/1";

/// The manifest of `submission`, whose constants stand in `file`.
pub(crate) fn text(submission: &Submission, file: &str) -> String {
    let mut lines = Lines::default();
    lines.pair("format", &quoted(FORMAT));
    identity(&mut lines, submission);
    crystal(&mut lines, submission);
    constants(&mut lines, submission, file);
    energy(&mut lines, submission);
    claims(&mut lines, submission);
    settings(&mut lines, submission);
    lines.0
}

#[derive(Default)]
struct Lines(String);

impl Lines {
    // Writing to a string cannot fail.
    fn table(&mut self, header: &str) {
        let _ = writeln!(self.0, "\n{header}");
    }

    fn pair(&mut self, key: &str, value: &str) {
        let _ = writeln!(self.0, "{key} = {value}");
    }

    fn text(&mut self, key: &str, value: Option<&String>) {
        if let Some(value) = value {
            self.pair(key, &quoted(value));
        }
    }

    fn number(&mut self, key: &str, value: Option<f64>) {
        if let Some(value) = value {
            self.pair(key, &number(value));
        }
    }
}

fn identity(lines: &mut Lines, submission: &Submission) {
    let identity = &submission.identity;
    lines.table("[identity]");
    lines.pair("compound", &quoted(&identity.compound));
    lines.pair("formula", &quoted(&identity.formula.to_string()));
    lines.pair("form", &quoted(&identity.form));
    lines.pair("formula_units", &identity.formula_units.to_string());
    lines.text("contributor_key", identity.contributor_key.as_ref());
    lines.pair("note", &quoted(&identity.note));
    for component in &submission.components {
        lines.table("[[component]]");
        lines.pair("name", &quoted(&component.name));
        lines.pair("formula", &quoted(&component.formula.to_string()));
        lines.pair("count", &component.count.to_string());
        lines.pair("charge", &component.charge.to_string());
        lines.text("inchi", component.inchi.as_ref());
    }
}

fn crystal(lines: &mut Lines, submission: &Submission) {
    let crystal = &submission.crystal;
    lines.table("[crystal]");
    lines.pair("cell_vectors", &matrix(crystal.cell()));
    lines.pair("length_unit", &quoted("angstrom"));
    let elements = crystal.elements().iter().map(|e| quoted(e.symbol()));
    lines.pair("elements", &list(elements));
    let rows = crystal.positions().iter();
    let rows: Vec<String> = rows
        .map(|x| format!("    {},\n", list(x.iter().map(|v| number(*v)))))
        .collect();
    lines.pair("positions", &format!("[\n{}]", rows.concat()));
    if submission.masses_declared {
        lines.pair(
            "masses",
            &list(crystal.masses_u().iter().map(|m| number(*m))),
        );
    }
    let protocol = match submission.cell_protocol {
        CellProtocol::Relaxed => "relaxed",
        CellProtocol::Experimental => "experimental",
        CellProtocol::Expanded => "expanded",
        CellProtocol::Other => "other",
    };
    lines.pair("cell_protocol", &quoted(protocol));
    lines.number("temperature_k", submission.cell_temperature_k);
}

fn constants(lines: &mut Lines, submission: &Submission, file: &str) {
    let declaration = &submission.declaration;
    let supercell = submission.constants.supercell();
    let triple = |row: &[i64; 3]| list(row.iter().map(i64::to_string));
    lines.table("[constants]");
    lines.pair("file", &quoted(file));
    lines.pair("unit", &quoted(declaration.unit.name()));
    lines.pair("supercell", &list(supercell.matrix().iter().map(triple)));
    lines.pair(
        "translations",
        &list(supercell.translations().iter().map(triple)),
    );
    let first_index = match declaration.first_index {
        FirstIndex::Displaced => "displaced",
        FirstIndex::Response => "response",
    };
    lines.pair("first_index", &quoted(first_index));
    let displaced = match declaration.displaced {
        Displaced::All => "all",
        Displaced::Inequivalent => "inequivalent",
    };
    lines.pair("displaced", &quoted(displaced));
    lines.pair("raw", &declaration.raw.to_string());
    let enforced = declaration.enforced.iter().map(|condition| {
        quoted(match condition {
            Enforced::PairSymmetry => "pair-symmetry",
            Enforced::TranslationSum => "translation-sum",
            Enforced::RotationSum => "rotation-sum",
            Enforced::SpaceGroup => "space-group",
        })
    });
    lines.pair("enforced", &list(enforced));
    let long_range = match declaration.long_range {
        LongRange::Included => "included",
        LongRange::Removed => "removed",
    };
    lines.pair("long_range", &quoted(long_range));
}

fn energy(lines: &mut Lines, submission: &Submission) {
    let energy = &submission.energy;
    lines.table("[energy]");
    lines.pair("lattice_energy", &number(energy.lattice_energy_ev));
    lines.pair("unit", &quoted("eV"));
    if let Some(level) = &energy.level {
        let parts = [
            ("functional", &level.functional),
            ("dispersion", &level.dispersion),
            ("basis", &level.basis),
            ("pseudopotentials", &level.pseudopotentials),
        ];
        let parts: Vec<String> = parts
            .iter()
            .filter_map(|(key, part)| Some(format!("{key} = {}", quoted(part.as_ref()?))))
            .collect();
        lines.pair("level", &format!("{{ {} }}", parts.join(", ")));
    }
    lines.pair(
        "conformational_correction",
        &number(energy.conformational_correction_ev),
    );
}

fn claims(lines: &mut Lines, submission: &Submission) {
    let claims = &submission.claims;
    if claims.zero_point_energy_ev.is_none() && claims.free_energy_ev.is_empty() {
        return;
    }
    lines.table("[claims]");
    lines.number("zero_point_energy", claims.zero_point_energy_ev);
    if !claims.free_energy_ev.is_empty() {
        let pairs = claims.free_energy_ev.iter();
        let pairs = pairs.map(|(t, f)| list([number(*t), number(*f)].into_iter()));
        lines.pair("free_energy", &list(pairs));
    }
}

fn settings(lines: &mut Lines, submission: &Submission) {
    let settings = &submission.settings;
    lines.table("[settings]");
    if let Some(kind) = settings.kind {
        let kind = match kind {
            MethodKind::Dft => "dft",
            MethodKind::Wavefunction => "wavefunction",
            MethodKind::TightBinding => "tight-binding",
            MethodKind::MlPotential => "ml-potential",
            MethodKind::ForceField => "force-field",
        };
        lines.pair("kind", &quoted(kind));
    }
    lines.text("program", settings.program.as_ref());
    lines.text("functional", settings.level.functional.as_ref());
    lines.text("dispersion", settings.level.dispersion.as_ref());
    lines.text("basis", settings.level.basis.as_ref());
    lines.text("pseudopotentials", settings.level.pseudopotentials.as_ref());
    lines.text("model_digest", settings.model_digest.as_ref());
    if let Some(bits) = settings.float_bits {
        lines.pair("float_bits", &bits.to_string());
    }
    lines.number("orbital_cutoff_ev", settings.orbital_cutoff_ev);
    lines.number(
        "density_to_orbital_cutoff",
        settings.density_to_orbital_cutoff,
    );
    lines.number("k_spacing_per_angstrom", settings.k_spacing_per_angstrom);
    lines.number(
        "scf_tolerance_ev_per_atom",
        settings.scf_tolerance_ev_per_atom,
    );
    lines.number(
        "force_residual_rms_ev_per_angstrom",
        settings.force_residual_rms_ev_per_angstrom,
    );
    lines.number(
        "force_residual_max_ev_per_angstrom",
        settings.force_residual_max_ev_per_angstrom,
    );
    if let Some(stress) = &settings.stress_gpa {
        lines.pair("stress_gpa", &matrix(stress));
    }
    if let Some(scheme) = settings.scheme {
        let scheme = match scheme {
            Scheme::FiniteDisplacement => "finite-displacement",
            Scheme::LinearResponse => "linear-response",
        };
        lines.pair("scheme", &quoted(scheme));
    }
    if let Some(differences) = settings.differences {
        let differences = match differences {
            Differences::Central => "central",
            Differences::Forward => "forward",
        };
        lines.pair("differences", &quoted(differences));
    }
    lines.number("displacement_angstrom", settings.displacement_angstrom);
}

/// Shortest digits that give the number back; always a TOML float.
fn number(value: f64) -> String {
    format!("{value:?}")
}

fn list(items: impl Iterator<Item = String>) -> String {
    format!("[{}]", items.collect::<Vec<_>>().join(", "))
}

fn matrix(matrix: &Matrix3<f64>) -> String {
    list((0..3).map(|r| list((0..3).map(|c| number(matrix[(r, c)])))))
}

/// A basic TOML string.
fn quoted(text: &str) -> String {
    let mut result = String::from('"');
    for character in text.chars() {
        match character {
            '"' => result.push_str("\\\""),
            '\\' => result.push_str("\\\\"),
            '\n' => result.push_str("\\n"),
            '\t' => result.push_str("\\t"),
            c if c.is_control() => {
                let _ = write!(result, "\\u{:04X}", u32::from(c));
            }
            c => result.push(c),
        }
    }
    result.push('"');
    result
}

#[cfg(test)]
mod tests {
    use super::{number, quoted};

    #[test]
    fn strings_and_numbers_come_back() {
        for text in [
            "plain",
            "a \"quoted\" \\ word",
            "two\nlines\tand a \u{1} control",
            "β-form",
        ] {
            let table: toml::Table = format!("x = {}", quoted(text)).parse().unwrap();
            assert_eq!(table["x"].as_str(), Some(text));
        }
        for value in [0.0, 1.0, -0.1, 1e-300, 6.02e23, 1.0 / 3.0] {
            let table: toml::Table = format!("x = {}", number(value)).parse().unwrap();
            assert_eq!(
                table["x"].as_float().map(f64::to_bits),
                Some(value.to_bits())
            );
        }
    }
}
