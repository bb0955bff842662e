//! Writes the large package into a new folder below the one given: `make-large FOLDER`.

use std::io::Write;
use std::path::PathBuf;

use tarehouse_tests::large_package;

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let folder = std::env::args_os()
        .nth(1)
        .map(PathBuf::from)
        .ok_or("make-large FOLDER")?;
    let package = large_package::large_package()?;
    package.write_below(&folder)?;
    let path = folder.join(&package.name);
    writeln!(std::io::stdout().lock(), "{}", path.display())?;
    Ok(())
}
