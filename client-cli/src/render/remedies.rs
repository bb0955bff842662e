//! What to do next, and what the bracket is made of.

use tarehouse_proto::v1::{BracketParts, Remedy};

use super::text::{Page, clean};

/// Writes the remedies, largest effect first as they come; nothing where there are none.
pub fn write(page: &mut Page, remedies: &[Remedy], parts: Option<&BracketParts>) {
    if remedies.is_empty() {
        return;
    }
    page.title("What to do next, largest effect on the bracket first");
    for (index, remedy) in remedies.iter().enumerate() {
        let effect = remedy
            .effect_kj_per_mol
            .map(|effect| format!(" (up to {effect:.2} kJ/mol of the half width)"))
            .unwrap_or_default();
        let text = format!(
            "{}: {}{effect}",
            clean(&remedy.setting),
            clean(&remedy.advice)
        );
        page.hanging(&format!("  {}. ", index + 1), "     ", &text);
    }
    if let Some(parts) = parts {
        let text = format!(
            "The half width at the judged temperature: noise {:.2}, its bias {:.2}, aliasing {:.2}, residual force {:.2}, \
             floor {:.2} kJ/mol.",
            parts.noise_kj_per_mol,
            parts.bias_kj_per_mol,
            parts.alias_kj_per_mol,
            parts.residual_force_kj_per_mol,
            parts.floor_kj_per_mol
        );
        page.paragraph(2, &text);
    }
}
