//! Writes the packages of the scenario: `make-demo [FOLDER]`, by default below `demo-data/packages`.

use std::io::Write;
use std::path::PathBuf;

use tarehouse_demo_data::scenario;

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let folder = std::env::args_os()
        .nth(1)
        .map_or_else(|| PathBuf::from("demo-data/packages"), PathBuf::from);
    let mut out = std::io::stdout().lock();
    for entry in scenario::entries() {
        let (_, package) = entry.build()?;
        package.write_below(&folder)?;
        let bytes: usize = package.files().iter().map(|(_, bytes)| bytes.len()).sum();
        let digest = blake3::Hash::from(package.digest());
        writeln!(out, "{:24} {bytes:8} bytes  {digest}", package.name)?;
    }
    Ok(())
}
