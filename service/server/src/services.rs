//! The services of the contract. A handler decodes, asks, encodes; it holds no physics.

mod catalog;
mod series;
mod server;
mod submission;
pub(crate) mod transfer;

use std::sync::Arc;

use tarehouse_proto::v1::catalog_service_server::CatalogServiceServer;
use tarehouse_proto::v1::server_service_server::ServerServiceServer;
use tarehouse_proto::v1::submission_service_server::SubmissionServiceServer;
use tarehouse_proto::v1::transfer_service_server::TransferServiceServer;
use tonic::service::RoutesBuilder;

use crate::core::Core;
use crate::limits::{MESSAGE_BYTES_MAX, UPLOAD_MESSAGE_BYTES_MAX};

/// Names of the services, as health tells them.
pub(crate) const NAMES: [&str; 4] = [
    "tarehouse.v1.SubmissionService",
    "tarehouse.v1.TransferService",
    "tarehouse.v1.CatalogService",
    "tarehouse.v1.ServerService",
];

/// Adds all services.
pub(crate) fn add(routes: &mut RoutesBuilder, core: &Arc<Core>) {
    let submission = submission::Service {
        core: Arc::clone(core),
    };
    let transfer = transfer::Service {
        core: Arc::clone(core),
    };
    let catalog = catalog::Service {
        core: Arc::clone(core),
    };
    routes
        .add_service(
            SubmissionServiceServer::new(submission).max_decoding_message_size(MESSAGE_BYTES_MAX),
        )
        .add_service(
            TransferServiceServer::new(transfer)
                .max_decoding_message_size(UPLOAD_MESSAGE_BYTES_MAX),
        )
        .add_service(
            CatalogServiceServer::new(catalog).max_decoding_message_size(MESSAGE_BYTES_MAX),
        )
        .add_service(
            ServerServiceServer::new(server::Service::new(core))
                .max_decoding_message_size(MESSAGE_BYTES_MAX),
        );
}
