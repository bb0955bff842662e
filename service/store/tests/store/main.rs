//! Tests of the store as its users see it, on a real and on a simulated disk.

mod damage;
mod faults;
mod lifecycle;
mod lists;
mod model;
mod power;
mod sim_disk;
mod support;
