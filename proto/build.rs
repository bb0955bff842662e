//! Compiles the contract without an outside compiler, and writes its description with comments beside the code.

use std::path::PathBuf;

use prost::Message as _;

const FILES: [&str; 7] = [
    "tarehouse/v1/report.proto",
    "tarehouse/v1/series.proto",
    "tarehouse/v1/submission.proto",
    "tarehouse/v1/submission_service.proto",
    "tarehouse/v1/transfer_service.proto",
    "tarehouse/v1/catalog_service.proto",
    "tarehouse/v1/server_service.proto",
];

fn main() -> Result<(), Box<dyn std::error::Error>> {
    for file in FILES {
        println!("cargo::rerun-if-changed={file}");
    }
    let mut compiler = protox::Compiler::new(["."])?;
    compiler
        .include_imports(true)
        .include_source_info(true)
        .open_files(FILES)?;
    let description = compiler.file_descriptor_set();
    let out = PathBuf::from(std::env::var("OUT_DIR")?).join("tarehouse_v1_descriptor.bin");
    std::fs::write(out, description.encode_to_vec())?;
    let mut config = tonic_prost_build::Config::new();
    config.enable_type_names();
    tonic_prost_build::configure()
        .build_client(true)
        .build_server(true)
        .bytes(".tarehouse.v1.Chunk.data")
        .bytes(".tarehouse.v1.CreateSubmissionRequest.manifest")
        .compile_fds_with_config(description, config)?;
    Ok(())
}
