//! Clusters of soft modes with their tags and the evidence for them.

use tarehouse_proto::v1::{SoftMode, SoftModeTag, TruncationChange};

use super::numbers::{counted, quantity, wave_vector, wavenumber};
use super::text::{Page, Style, clean};
use super::words;

/// Clusters shown unless all are asked for.
const CLUSTERS_SHOWN: usize = 6;

/// Writes the clusters, lowest first as they come.
pub fn write(page: &mut Page, clusters: &[SoftMode], show_all: bool) {
    if clusters.is_empty() {
        page.title("Soft modes: none");
        return;
    }
    page.title(&format!(
        "Soft modes: {}",
        counted(clusters.len(), "cluster", "clusters")
    ));
    let shown = if show_all {
        clusters.len()
    } else {
        CLUSTERS_SHOWN
    };
    for cluster in clusters.iter().take(shown) {
        write_cluster(page, cluster);
    }
    if clusters.len() > shown {
        let more = counted(clusters.len() - shown, "more cluster", "more clusters");
        page.paragraph(2, &format!("… and {more}; --all shows every one."));
    }
}

fn write_cluster(page: &mut Page, cluster: &SoftMode) {
    let view = page.view();
    let style = match cluster.tag() {
        SoftModeTag::PossiblyPhysical => Style::Care,
        SoftModeTag::Numerical | SoftModeTag::Unspecified => Style::Quiet,
    };
    let tag = view.paint(style, words::tag(cluster.tag()));
    page.hanging(
        "  ",
        "    ",
        &format!(
            "{} cm⁻¹ at q = {}: {tag}, {}",
            wavenumber(cluster.lowest_wavenumber_per_cm),
            wave_vector(&cluster.q),
            words::strength(cluster.strength()),
        ),
    );
    if !cluster.reason.is_empty() {
        page.paragraph(4, &clean(&cluster.reason));
    }
    page.labelled(4, "evidence", 8, &evidence(cluster));
    let changes = truncation(cluster);
    if !changes.is_empty() {
        page.labelled(4, "cut-off", 8, &changes);
    }
    if let Some(limit) = cluster.exclusion_limit_per_cm {
        let text = format!("an instability weaker than {limit:.1}i cm⁻¹ cannot be excluded");
        page.labelled(4, "limit", 8, &text);
    }
}

fn evidence(cluster: &SoftMode) -> String {
    let mut parts = vec![counted(
        usize::try_from(cluster.point_count).unwrap_or(usize::MAX),
        "mesh point",
        "mesh points",
    )];
    parts.push(
        if cluster.commensurate {
            "holds a wave vector that the supercell samples"
        } else {
            "only between wave vectors that the supercell samples"
        }
        .to_owned(),
    );
    if let Some(z) = cluster.z {
        parts.push(format!("z = {}", quantity(z)));
    }
    if let Some(share) = cluster.alias_share {
        parts.push(format!("aliasing {} of its depth", quantity(share)));
    }
    parts.push(format!(
        "rigid-molecule motion {:.0} %",
        100.0 * cluster.external_fraction
    ));
    parts.push(format!(
        "overlap with rigid translations {:.0} %",
        100.0 * cluster.acoustic_overlap
    ));
    parts.push(format!("participation {:.2}", cluster.participation));
    parts.push(format!(
        "{} cm⁻¹ before projection",
        wavenumber(cluster.raw_wavenumber_per_cm)
    ));
    parts.join("; ")
}

/// The lowest wavenumber after dropping small constants, one entry per fraction.
fn truncation(cluster: &SoftMode) -> String {
    if cluster.truncation_changes.is_empty() {
        return String::new();
    }
    let joined = |part: fn(&TruncationChange) -> String| {
        let parts: Vec<String> = cluster.truncation_changes.iter().map(part).collect();
        parts.join(", ")
    };
    format!(
        "{} cm⁻¹ without constants below {} of the largest",
        joined(|change| wavenumber(change.wavenumber_per_cm)),
        joined(|change| format!("{:e}", change.fraction)),
    )
}
