//! Convergence series: examinations of one form that differ in one setting, and whether what they say still moves.
//!
//! A series is never called converged because its last value looks right. A quantity has stopped only where at least
//! three members show it, the last two changes lie within the combined brackets of the members they join, the last change
//! is not the larger one, and the brackets are narrow enough to see a change that matters. Everything else is still
//! moving or cannot be told. Where more than one setting differs no conclusion is drawn.

mod settings;

pub use settings::{Differing, Setup};

use crate::report::{FreeEnergy, LowestBranch};

/// Members that a conclusion needs.
pub const MEMBERS_MIN: usize = 3;

/// Wave vectors closer than this, modulo reciprocal vectors and sign, are the same.
const SAME_Q: f64 = 1e-6;

/// Temperatures closer than this are the same, K.
const SAME_TEMPERATURE_K: f64 = 1e-6;

/// One member of a series.
#[derive(Debug, Clone, PartialEq)]
pub struct Member {
    /// How it is named.
    pub name: String,
    /// How its constants were made.
    pub setup: Setup,
    /// Free energies of its report.
    pub free_energy: Vec<FreeEnergy>,
    /// Lowest branches of its report.
    pub lowest_branches: Vec<LowestBranch>,
}

/// What must be visible before a change may be called absent.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Resolution {
    /// Temperature of the free energies, K.
    pub temperature_k: f64,
    /// Combined brackets wider than this to either side hide a change, kJ/mol.
    pub free_energy_kj_per_mol: f64,
    /// The same for a wavenumber, cm⁻¹.
    pub wavenumber_per_cm: f64,
    /// Changes below this are equal, kJ/mol: the floor of a bracket.
    pub free_energy_floor_kj_per_mol: f64,
    /// The same for a wavenumber, cm⁻¹.
    pub wavenumber_floor_per_cm: f64,
}

impl Resolution {
    /// From the policy.
    pub fn of(limits: &crate::policy::Limits) -> Self {
        Self {
            temperature_k: limits.bracket.judged_temperature_k,
            free_energy_kj_per_mol: limits.comparison.series_resolution_kj_per_mol,
            wavenumber_per_cm: limits.comparison.series_resolution_per_cm,
            free_energy_floor_kj_per_mol: limits.bracket.floor_kj_per_mol,
            wavenumber_floor_per_cm: limits.comparison.series_floor_per_cm,
        }
    }
}

/// What follows for a quantity or a whole series.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Conclusion {
    /// The last two changes are within the brackets, and the last is not the larger one.
    Stopped,
    /// The members do not tell.
    CannotBeTold,
    /// The last change is larger than the brackets.
    StillMoving,
}

/// A value with its bracket.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Value {
    /// The value.
    pub central: f64,
    /// Lower end.
    pub lower: f64,
    /// Upper end.
    pub upper: f64,
}

/// The change from one member to the next.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Change {
    /// Later value less earlier one.
    pub change: f64,
    /// Half width of both brackets together, on the sides that face each other; independent brackets add in squares.
    pub combined: f64,
}

/// What a quantity is.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum QuantityKind {
    /// Vibrational free energy, kJ/mol per formula unit, at a temperature in K.
    FreeEnergy(f64),
    /// Half width of its bracket, kJ/mol per formula unit: shown, never judged.
    BracketHalfWidth(f64),
    /// Lowest non-acoustic wavenumber at a commensurate point, cm⁻¹.
    LowestBranch([f64; 3]),
}

/// One quantity along the series.
#[derive(Debug, Clone, PartialEq)]
pub struct Quantity {
    /// Which.
    pub kind: QuantityKind,
    /// By member, in the order of the series; `None` where a member has none.
    pub values: Vec<Option<Value>>,
    /// From each member to the next; `None` where either has none.
    pub changes: Vec<Option<Change>>,
    /// What follows; `None` where the quantity is not judged.
    pub conclusion: Option<Conclusion>,
    /// Why.
    pub reason: String,
}

/// A series, ordered and judged.
#[derive(Debug, Clone, PartialEq)]
pub struct Series {
    /// Places of the members among those given, loosest first where one setting differs and has an order.
    pub order: Vec<usize>,
    /// Every setting that differs, with its value by member in the order of the series.
    pub differing: Vec<Differing>,
    /// The quantities.
    pub quantities: Vec<Quantity>,
    /// The worst of all quantities that are judged.
    pub conclusion: Conclusion,
    /// Why.
    pub reason: String,
}

/// Orders and judges the members of one form.
pub fn judge(members: &[Member], resolution: &Resolution) -> Series {
    let setups: Vec<&Setup> = members.iter().map(|member| &member.setup).collect();
    let mut differing = settings::differing(&setups);
    let (order, obstacle) = settings::order(&setups, &differing);
    for setting in &mut differing {
        setting.values = order.iter().map(|k| setting.values[*k].clone()).collect();
    }
    let ordered: Vec<&Member> = order.iter().map(|k| &members[*k]).collect();
    let mut quantities = free_energies(&ordered, resolution);
    quantities.extend(branches(&ordered, resolution));
    if let Some(obstacle) = obstacle {
        for quantity in quantities.iter_mut().filter(|q| q.conclusion.is_some()) {
            quantity.conclusion = Some(Conclusion::CannotBeTold);
            quantity.reason.clone_from(&obstacle);
        }
    }
    let worst = quantities
        .iter()
        .filter_map(|quantity| Some((quantity.conclusion?, &quantity.reason)))
        .reduce(|worst, next| if next.0 > worst.0 { next } else { worst });
    let (conclusion, reason) = worst.map_or_else(
        || {
            (
                Conclusion::CannotBeTold,
                "There is nothing to compare.".to_owned(),
            )
        },
        |(conclusion, reason)| (conclusion, reason.clone()),
    );
    Series {
        order,
        differing,
        quantities,
        conclusion,
        reason,
    }
}

/// Settings that differ besides cell and positions, values in the order given.
pub fn differing_besides_geometry(setups: &[Setup]) -> Vec<Differing> {
    let setups: Vec<&Setup> = setups.iter().collect();
    let mut differing = settings::differing(&setups);
    differing.retain(|setting| setting.setting != settings::GEOMETRY);
    differing
}

fn free_energies(members: &[&Member], resolution: &Resolution) -> Vec<Quantity> {
    let temperature_k = resolution.temperature_k;
    let values: Vec<Option<Value>> = members
        .iter()
        .map(|member| {
            let found = member.free_energy.iter().find(|point| {
                (point.temperature_k - temperature_k).abs() < SAME_TEMPERATURE_K && point.defined
            })?;
            Some(Value {
                central: found.central_kj_per_mol,
                lower: found.lower_kj_per_mol,
                upper: found.upper_kj_per_mol,
            })
        })
        .collect();
    let widths: Vec<Option<Value>> = values
        .iter()
        .map(|value| {
            value.map(|v| {
                let half = 0.5 * (v.upper - v.lower);
                Value {
                    central: half,
                    lower: half,
                    upper: half,
                }
            })
        })
        .collect();
    let scale = Scale {
        resolution: resolution.free_energy_kj_per_mol,
        floor: resolution.free_energy_floor_kj_per_mol,
        unit: "kJ/mol",
        what: format!("F({temperature_k} K)"),
    };
    let changes = changes(&widths);
    vec![
        scale.quantity(QuantityKind::FreeEnergy(temperature_k), values),
        Quantity {
            kind: QuantityKind::BracketHalfWidth(temperature_k),
            values: widths,
            changes,
            conclusion: None,
            reason: String::new(),
        },
    ]
}

/// One quantity for each point that all members share: Γ, and whatever their supercells have in common.
fn branches(members: &[&Member], resolution: &Resolution) -> Vec<Quantity> {
    let Some(first) = members.first() else {
        return Vec::new();
    };
    let shared = first
        .lowest_branches
        .iter()
        .filter(|branch| members.iter().all(|member| at(member, &branch.q).is_some()));
    shared
        .map(|branch| {
            let values = members.iter().map(|member| at(member, &branch.q)).collect();
            let scale = Scale {
                resolution: resolution.wavenumber_per_cm,
                floor: resolution.wavenumber_floor_per_cm,
                unit: "cm⁻¹",
                what: format!(
                    "the lowest branch at ({})",
                    branch.q.map(|x| x.to_string()).join(", ")
                ),
            };
            scale.quantity(QuantityKind::LowestBranch(branch.q), values)
        })
        .collect()
}

fn at(member: &Member, q: &[f64; 3]) -> Option<Value> {
    let same = |branch: &&LowestBranch| {
        [1.0, -1.0].iter().any(|sign| {
            branch.q.iter().zip(q).all(|(a, b)| {
                let difference = a - sign * b;
                (difference - difference.round()).abs() < SAME_Q
            })
        })
    };
    member
        .lowest_branches
        .iter()
        .find(same)
        .map(|branch| Value {
            central: branch.wavenumber_per_cm,
            lower: branch.lower_per_cm,
            upper: branch.upper_per_cm,
        })
}

fn changes(values: &[Option<Value>]) -> Vec<Option<Change>> {
    values
        .windows(2)
        .map(|pair| match pair {
            [Some(before), Some(after)] => Some(Change::between(before, after)),
            _ => None,
        })
        .collect()
}

impl Change {
    fn between(before: &Value, after: &Value) -> Self {
        let change = after.central - before.central;
        let (first, second) = if change >= 0.0 {
            (before.upper - before.central, after.central - after.lower)
        } else {
            (before.central - before.lower, after.upper - after.central)
        };
        Self {
            change,
            combined: first.hypot(second),
        }
    }
}

/// How one kind of quantity is judged.
struct Scale {
    resolution: f64,
    floor: f64,
    unit: &'static str,
    what: String,
}

impl Scale {
    fn quantity(&self, kind: QuantityKind, values: Vec<Option<Value>>) -> Quantity {
        let changes = changes(&values);
        let (conclusion, reason) = self.conclude(values.len(), &changes);
        Quantity {
            kind,
            values,
            changes,
            conclusion: Some(conclusion),
            reason,
        }
    }

    fn conclude(&self, members: usize, changes: &[Option<Change>]) -> (Conclusion, String) {
        let (what, unit) = (&self.what, self.unit);
        let unknown = |why: String| (Conclusion::CannotBeTold, why);
        let Some(Some(last)) = changes.last() else {
            return unknown(format!(
                "{what} is missing from one of the last two members."
            ));
        };
        let size = last.change.abs();
        if size > last.combined {
            let why = format!(
                "{what} still moves: {:+.3} {unit} at the last step, where the brackets explain {:.3}.",
                last.change, last.combined
            );
            return (Conclusion::StillMoving, why);
        }
        if members < MEMBERS_MIN {
            return unknown(format!(
                "{MEMBERS_MIN} members are needed; there are {members}."
            ));
        }
        let Some(Some(before)) = changes.len().checked_sub(2).and_then(|k| changes.get(k)) else {
            return unknown(format!(
                "{what} is missing from one of the last three members."
            ));
        };
        if before.change.abs() > before.combined {
            return unknown(format!(
                "Only the last change of {what} is within the brackets; the one before is {:+.3} {unit}. One more \
                 member would tell.",
                before.change
            ));
        }
        let widest = last.combined.max(before.combined);
        if widest > self.resolution {
            return unknown(format!(
                "The brackets of {what} ({widest:.3} {unit} together) would hide a change that matters, {} {unit}.",
                self.resolution
            ));
        }
        if size > before.change.abs().max(self.floor) {
            return unknown(format!(
                "The changes of {what} are within the brackets but grow: {:+.3}, then {:+.3} {unit}.",
                before.change, last.change
            ));
        }
        let why = format!(
            "The last two changes of {what} are {:+.3} and {:+.3} {unit}, within the brackets and not growing.",
            before.change, last.change
        );
        (Conclusion::Stopped, why)
    }
}

#[cfg(test)]
mod tests;
