//! Clusters of soft modes on the mesh, each tagged as numerical or possibly physical, with the evidence.
//!
//! Points join where any of their symmetric copies are neighbours on the full mesh (26 neighbours, periodic). Rigid
//! translations at Γ are left out. A tag is evidence, not proof.

use tarehouse_physics::c64;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::molecules::acoustic_overlap;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::units::wavenumber_per_cm;

use crate::ExamineError;
use crate::noise::map_blocks;
use crate::report::{SoftMode, Strength, Tag, TruncationChange};
use crate::spectra::{PointSpectrum, UncertainBranch};
use crate::workup::{Workup, eigen_error, lowest_wavenumber, show_q};

/// Points of one cluster, as places in the reduced mesh.
type Cluster = Vec<usize>;

/// All clusters, most negative first; clusters of the raw constants that vanish on projection last.
pub(crate) fn soft_modes(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    truncated: &[(f64, Dynamics)],
) -> Result<Vec<SoftMode>, ExamineError> {
    let neighbours = neighbours(&workup.mesh);
    let is_soft = |point: usize| !spectra[point].soft.is_empty();
    let mut modes = Vec::new();
    for cluster in clusters(&neighbours, spectra.len(), is_soft) {
        modes.push(tagged(workup, spectra, truncated, &cluster)?);
    }
    modes.sort_by(|a, b| {
        a.lowest_wavenumber_per_cm
            .total_cmp(&b.lowest_wavenumber_per_cm)
    });
    let below = workup.soft_below();
    let raw_is_soft = |point: usize| spectra[point].raw.first().is_some_and(|x| *x < below);
    for cluster in clusters(&neighbours, spectra.len(), raw_is_soft) {
        if !cluster.iter().any(|point| is_soft(*point)) {
            modes.push(vanished(workup, spectra, &cluster)?);
        }
    }
    Ok(modes)
}

/// A cluster with the modes that make it.
struct Evidence<'a> {
    workup: &'a Workup<'a>,
    spectra: &'a [PointSpectrum],
    cluster: &'a Cluster,
}

/// One soft mode of a cluster: its point and branch.
type Member<'a> = (usize, &'a UncertainBranch);

impl<'a> Evidence<'a> {
    fn members(&self) -> impl Iterator<Item = Member<'a>> + 'a {
        let spectra = self.spectra;
        self.cluster
            .iter()
            .flat_map(move |p| spectra[*p].soft.iter().map(move |b| (*p, b)))
    }

    fn is_commensurate(&self, point: usize) -> bool {
        self.workup.mesh.points()[point].commensurate
    }

    fn eigenvalue(&self, (point, branch): Member<'_>) -> f64 {
        self.spectra[point].eigenvalues[branch.branch]
    }

    /// λ from where the null puts it, at most zero.
    fn depth(&self, member: Member<'_>) -> f64 {
        self.eigenvalue(member) - member.1.null_mean.min(0.0)
    }

    fn z(&self, member: Member<'_>) -> f64 {
        self.depth(member) / member.1.spread
    }

    fn lowest(&self) -> Option<Member<'a>> {
        self.members()
            .min_by(|a, b| self.eigenvalue(*a).total_cmp(&self.eigenvalue(*b)))
    }

    /// The member at a sampled wave vector that lies deepest in units of its noise.
    fn deepest_sampled(&self) -> Option<Member<'a>> {
        self.members()
            .filter(|(point, _)| self.is_commensurate(*point))
            .min_by(|a, b| self.z(*a).total_cmp(&self.z(*b)))
    }

    /// How many standard deviations make a mode soft beyond noise.
    fn significant(&self) -> f64 {
        let limits = &self.workup.limits.soft_modes;
        if self.workup.noise.summary.rounded {
            limits.significant_z_rounded
        } else {
            limits.significant_z
        }
    }

    fn exclusion_limit(&self, branch: &UncertainBranch) -> f64 {
        wavenumber_per_cm(self.significant() * branch.spread)
    }

    fn tag(&self, lowest: Member<'_>) -> (Tag, Strength, String) {
        let significant = self.significant();
        let beyond_noise = self.members().any(|m| self.z(m) < -significant);
        let beyond_alias = self
            .members()
            .any(|m| self.depth(m) < -(significant * m.1.spread + m.1.alias));
        if let Some(member) = self.deepest_sampled().filter(|m| self.z(*m) < -significant) {
            let reason = format!(
                "{} fits the supercell, so that nothing is interpolated there, and the mode lies {:.1} standard deviations \
                 below zero",
                show_q(&self.workup.mesh.points()[member.0].q),
                -self.z(member)
            );
            return (Tag::PossiblyPhysical, Strength::Strong, reason);
        }
        let (tag, strength, reason) = if beyond_noise && self.workup.is_narrow() {
            (Tag::Numerical, Strength::Weak, NARROW)
        } else if beyond_alias {
            (Tag::PossiblyPhysical, Strength::Weak, BEYOND_ALIAS)
        } else if beyond_noise {
            (Tag::Numerical, Strength::Weak, WITHIN_ALIAS)
        } else {
            let limit = self.exclusion_limit(lowest.1);
            let reason = format!(
                "within the noise of the upload; an instability weaker than {limit:.0}i cm⁻¹ cannot be excluded"
            );
            return (Tag::Numerical, Strength::Strong, reason);
        };
        (tag, strength, reason.to_owned())
    }
}

const NARROW: &str = "only between sampled wave vectors, and the supercell is one molecule wide: a larger supercell decides";
const BEYOND_ALIAS: &str = "between sampled wave vectors, but deeper than noise and aliasing explain: a larger supercell decides";
const WITHIN_ALIAS: &str =
    "between sampled wave vectors and within the scale of aliasing: a larger supercell decides";

fn tagged(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    truncated: &[(f64, Dynamics)],
    cluster: &Cluster,
) -> Result<SoftMode, ExamineError> {
    let evidence = Evidence {
        workup,
        spectra,
        cluster,
    };
    let Some(lowest) = evidence.lowest() else {
        return vanished(workup, spectra, cluster);
    };
    let (point, branch) = lowest;
    let (tag, strength, reason) = evidence.tag(lowest);
    let q = workup.mesh.points()[point].q;
    let depth = evidence.depth(lowest).abs().max(f64::MIN_POSITIVE);
    Ok(SoftMode {
        tag,
        strength,
        lowest_wavenumber_per_cm: wavenumber_per_cm(evidence.eigenvalue(lowest)),
        raw_wavenumber_per_cm: lowest_wavenumber(&spectra[point].raw),
        q: q.into(),
        point_count: point_count(&workup.mesh, cluster),
        commensurate: evidence.deepest_sampled().is_some(),
        z: Some(evidence.z(lowest)),
        alias_share: Some(branch.alias / depth),
        external_fraction: spectra[point].external[branch.branch],
        acoustic_overlap: acoustic_overlap(workup.crystal.masses_u(), &branch.vector),
        participation: participation(&branch.vector),
        truncation_changes: truncation_changes(truncated, &q, branch.branch)?,
        exclusion_limit_per_cm: Some(evidence.exclusion_limit(branch)),
        reason,
    })
}

/// A cluster of the raw constants that projection removed.
fn vanished(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    cluster: &Cluster,
) -> Result<SoftMode, ExamineError> {
    let raw = |p: usize| spectra[p].raw.first().copied().unwrap_or(f64::INFINITY);
    let point = cluster
        .iter()
        .copied()
        .min_by(|a, b| raw(*a).total_cmp(&raw(*b)))
        .unwrap_or(0);
    let q = workup.mesh.points()[point].q;
    let modes = workup
        .raw_dynamics
        .modes(&q)
        .map_err(eigen_error("raw soft modes"))?;
    let vector = modes.vector(0);
    Ok(SoftMode {
        tag: Tag::Numerical,
        strength: Strength::Strong,
        lowest_wavenumber_per_cm: lowest_wavenumber(&spectra[point].eigenvalues),
        raw_wavenumber_per_cm: wavenumber_per_cm(raw(point)),
        q: q.into(),
        point_count: point_count(&workup.mesh, cluster),
        commensurate: cluster.iter().any(|p| workup.mesh.points()[*p].commensurate),
        z: None,
        alias_share: None,
        external_fraction: workup.molecules.external_fraction(&workup.crystal, &q, vector),
        acoustic_overlap: acoustic_overlap(workup.crystal.masses_u(), vector),
        participation: participation(vector),
        truncation_changes: Vec::new(),
        exclusion_limit_per_cm: None,
        reason: "soft in the raw constants only: it vanishes when the sum rules and the space group are enforced"
            .to_owned(),
    })
}

/// Participation number Σ|e_i|²)² / Σ|e_i|⁴ over the number of atoms: 1 where all atoms move alike.
fn participation(vector: &[c64]) -> f64 {
    let shares: Vec<f64> = vector
        .chunks(3)
        .map(|e| e.iter().map(c64::norm_sqr).sum())
        .collect();
    let sum: f64 = shares.iter().sum();
    let squares: f64 = shares.iter().map(|x| x * x).sum();
    sum * sum / (squares * shares.len() as f64)
}

fn point_count(mesh: &QMesh, cluster: &Cluster) -> u32 {
    cluster
        .iter()
        .map(|p| mesh.points()[*p].multiplicity.max(1))
        .sum()
}

/// The constants with those below each of the policy's fractions of the largest dropped, sums restored.
pub(crate) fn truncated_dynamics(workup: &Workup<'_>) -> Vec<(f64, Dynamics)> {
    let largest = workup
        .projected
        .blocks()
        .iter()
        .map(nalgebra::Matrix3::amax)
        .fold(0.0, f64::max);
    let truncate = |fraction: f64| {
        let least = fraction * largest;
        let kept = map_blocks(&workup.projected, |_, block| {
            block.map(|x| if x.abs() < least { 0.0 } else { x })
        });
        let restored = tarehouse_physics::projection::projected(&kept, &workup.group);
        workup.dynamics_of(&restored)
    };
    workup
        .limits
        .reach
        .truncation_fractions
        .iter()
        .map(|f| (*f, truncate(*f)))
        .collect()
}

fn truncation_changes(
    truncated: &[(f64, Dynamics)],
    q: &nalgebra::Vector3<f64>,
    branch: usize,
) -> Result<Vec<TruncationChange>, ExamineError> {
    truncated
        .iter()
        .map(|(fraction, dynamics)| {
            let values = dynamics
                .eigenvalues(q)
                .map_err(eigen_error("truncated constants"))?;
            let value = values.get(branch).copied().unwrap_or_default();
            Ok(TruncationChange {
                fraction: *fraction,
                wavenumber_per_cm: wavenumber_per_cm(value),
            })
        })
        .collect()
}

/// For each inequivalent point the points that some copy of it touches on the full mesh.
fn neighbours(mesh: &QMesh) -> Vec<Vec<usize>> {
    let mut lists = vec![Vec::new(); mesh.points().len()];
    let n = mesh.divisions().map(i64::from);
    let place = |m: [i64; 3]| {
        let [x, y, z] = std::array::from_fn(|axis| m[axis].rem_euclid(n[axis]));
        usize::try_from((x * n[1] + y) * n[2] + z).unwrap_or_default()
    };
    let mut join = |a: usize, b: usize| {
        if a != b && !lists[a].contains(&b) {
            lists[a].push(b);
            lists[b].push(a);
        }
    };
    let steps: Vec<[i64; 3]> = (0..27_i64)
        .map(|k| [k / 9 - 1, k / 3 % 3 - 1, k % 3 - 1])
        .collect();
    for full in 0..mesh.point_count() {
        let m = mesh.triple(full);
        for step in &steps {
            let other = place(std::array::from_fn(|axis| m[axis] + step[axis]));
            join(mesh.representative(full), mesh.representative(other));
        }
    }
    // Commensurate points beside the mesh touch the corners of the mesh cell they lie in.
    for (point, known) in mesh
        .points()
        .iter()
        .enumerate()
        .filter(|(_, p)| p.multiplicity == 0)
    {
        for corner in 0..8_i64 {
            let m = std::array::from_fn(|axis| {
                let scaled = (known.q[axis] * n[axis] as f64).floor();
                #[allow(clippy::cast_possible_truncation, reason = "a mesh index is small")]
                let floor = scaled as i64;
                floor + (corner >> axis & 1)
            });
            join(point, mesh.representative(place(m)));
        }
    }
    lists
}

fn clusters(
    neighbours: &[Vec<usize>],
    count: usize,
    is_soft: impl Fn(usize) -> bool,
) -> Vec<Cluster> {
    let mut seen = vec![false; count];
    let mut found = Vec::new();
    for start in 0..count {
        if seen[start] || !is_soft(start) {
            continue;
        }
        seen[start] = true;
        let mut cluster = vec![start];
        let mut next = 0;
        while next < cluster.len() {
            for &other in &neighbours[cluster[next]] {
                if !seen[other] && is_soft(other) {
                    seen[other] = true;
                    cluster.push(other);
                }
            }
            next += 1;
        }
        cluster.sort_unstable();
        found.push(cluster);
    }
    found
}
