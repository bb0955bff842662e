//! The words that stand for the contract's names.

use tarehouse_proto::v1::{
    CellProtocol, LikelyCause, Severity, SoftModeTag, State, Strength, Verdict,
};

use super::numbers::counted;
use super::text::{Style, View, clean};

/// A verdict in one word.
pub fn verdict(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Accept => "accepted",
        Verdict::Hold => "held",
        Verdict::Reject => "rejected",
        Verdict::Unspecified => "no verdict",
    }
}

/// What a verdict means, to stand right after its word.
pub fn verdict_sentence(verdict: Verdict, caution_count: usize) -> String {
    match verdict {
        Verdict::Accept if caution_count == 0 => {
            ". Every check passes; it can be stored and ranked.".to_owned()
        }
        Verdict::Accept => format!(
            ", with {}. It can be stored and ranked; read what is below before you rely on it.",
            counted(caution_count, "caution", "cautions")
        ),
        Verdict::Hold => ". A curator has to look at it before it can be ranked.".to_owned(),
        Verdict::Reject => ". It cannot be ranked as it is.".to_owned(),
        Verdict::Unspecified => ". It has not been examined.".to_owned(),
    }
}

/// A reason of a verdict as a sentence: a rule's name at its head moves to the end, so that the words come first.
pub fn reason(text: &str) -> String {
    let text = clean(text);
    match text.split_once(": ") {
        Some((rule, said)) if is_rule_name(rule) => format!("{said} (rule {rule})"),
        _ => text.into_owned(),
    }
}

/// Whether a word is kebab-case, as the names of rules are.
fn is_rule_name(word: &str) -> bool {
    let is_part = |part: &str| !part.is_empty() && part.bytes().all(|c| c.is_ascii_lowercase());
    word.split('-').all(is_part)
}

/// Style of a verdict.
pub fn verdict_style(verdict: Verdict) -> Style {
    match verdict {
        Verdict::Accept => Style::Good,
        Verdict::Hold => Style::Care,
        Verdict::Reject => Style::Bad,
        Verdict::Unspecified => Style::Quiet,
    }
}

/// A state in one word.
pub fn state(state: State) -> &'static str {
    match state {
        State::Draft => "draft",
        State::Queued => "queued",
        State::Accepted => "accepted",
        State::Held => "held",
        State::Rejected => "rejected",
        State::Returned => "returned",
        State::Retired => "retired",
        State::Withdrawn => "withdrawn",
        State::Unspecified => "unknown",
    }
}

/// A state in its style.
pub fn painted_state(view: View, of: State) -> String {
    let style = match of {
        State::Accepted => Style::Good,
        State::Held | State::Returned => Style::Care,
        State::Rejected => Style::Bad,
        State::Draft | State::Queued | State::Retired | State::Withdrawn | State::Unspecified => {
            Style::Quiet
        }
    };
    view.paint(style, state(of))
}

/// Whether nothing more happens to a submission in this state unless somebody acts.
pub fn is_final(state: State) -> bool {
    match state {
        State::Accepted
        | State::Held
        | State::Rejected
        | State::Returned
        | State::Retired
        | State::Withdrawn => true,
        State::Draft | State::Queued | State::Unspecified => false,
    }
}

/// A severity in one word.
pub fn severity(severity: Severity) -> &'static str {
    match severity {
        Severity::Pass => "pass",
        Severity::Caution => "caution",
        Severity::Fail => "fail",
        Severity::Unspecified => "unknown",
    }
}

/// A severity in its style, six columns wide or more.
pub fn severity_style(severity: Severity) -> Style {
    match severity {
        Severity::Pass => Style::Good,
        Severity::Caution => Style::Care,
        Severity::Fail => Style::Bad,
        Severity::Unspecified => Style::Quiet,
    }
}

/// A likely cause in words; nothing where there is none to name.
pub fn likely_cause(cause: LikelyCause) -> Option<&'static str> {
    Some(match cause {
        LikelyCause::Unspecified | LikelyCause::None => return None,
        LikelyCause::WrongUnit => "the constants are in another unit than declared",
        LikelyCause::SwappedIndexOrder => {
            "the order of the two atom indices, or the sign of the translations, is swapped"
        }
        LikelyCause::PermutedAxes => "the Cartesian axes of structure and constants differ",
        LikelyCause::PermutedAtoms => {
            "the order of the atoms differs between structure and constants"
        }
        LikelyCause::WrongMasses => "the masses do not belong to the elements",
        LikelyCause::SignError => "the constants have the wrong sign",
        LikelyCause::ZeroedBlock => "a block of the constants was set to zero",
        LikelyCause::DuplicatedBlock => "a block of the constants stands twice",
        LikelyCause::WrongSupercell => {
            "the supercell or its translations are not those of the constants"
        }
        LikelyCause::WrongStructure => "the structure is not that of the constants",
        LikelyCause::ScfNoise => "noise of a loosely converged electronic structure",
        LikelyCause::RoundedForces => "forces were written with too few decimals",
        LikelyCause::DifferenceTruncation => {
            "the displacements are too long for the difference quotient"
        }
        LikelyCause::SmallSupercell => "the supercell is too small",
        LikelyCause::UnrelaxedGeometry => "the geometry was not fully relaxed",
        LikelyCause::EvidenceErased => "conditions were enforced before submission",
        LikelyCause::MissingSetting => "a setting was not declared",
        LikelyCause::LooseSetting => "a setting is looser than the policy asks",
        LikelyCause::Instability => "the harmonic crystal is truly unstable",
        LikelyCause::DifferentTreatment => "the contributor treated the constants in another way",
        LikelyCause::Unknown => "not known",
    })
}

/// A tag in words.
pub fn tag(tag: SoftModeTag) -> &'static str {
    match tag {
        SoftModeTag::Numerical => "numerical",
        SoftModeTag::PossiblyPhysical => "possibly physical",
        SoftModeTag::Unspecified => "untagged",
    }
}

/// The strength of a tag, and what that means.
pub fn strength(strength: Strength) -> &'static str {
    match strength {
        Strength::Strong => "strong (direct evidence)",
        Strength::Weak => "weak (indirect evidence)",
        Strength::Unspecified => "of unknown strength",
    }
}

/// How a cell was chosen.
pub fn cell_protocol(protocol: CellProtocol) -> &'static str {
    match protocol {
        CellProtocol::Relaxed => "relaxed cells",
        CellProtocol::Experimental => "measured cells",
        CellProtocol::Expanded => "expanded cells",
        CellProtocol::Other => "cells of another kind",
        CellProtocol::Unspecified => "cells of unknown kind",
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use tarehouse_assay::report::Rule;

    #[test]
    fn the_name_of_every_rule_moves_behind_its_words() {
        for rule in Rule::ALL {
            let text = format!("{}: it leaves 3: too much", rule.name());
            let expected = format!("it leaves 3: too much (rule {})", rule.name());
            assert_eq!(reason(&text), expected);
        }
    }

    #[test]
    fn other_reasons_stay_as_they_are() {
        for text in [
            "possibly physical soft modes, down to 20.2i cm⁻¹: q = (1/2, 0, 0) fits",
            "settings.basis is required and is missing",
            ": nothing",
        ] {
            assert_eq!(reason(text), text);
        }
    }
}
