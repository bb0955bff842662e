//! The modes of every inequivalent point of the mesh, and what noise and aliasing say about them.
//!
//! Points are computed side by side and collected in the order of the mesh; nothing depends on the number of threads.

use std::sync::atomic::{AtomicUsize, Ordering};

use nalgebra::Vector3;
use rayon::prelude::*;
use tarehouse_physics::c64;
use tarehouse_physics::dynamics::{Dynamics, MatrixForm, Modes, Sharing};

use crate::effective::effective_eigenvalue;
use crate::workup::{Workup, eigen_error};
use crate::{ExamineError, Progress};

/// The point Γ is first on every mesh.
pub(crate) const GAMMA: usize = 0;

/// The modes of one inequivalent point. Eigenvalues in eV/Å²/u; at Γ without the rigid translations.
pub(crate) struct PointSpectrum {
    /// Of the projected constants, ascending.
    pub(crate) eigenvalues: Vec<f64>,
    /// Share of rigid-molecule motion, by branch.
    pub(crate) external: Vec<f64>,
    /// Of the raw constants, ascending.
    pub(crate) raw: Vec<f64>,
    /// Branches below the soft limit, ascending.
    pub(crate) soft: Vec<UncertainBranch>,
    /// With soft and uncertain ones replaced by what they contribute with.
    pub(crate) effective: Vec<f64>,
    /// The same for each noise draw around the null.
    pub(crate) drawn: Vec<Vec<f64>>,
    /// The same for the other sharing of the images.
    pub(crate) other_sharing: Vec<f64>,
}

/// A mode that is soft, or not farther from zero than its own uncertainty.
pub(crate) struct UncertainBranch {
    pub(crate) branch: usize,
    pub(crate) vector: Vec<c64>,
    /// First-order standard deviation of λ under projected noise.
    pub(crate) sigma: f64,
    /// Standard deviation used: the larger of the first-order one and the spread of the null draws.
    pub(crate) spread: f64,
    /// Mean of λ under the null.
    pub(crate) null_mean: f64,
    /// |e†(D_nearest − D_other)e|: zero at commensurate wave vectors.
    pub(crate) alias: f64,
}

impl UncertainBranch {
    /// Scale in which λ is uncertain: noise and aliasing together.
    fn uncertainty(&self) -> f64 {
        self.spread.hypot(self.alias)
    }

    /// Mean and spread of the branch under the null draws.
    fn refine(&mut self, shifted: &[Vec<f64>]) {
        let values: Vec<f64> = shifted
            .iter()
            .filter_map(|v| v.get(self.branch).copied())
            .collect();
        let (mean, deviation) = mean_and_deviation(&values);
        self.null_mean = mean;
        self.spread = self.sigma.max(deviation);
    }
}

/// Spectra of all inequivalent points, in the order of the mesh.
pub(crate) fn spectra(
    workup: &Workup<'_>,
    progress: &dyn Progress,
) -> Result<Vec<PointSpectrum>, ExamineError> {
    let draws = workup.draw_dynamics();
    let total = workup.mesh.points().len();
    let done = AtomicUsize::new(0);
    progress.advance("modes", 0, total);
    (0..total)
        .into_par_iter()
        .map(|point| {
            let spectrum = PointForms::new(workup, &draws, point)?.spectrum()?;
            let finished = done.fetch_add(1, Ordering::Relaxed) + 1;
            progress.advance("modes", finished, total);
            Ok(spectrum)
        })
        .collect()
}

/// The matrices of one point.
struct PointForms<'a> {
    workup: &'a Workup<'a>,
    point: usize,
    q: Vector3<f64>,
    form: MatrixForm,
    noise: Vec<MatrixForm>,
    other: MatrixForm,
    modes: Modes,
    /// Size of rounding errors in the eigenvalues.
    rounding: f64,
}

impl<'a> PointForms<'a> {
    fn new(workup: &'a Workup<'a>, draws: &[Dynamics], point: usize) -> Result<Self, ExamineError> {
        let q = workup.mesh.points()[point].q;
        let form = workup.dynamics.form(&q, Sharing::Nearest);
        let modes = if point == GAMMA {
            workup.acoustic.optical_modes()
        } else {
            workup
                .dynamics
                .modes_of(&form)
                .map_err(eigen_error("modes"))?
        };
        let largest = modes
            .eigenvalues
            .iter()
            .fold(0.0_f64, |m, x| m.max(x.abs()));
        let rounding =
            (largest * modes.eigenvalues.len() as f64 * f64::EPSILON).max(f64::MIN_POSITIVE);
        let noise = draws
            .iter()
            .map(|draw| draw.form(&q, Sharing::Nearest))
            .collect();
        let other = workup.dynamics.form(&q, Sharing::InversePower);
        Ok(Self {
            workup,
            point,
            q,
            form,
            noise,
            other,
            modes,
            rounding,
        })
    }

    fn spectrum(self) -> Result<PointSpectrum, ExamineError> {
        let external = (0..self.modes.eigenvalues.len())
            .map(|b| {
                let (crystal, vector) = (&self.workup.crystal, self.modes.vector(b));
                self.workup
                    .molecules
                    .external_fraction(crystal, &self.q, vector)
            })
            .collect();
        let raw = self.raw()?;
        let mut uncertain = self.uncertain_branches();
        let null = self.null(&uncertain);
        let shifted = self
            .noise
            .iter()
            .map(|draw| self.eigenvalues(&null.clone().plus(draw, 1.0)))
            .collect::<Result<Vec<_>, _>>()?;
        for branch in &mut uncertain {
            branch.refine(&shifted);
        }
        let effective = self.effective(&uncertain);
        // Draws may turn the lowest mode soft even where it is not soft itself.
        let scale = uncertain
            .iter()
            .map(UncertainBranch::uncertainty)
            .fold(self.evidence(0).uncertainty(), f64::max);
        let other_sharing = self.aliased(&self.eigenvalues(&self.other)?, scale);
        let drawn = shifted
            .into_iter()
            .map(|values| lifted(values, scale))
            .collect();
        let below = self.workup.soft_below();
        let eigenvalues = self.modes.eigenvalues;
        let soft = uncertain
            .into_iter()
            .filter(|b| eigenvalues[b.branch] < below)
            .collect();
        Ok(PointSpectrum {
            eigenvalues,
            external,
            raw,
            soft,
            effective,
            drawn,
            other_sharing,
        })
    }

    fn raw(&self) -> Result<Vec<f64>, ExamineError> {
        if self.point == GAMMA {
            return Ok(self.workup.raw_gamma.optical.clone());
        }
        self.workup
            .raw_dynamics
            .eigenvalues(&self.q)
            .map_err(eigen_error("raw modes"))
    }

    /// The lowest branches, as long as they are soft or no farther from zero than their uncertainty.
    fn uncertain_branches(&self) -> Vec<UncertainBranch> {
        let below = self.workup.soft_below();
        (0..self.modes.eigenvalues.len())
            .map(|branch| (self.modes.eigenvalues[branch], self.evidence(branch)))
            .take_while(|(value, branch)| *value < below || *value < branch.uncertainty())
            .map(|pair| pair.1)
            .collect()
    }

    fn evidence(&self, branch: usize) -> UncertainBranch {
        /// Differences of expectation values below this many rounding errors are none.
        const ROUNDING_MULTIPLE: f64 = 4.0;
        if branch >= self.modes.eigenvalues.len() {
            // A crystal of one atom has no optical modes at Γ.
            let (sigma, spread, alias) = (self.rounding, self.rounding, 0.0);
            return UncertainBranch {
                branch,
                vector: Vec::new(),
                sigma,
                spread,
                null_mean: 0.0,
                alias,
            };
        }
        let vector = self.modes.vector(branch);
        let inner = self.workup.dynamics.to_form_basis(vector);
        let squares: f64 = self
            .noise
            .iter()
            .map(|draw| draw.expectation(&inner).powi(2))
            .sum();
        let sigma = (squares / self.noise.len() as f64)
            .sqrt()
            .max(self.rounding);
        let alias = (self.form.expectation(&inner) - self.other.expectation(&inner)).abs();
        UncertainBranch {
            branch,
            vector: vector.to_vec(),
            sigma,
            spread: sigma,
            null_mean: 0.0,
            alias: if alias > ROUNDING_MULTIPLE * self.rounding {
                alias
            } else {
                0.0
            },
        }
    }

    /// The null: the same matrix with every uncertain eigenvalue lifted to what it contributes with.
    fn null(&self, uncertain: &[UncertainBranch]) -> MatrixForm {
        uncertain.iter().fold(self.form.clone(), |null, branch| {
            let value = self.modes.eigenvalues[branch.branch];
            let lift = effective_eigenvalue(value, branch.uncertainty()) - value;
            null.plus_outer(&self.workup.dynamics.to_form_basis(&branch.vector), lift)
        })
    }

    /// Eigenvalues of a matrix of this point; at Γ without the rigid translations, which are those nearest to zero in a
    /// matrix that is free of them by projection.
    fn eigenvalues(&self, form: &MatrixForm) -> Result<Vec<f64>, ExamineError> {
        let order = self.workup.dynamics.branch_count();
        let mut values = form
            .eigenvalues(order)
            .map_err(eigen_error("modes of the draws"))?;
        if self.point == GAMMA {
            for _ in 0..3 {
                let nearest =
                    (0..values.len()).min_by(|a, b| values[*a].abs().total_cmp(&values[*b].abs()));
                if let Some(index) = nearest {
                    values.remove(index);
                }
            }
        }
        Ok(values)
    }

    fn effective(&self, uncertain: &[UncertainBranch]) -> Vec<f64> {
        let values = &self.modes.eigenvalues;
        let mut effective: Vec<f64> = values.iter().map(|x| x.max(self.rounding)).collect();
        for branch in uncertain {
            let value = values[branch.branch];
            effective[branch.branch] = effective_eigenvalue(value, branch.uncertainty());
        }
        effective
    }

    /// Eigenvalues of the other sharing, whose distance from the mode itself is the scale of aliasing.
    fn aliased(&self, values: &[f64], scale: f64) -> Vec<f64> {
        let pairs = values.iter().zip(&self.modes.eigenvalues);
        pairs
            .map(|(x, own)| {
                let uncertainty = scale.hypot(x - own);
                if *x < scale {
                    effective_eigenvalue(*x, uncertainty)
                } else {
                    *x
                }
            })
            .collect()
    }
}

/// Eigenvalues with those below `scale` replaced by what they contribute with at this uncertainty.
fn lifted(values: Vec<f64>, scale: f64) -> Vec<f64> {
    values
        .into_iter()
        .map(|x| {
            if x < scale {
                effective_eigenvalue(x, scale)
            } else {
                x
            }
        })
        .collect()
}

/// Mean and standard deviation (n − 1) of a list; zeros for fewer than two values.
pub(crate) fn mean_and_deviation(values: &[f64]) -> (f64, f64) {
    if values.len() < 2 {
        return (values.first().copied().unwrap_or_default(), 0.0);
    }
    let count = values.len() as f64;
    let mean = values.iter().sum::<f64>() / count;
    let variance = values.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / (count - 1.0);
    (mean, variance.sqrt())
}
