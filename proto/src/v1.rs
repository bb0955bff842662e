//! Generated messages, clients and servers of package `tarehouse.v1`. Written by the build script; never by hand.

/// The compiled `.proto` files with their comments, as an encoded `google.protobuf.FileDescriptorSet`: for reflection
/// and for proto JSON.
pub const FILE_DESCRIPTOR_SET: &[u8] =
    include_bytes!(concat!(env!("OUT_DIR"), "/tarehouse_v1_descriptor.bin"));

mod generated {
    #![allow(
        missing_docs,
        unreachable_pub,
        missing_debug_implementations,
        clippy::all,
        clippy::pedantic,
        clippy::restriction,
        rustdoc::all,
        reason = "generated code does not inherit the house's lints"
    )]
    include!(concat!(env!("OUT_DIR"), "/tarehouse.v1.rs"));
}

pub use generated::*;
