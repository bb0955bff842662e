//! The services of the contract. A handler decodes, asks, encodes; it holds no physics.

mod server;

use std::sync::Arc;

use tarehouse_proto::v1::server_service_server::ServerServiceServer;

use crate::core::Core;
use crate::limits;

/// ServerService.
pub(crate) fn server(core: &Arc<Core>) -> ServerServiceServer<server::Service> {
    ServerServiceServer::new(server::Service::new(core))
        .max_decoding_message_size(limits::MESSAGE_BYTES_MAX)
}
