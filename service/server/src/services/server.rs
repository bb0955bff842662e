//! ServerService: what the server says about itself.

use std::fmt::Write as _;
use std::sync::Arc;

use tarehouse_assay::report::{LikelyCause, Rule};
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
                policy_digest: hexadecimal(&policy.digest),
                rules: Rule::ALL
                    .iter()
                    .map(|rule| rule.name().to_owned())
                    .collect(),
                likely_causes: LikelyCause::ALL
                    .iter()
                    .map(|cause| cause.name().to_owned())
                    .collect(),
            },
        }
    }
}

fn hexadecimal(digest: &[u8]) -> String {
    digest
        .iter()
        .fold(String::with_capacity(2 * digest.len()), |mut text, byte| {
            // Writing into a string does not fail.
            let _ = write!(text, "{byte:02x}");
            text
        })
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
