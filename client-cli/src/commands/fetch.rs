//! `tarehouse fetch`: a stored file, verified before it appears under its name.

use std::io::Write as _;
use std::path::{Path, PathBuf};

use tarehouse_proto::v1::fetch_array_response::Frame;
use tarehouse_proto::v1::{
    Chunk, FetchArrayHeader, FetchArrayRequest, GetRecordRequest, Treatment,
};
use tempfile::NamedTempFile;
use tonic::{Request, Status};

use super::{Context, ResumeNote, in_session};
use crate::arguments::FetchArgs;
use crate::connect::{Session, asking, resource_name};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::progress::{Bars, Handle};
use crate::render::numbers::bytes;
use crate::render::text::clean;
use crate::retry::{Pause, Retry};
use crate::waiting;
use crate::wire_json;

/// File of the force constants where a package has several files and none was named.
const USUAL_CONSTANTS: &str = "constants.npy";

/// Runs the command.
///
/// # Errors
/// Why nothing was written.
pub async fn run(args: FetchArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    if !args.force && std::fs::symlink_metadata(&args.out).is_ok() {
        return Err(Failure::Usage {
            what: format!("{} is there already", args.out.display()),
            next: "choose another name, or overwrite it with --force.".to_owned(),
        });
    }
    let target = context.existing_target(&args.connect)?;
    let note = ResumeNote::default();
    note.set("Nothing was written.");
    let name = resource_name("submissions", &args.id);
    let fetched = in_session(target, context, &note, async |session, context| {
        let array = match &args.array {
            Some(array) => array.clone(),
            None => constants_of(session, &name, &context.pause).await?,
        };
        let wanted = FetchArrayRequest {
            name: name.clone(),
            array,
            treatment: if args.projected {
                Treatment::Projected
            } else {
                Treatment::Contributed
            }
            .into(),
            offset_bytes: 0,
        };
        to_file(
            session,
            wanted,
            &args.out,
            args.force,
            &context.bars(),
            &context.pause,
        )
        .await
    })
    .await?;
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&fetched)?
    } else {
        format!(
            "{} of {name} ({}, BLAKE3 {}) is in {}.",
            clean(&fetched.array),
            bytes(fetched.size_bytes),
            fetched.digest,
            args.out.display()
        )
    };
    context.console.data(&text)?;
    Ok(Exit::Done)
}

/// Fetches one file to `out`, which appears only when every byte has been verified.
///
/// # Errors
/// The service's answer; [`Failure::Damaged`] where the bytes are not the announced ones.
pub async fn to_file(
    session: &Session,
    wanted: FetchArrayRequest,
    out: &Path,
    overwrite: bool,
    bars: &Bars,
    pause: &Pause,
) -> Result<FetchArrayHeader, Failure> {
    let bar = bars.bytes(&wanted.array, 0);
    let mut fetch = Fetch::new(wanted, out, bar.handle())?;
    fetch.run(session, pause).await?;
    fetch.finish(out, overwrite)
}

/// The name of the force constants of a submission or record.
async fn constants_of(session: &Session, name: &str, pause: &Pause) -> Result<String, Failure> {
    let submission = if name.starts_with("records/") {
        let request = GetRecordRequest {
            name: name.to_owned(),
        };
        session
            .catalog()
            .get_record(asking(request))
            .await
            .map_err(|status| Failure::service(format!("look at {name}"), status))?
            .into_inner()
            .record
            .ok_or_else(|| Failure::missing("the record"))?
            .submission
    } else {
        name.to_owned()
    };
    let arrays = waiting::get(session, &submission, pause).await?.arrays;
    let names: Vec<String> = arrays.into_iter().map(|array| array.name).collect();
    match names.as_slice() {
        [only] => Ok(only.clone()),
        several if several.iter().any(|name| name == USUAL_CONSTANTS) => {
            Ok(USUAL_CONSTANTS.to_owned())
        }
        _ => Err(Failure::Usage {
            what: format!("{name} has several files and none is called {USUAL_CONSTANTS}"),
            next: format!("choose one with --array: {}.", names.join(", ")),
        }),
    }
}

/// A file on its way.
struct Fetch {
    wanted: FetchArrayRequest,
    file: NamedTempFile,
    path: PathBuf,
    hasher: blake3::Hasher,
    header: Option<FetchArrayHeader>,
    bar: Handle,
}

impl Fetch {
    /// Opens a temporary file beside the one to write, so that renaming is one step.
    fn new(wanted: FetchArrayRequest, out: &Path, bar: Handle) -> Result<Self, Failure> {
        let folder = match out.parent() {
            Some(parent) if !parent.as_os_str().is_empty() => parent,
            _ => Path::new("."),
        };
        let mut builder = tempfile::Builder::new();
        builder.prefix(".tarehouse-");
        #[cfg(unix)]
        builder.permissions(std::os::unix::fs::PermissionsExt::from_mode(0o666));
        let file = builder
            .tempfile_in(folder)
            .map_err(|error| Failure::file("write in", folder, error))?;
        Ok(Self {
            wanted,
            file,
            path: out.to_owned(),
            hasher: blake3::Hasher::new(),
            header: None,
            bar,
        })
    }

    /// Bytes that have arrived.
    fn arrived(&self) -> u64 {
        self.hasher.count()
    }

    /// Fetches to the end; goes on after a cut.
    async fn run(&mut self, session: &Session, pause: &Pause) -> Result<(), Failure> {
        let mut retry = Retry::new(pause.clone());
        loop {
            let before = self.arrived();
            let status = match self.stream(session).await? {
                Ok(()) => return Ok(()),
                Err(status) => status,
            };
            if self.arrived() > before {
                retry.progressed();
            }
            retry.wait_after(status).await.map_err(|status| {
                let what = format!("fetch {} of {}", self.wanted.array, self.wanted.name);
                Failure::service(what, status)
            })?;
        }
    }

    /// One stream: the outer error is final, the inner one the service's.
    async fn stream(&mut self, session: &Session) -> Result<Result<(), Status>, Failure> {
        let mut request = self.wanted.clone();
        request.offset_bytes = self.arrived();
        let mut stream = match session.transfers().fetch_array(Request::new(request)).await {
            Ok(stream) => stream.into_inner(),
            Err(status) => return Ok(Err(status)),
        };
        loop {
            let message = match stream.message().await {
                Ok(message) => message,
                Err(status) => return Ok(Err(status)),
            };
            match message.map(|message| message.frame) {
                Some(Some(Frame::Header(header))) => self.take_header(header)?,
                Some(Some(Frame::Chunk(chunk))) => self.take_chunk(&chunk)?,
                Some(None) => {}
                None if self.is_complete() => return Ok(Ok(())),
                None => {
                    return Ok(Err(Status::unavailable(
                        "the stream ended before the file did",
                    )));
                }
            }
        }
    }

    fn is_complete(&self) -> bool {
        self.header
            .as_ref()
            .is_some_and(|header| header.size_bytes == self.arrived())
    }

    fn take_header(&mut self, header: FetchArrayHeader) -> Result<(), Failure> {
        if header.offset_bytes != self.arrived() {
            return Err(self.damaged("it starts at another place than asked for"));
        }
        if let Some(known) = &self.header
            && (known.size_bytes, &known.digest) != (header.size_bytes, &header.digest)
        {
            return Err(self.damaged("the file changed on the way"));
        }
        self.header = Some(header);
        Ok(())
    }

    fn take_chunk(&mut self, chunk: &Chunk) -> Result<(), Failure> {
        if chunk.offset_bytes != self.arrived() {
            return Err(self.damaged("a piece is missing"));
        }
        if crc32fast::hash(&chunk.data) != chunk.crc32 {
            return Err(self.damaged("the check sum of a piece is wrong"));
        }
        let announced = self.header.as_ref().map_or(0, |header| header.size_bytes);
        if self.arrived() + chunk.data.len() as u64 > announced {
            return Err(self.damaged("it is longer than announced"));
        }
        self.file
            .write_all(&chunk.data)
            .map_err(|error| Failure::file("write", &self.path, error))?;
        self.hasher.update(&chunk.data);
        self.bar.set_of(self.arrived(), announced);
        Ok(())
    }

    fn damaged(&self, detail: &str) -> Failure {
        Failure::Damaged {
            what: format!("{} of {}", self.wanted.array, self.wanted.name),
            detail: detail.to_owned(),
        }
    }

    /// Compares the digest, makes the bytes durable, and gives the file its name.
    fn finish(self, out: &Path, force: bool) -> Result<FetchArrayHeader, Failure> {
        let digest = self.hasher.finalize().to_hex().to_string();
        let Some(header) = self.header.clone().filter(|header| header.digest == digest) else {
            return Err(self.damaged("its digest is not the announced one"));
        };
        let failed = |error| Failure::file("write", out, error);
        self.file.as_file().sync_all().map_err(failed)?;
        let placed = if force {
            self.file.persist(out)
        } else {
            self.file.persist_noclobber(out)
        };
        placed.map_err(|error| failed(error.error))?;
        Ok(header)
    }
}
