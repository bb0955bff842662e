//! The checks, one module per subject. Each looks at the workup and returns findings; none knows a threshold.

pub(crate) mod acoustic;
pub(crate) mod blunders;
pub(crate) mod claims;
pub(crate) mod long_range;
pub(crate) mod reach;
pub(crate) mod settings;
pub(crate) mod structure;
pub(crate) mod sums;

use crate::report::{Finding, LikelyCause, Rule, Severity};

impl Finding {
    /// A finding with nothing but its words.
    pub(crate) fn new(rule: Rule, severity: Severity, message: impl Into<String>) -> Self {
        Self {
            rule,
            severity,
            measured: None,
            limit: None,
            unit: String::new(),
            location: String::new(),
            likely_cause: LikelyCause::None,
            message: message.into(),
            remedy: String::new(),
        }
    }

    /// A finding of a measured value held against a caution and a fail limit; the limit shown is the one that was passed,
    /// or the next one that was not.
    pub(crate) fn graded(rule: Rule, measured: f64, unit: &str, limits: Limit) -> Self {
        let (severity, limit) = limits.judge(measured);
        Self {
            measured: Some(measured),
            limit: Some(limit),
            unit: unit.to_owned(),
            ..Self::new(rule, severity, String::new())
        }
    }

    pub(crate) fn measured(self, measured: f64, limit: Option<f64>, unit: &str) -> Self {
        Self {
            measured: Some(measured),
            limit,
            unit: unit.to_owned(),
            ..self
        }
    }

    pub(crate) fn at(self, location: impl Into<String>) -> Self {
        Self {
            location: location.into(),
            ..self
        }
    }

    pub(crate) fn saying(self, message: impl Into<String>) -> Self {
        Self {
            message: message.into(),
            ..self
        }
    }

    /// Likely cause and what to do next; kept only where something is wrong.
    pub(crate) fn because(self, cause: LikelyCause, remedy: impl Into<String>) -> Self {
        match self.severity {
            Severity::Pass => self,
            Severity::Caution | Severity::Fail => Self {
                likely_cause: cause,
                remedy: remedy.into(),
                ..self
            },
        }
    }
}

/// Limits above which a value is cautioned or fails.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Limit {
    pub(crate) caution: f64,
    /// Infinite where the rule never fails.
    pub(crate) fail: f64,
}

impl Limit {
    pub(crate) fn caution_only(caution: f64) -> Self {
        Self {
            caution,
            fail: f64::INFINITY,
        }
    }

    fn judge(self, measured: f64) -> (Severity, f64) {
        if measured > self.fail {
            (Severity::Fail, self.fail)
        } else if measured > self.caution {
            (Severity::Caution, self.caution)
        } else {
            (Severity::Pass, self.caution)
        }
    }
}
