//! Builds anew when the embedded demo packages change.

fn main() {
    println!("cargo::rerun-if-changed=../demo-data/packages");
}
