//! Tests of the demo library: the potential, the constants made from it, and the committed packages.

mod constants;
mod model;
mod noise;
mod packages;
mod stability;
