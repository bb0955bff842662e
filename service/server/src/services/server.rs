//! ServerService: what the server says about itself.

use std::sync::Arc;

use tarehouse_proto::convert::{digest_to_hex, likely_cause_names, rule_names};
use tarehouse_proto::v1;
use tonic::{Request, Response, Status};

use crate::core::Core;
use crate::limits;

/// ServerService on the shared parts.
#[derive(Debug)]
pub(crate) struct Service {
    info: v1::GetServerInfoResponse,
}

impl Service {
    /// Puts the answer together once.
    pub(crate) fn new(core: &Arc<Core>) -> Self {
        let policy = &core.config.policy;
        Self {
            info: v1::GetServerInfoResponse {
                version: tarehouse_assay::PROGRAM_VERSION.to_owned(),
                limits: Some(limits::on_the_wire(core.config.upload_streams_max)),
                policy_text: policy.text.clone(),
                policy_digest: digest_to_hex(&policy.digest),
                rules: rule_names(),
                likely_causes: likely_cause_names(),
            },
        }
    }
}

#[tonic::async_trait]
impl v1::server_service_server::ServerService for Service {
    async fn get_server_info(
        &self,
        _request: Request<v1::GetServerInfoRequest>,
    ) -> Result<Response<v1::GetServerInfoResponse>, Status> {
        Ok(Response::new(self.info.clone()))
    }
}
