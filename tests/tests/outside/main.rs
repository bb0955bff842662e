//! Checks against the outside: constants of nature, tables of other people, closed forms of
//! textbooks, measurements.
//!
//! Every value compared with stands in a file of `tests/reference/` whose head names its source, or
//! beside its source in the test. Where a file carries a mark, only verified rows are asserted
//! tightly.

#[cfg(test)]
mod debye;
#[cfg(test)]
mod gas_molecules;
#[cfg(test)]
mod identities;
#[cfg(test)]
mod identities_of_reports;
#[cfg(test)]
mod large;
#[cfg(test)]
mod lattices;
#[cfg(test)]
mod limits;
#[cfg(test)]
mod metals;
#[cfg(test)]
mod oscillator;
#[cfg(test)]
mod polar;
#[cfg(test)]
mod projections;
#[cfg(test)]
mod real_packages;
#[cfg(test)]
mod reference;
#[cfg(test)]
mod service;
#[cfg(test)]
mod service_closed_forms;
#[cfg(test)]
mod service_eigen;
#[cfg(test)]
mod service_gamma;
#[cfg(test)]
mod service_metals;
#[cfg(test)]
mod service_moments;
#[cfg(test)]
mod service_supercells;
#[cfg(test)]
mod tight_binding;
#[cfg(test)]
mod tight_binding_verdicts;
#[cfg(test)]
mod units;
#[cfg(test)]
mod weights;
