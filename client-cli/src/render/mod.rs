//! What people see: pure functions from messages to text. Nothing here reads, sends or decides.

pub mod failure;
pub mod lists;
pub mod numbers;
pub mod rank;
pub mod remedies;
pub mod report;
pub mod series;
pub mod soft_modes;
pub mod table;
pub mod text;
pub mod volumes;
pub mod words;

pub use text::View;
