//! Judgement on a small share of the benchmark: every blunder is named, and sound uploads raise no alarm.
//!
//! The benchmark itself (`judgement`) prints rates over many seeds; here a few cases of each class must come out right
//! one by one. Truth comes from unfolded constants of invented crystals, not from the service.

#[cfg(test)]
mod cases;
#[cfg(test)]
mod polar;
