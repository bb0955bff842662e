//! Malformed packages and messages over the wire: each is told once and clearly what is wrong, the service stays up,
//! and nothing of them remains.

use tarehouse_client::arguments::{Command, SubmitArgs};
use tarehouse_client::exit::Exit;
use tarehouse_proto::v1;
use tokio::io::{AsyncReadExt as _, AsyncWriteExt as _};
use tokio::net::TcpStream;
use tonic::{Code, Status};

use crate::bare::{Bare, Pack, chunk, finish, opening, refused};
use crate::contents;
use crate::house::{House, as_json, demo_package, tarehouse, unfinished};

const GOOD: &str = "pelquonol-beta";

#[tokio::test(flavor = "multi_thread")]
async fn nothing_malformed_harms_the_service_or_stays_in_it() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("store");
    let house = House::open(&store).await;
    let bare = Bare::to(&house.url).await;

    noise_on_the_port(&house.url).await;
    manifests(&bare).await;
    declarations(&bare).await;
    questions(&bare).await;
    assert_eq!(
        bare.listed().await,
        [],
        "a refused package leaves no submission"
    );
    let spoilt = contents::arrays(&bare).await;
    uploads(&bare).await;
    let drafts = bare.listed().await;
    assert!(drafts.iter().all(|(_, state)| *state == v1::State::Draft));
    assert_eq!(drafts.len(), spoilt + 1, "what was created and not sealed");
    for (name, _) in &drafts {
        bare.withdraw(name).await;
    }
    assert_eq!(unfinished(&store), Vec::<std::path::PathBuf>::new());

    let ended = tarehouse(Command::Submit(SubmitArgs {
        packages: vec![demo_package(GOOD)],
        no_wait: false,
        timeout: Some(60),
        connect: house.connect(),
        format: as_json(),
    }))
    .await;
    assert_eq!(ended.exit, Exit::Done, "{}{}", ended.out, ended.err);
    let accepted = ended.json()["submission"]["name"].clone();
    drop(bare);
    house.close().await;

    let house = House::open(&store).await;
    let left: Vec<(String, v1::State)> = Bare::to(&house.url).await.listed().await;
    let alive: Vec<&str> = left
        .iter()
        .filter(|(_, state)| *state != v1::State::Withdrawn)
        .map(|(name, _)| name.as_str())
        .collect();
    assert_eq!(alive, [accepted.as_str().unwrap()]);
    assert_eq!(left.len(), drafts.len() + 1, "no ghost after a restart");
    assert_eq!(unfinished(&store), Vec::<std::path::PathBuf>::new());
    house.close().await;
}

/// Bytes that are no HTTP/2 end their own connection and nothing else.
async fn noise_on_the_port(url: &str) {
    for noise in [
        &b"GET / HTTP/1.1\r\nHost: x\r\n\r\n"[..],
        &[0_u8; 4096],
        &[0xff; 64],
        b"PRI * HTTP/2.0\r\n\r\nSM\r\n\r\n\xff\xff\xff\xff\xff\xff\xff\xff\xff",
    ] {
        let address = url.trim_start_matches("http://");
        let mut stream = TcpStream::connect(address).await.unwrap();
        stream.write_all(noise).await.unwrap();
        stream.shutdown().await.unwrap();
        let mut answer = Vec::new();
        // How the other side hangs up does not matter; that it does, does.
        let ended = tokio::time::timeout(
            std::time::Duration::from_secs(30),
            stream.read_to_end(&mut answer),
        );
        drop(ended.await.expect("the connection must end"));
    }
}

/// Manifests, and what each violation must name.
#[rustfmt::skip]
fn spoilt_manifests(good: &Pack) -> Vec<(&'static str, Pack, &'static [&'static str])> {
    let text = |manifest: &str| Pack { manifest: manifest.to_owned(), ..good.clone() };
    vec![
        ("empty", text(""), &["format", "identity", "crystal", "constants", "energy"]),
        ("no TOML", text("format = \"tarehouse-package/1\"\n[crystal\n"), &["line 2"]),
        ("another format", good.with("format", "format = \"other/9\""), &["format"]),
        ("missing key", good.with("raw", ""), &["constants.raw"]),
        ("unknown key", good.with("raw", "raw = true\nrow = true"), &["constants.row"]),
        ("wrong type", good.with("raw", "raw = \"yes\""), &["constants.raw"]),
        ("unknown unit", good.with("unit", "unit = \"eV\""), &["constants.unit"]),
        ("not finite", good.with("lattice_energy", "lattice_energy = nan"), &["energy.lattice_energy"]),
        ("translation twice", good.with("supercell", "supercell = [[1, 0, 0], [0, 3, 0], [0, 0, 3]]"), &["constants.translations"]),
        ("translations missing", good.with("translations", "translations = [[0, 0, 0]]"), &["constants.translations"]),
        ("singular supercell", good.with("supercell", "supercell = [[2, 0, 0], [2, 0, 0], [0, 0, 3]]"), &["constants.supercell"]),
        ("absurd supercell", good.with("supercell", "supercell = [[9000000000, 0, 0], [0, 3, 0], [0, 0, 3]]"), &["constants.supercell"]),
        ("singular cell", good.with("cell_vectors", "cell_vectors = [[6.0, 0.0, 0.0], [12.0, 0.0, 0.0], [0.0, 0.0, 5.0]]"), &["crystal.cell_vectors"]),
        ("leaves its folder", good.with("file", "file = \"../../etc/passwd\""), &["constants.file"]),
        ("formula does not divide", good.with("formula_units", "formula_units = 7"), &["identity.formula"]),
        (
            "many at once",
            good.with("formula_units", "formula_unitz = 2")
                .with("length_unit", "length_unit = \"cubit\"")
                .with("first_index", "first_index = \"third\"")
                .with("raw", "")
                .with("lattice_energy", "lattice_energy = inf"),
            &["identity.formula_unitz", "identity.formula_units", "crystal.length_unit", "constants.first_index",
              "constants.raw", "energy.lattice_energy"],
        ),
    ]
}

async fn manifests(bare: &Bare) {
    let good = Pack::demo(GOOD);
    for (number, (what, pack, keys)) in spoilt_manifests(&good).into_iter().enumerate() {
        let status = bare.create(pack.request(number)).await.unwrap_err();
        let violations = refused(what, &status, Code::InvalidArgument, "PACKAGE_INVALID");
        for key in keys {
            assert!(
                violations.iter().any(|told| told.contains(key)),
                "{what}: {key} is not among {violations:#?}"
            );
        }
        let mut once = violations.clone();
        once.sort();
        once.dedup();
        assert_eq!(once.len(), violations.len(), "{what}: told twice");
    }
    let mut binary = good.request(100);
    binary.manifest = vec![0xff, 0xfe, 0x00, 0x80].into();
    let status = bare.create(binary).await.unwrap_err();
    refused(
        "no UTF-8",
        &status,
        Code::InvalidArgument,
        "PACKAGE_INVALID",
    );
    let mut long = good.request(101);
    long.manifest = vec![b'#'; 1024 * 1024 + 1].into();
    let status = bare.create(long).await.unwrap_err();
    refused(
        "a long manifest",
        &status,
        Code::InvalidArgument,
        "PACKAGE_INVALID",
    );
    let mut longer = good.request(102);
    longer.manifest = vec![b'#'; 3 * 1024 * 1024].into();
    let status = bare.create(longer).await.unwrap_err();
    refused(
        "a long message",
        &status,
        Code::InvalidArgument,
        "MESSAGE_TOO_LARGE",
    );
}

async fn declarations(bare: &Bare) {
    let good = Pack::demo(GOOD);
    let changed = |number: usize, change: fn(&mut v1::ArrayDeclaration)| {
        let mut request = good.request(200 + number);
        request.arrays.iter_mut().for_each(change);
        request
    };
    let mut twice = good.request(210);
    twice.arrays.extend(twice.arrays.clone());
    let mut none = good.request(211);
    none.arrays.clear();
    for (what, request) in [
        (
            "too small for the shape",
            changed(0, |array| array.size_bytes -= 200),
        ),
        ("nothing", changed(1, |array| array.size_bytes = 0)),
        ("absurd", changed(2, |array| array.size_bytes = u64::MAX)),
        (
            "no digest",
            changed(3, |array| array.digest = "G".repeat(64)),
        ),
        (
            "another name",
            changed(4, |array| array.name = "other.npy".to_owned()),
        ),
        (
            "a path",
            changed(5, |array| array.name = "../constants.npy".to_owned()),
        ),
        ("twice", twice),
        ("none", none),
    ] {
        let status = bare.create(request).await.unwrap_err();
        refused(what, &status, Code::InvalidArgument, "ARRAYS_DISAGREE");
    }
    let mut request = good.request(0);
    request.request_id = "not a UUID".to_owned();
    let status = bare.create(request).await.unwrap_err();
    refused(
        "request id",
        &status,
        Code::InvalidArgument,
        "REQUEST_INVALID",
    );
}

async fn questions(bare: &Bare) {
    let nothing = format!("submissions/{}", "0".repeat(32));
    for (name, code, reason) in [
        ("", Code::InvalidArgument, "REQUEST_INVALID"),
        ("submissions/../x", Code::InvalidArgument, "REQUEST_INVALID"),
        (nothing.as_str(), Code::NotFound, "SUBMISSION_NOT_FOUND"),
    ] {
        let status = bare.seal(name).await.unwrap_err();
        refused(name, &status, code, reason);
        let request = v1::GetReportRequest {
            name: name.to_owned(),
        };
        let status = bare
            .submissions
            .clone()
            .get_report(request)
            .await
            .unwrap_err();
        refused(name, &status, code, reason);
    }
    let rank = async |compound: &str, temperatures_k: Vec<f64>| -> Status {
        let request = v1::RankFormsRequest {
            compound: compound.to_owned(),
            temperatures_k,
            ..v1::RankFormsRequest::default()
        };
        bare.catalog.clone().rank_forms(request).await.unwrap_err()
    };
    let status = rank("", vec![0.0]).await;
    refused(
        "no compound",
        &status,
        Code::InvalidArgument,
        "REQUEST_INVALID",
    );
    let status = rank("velnaric acid", vec![0.0]).await;
    refused(
        "unknown compound",
        &status,
        Code::NotFound,
        "COMPOUND_NOT_FOUND",
    );
    let status = rank("velnaric acid", vec![-1.0, f64::NAN, 9e9]).await;
    let violations = refused(
        "temperatures",
        &status,
        Code::InvalidArgument,
        "TEMPERATURE_OUTSIDE",
    );
    assert_eq!(violations.len(), 3, "{violations:?}");
    let request = v1::ListSubmissionsRequest {
        page_token: "no token".to_owned(),
        ..v1::ListSubmissionsRequest::default()
    };
    let status = bare
        .submissions
        .clone()
        .list_submissions(request)
        .await
        .unwrap_err();
    refused(
        "page token",
        &status,
        Code::InvalidArgument,
        "REQUEST_INVALID",
    );
}

/// Upload streams that break the order, the places or the sums; the one draft that they aim at stays a draft.
async fn uploads(bare: &Bare) {
    let good = Pack::demo(GOOD);
    let name = bare.create(good.request(300)).await.unwrap().name;
    let size = good.constants.len();
    let with =
        |last: v1::SendArrayRequest| vec![opening(&name, 0), chunk(0, &good.constants), last];
    let mut damaged = chunk(0, &good.constants);
    if let Some(v1::send_array_request::Frame::Chunk(chunk)) = &mut damaged.frame {
        chunk.crc32 ^= 1;
    }
    let cases = [
        ("no frames", vec![], "STREAM_INCOMPLETE"),
        (
            "an empty frame",
            vec![v1::SendArrayRequest::default()],
            "STREAM_INCOMPLETE",
        ),
        ("no opening", vec![chunk(0, b"x")], "STREAM_INCOMPLETE"),
        (
            "a damaged chunk",
            vec![opening(&name, 0), damaged],
            "CHECKSUM_MISMATCH",
        ),
        (
            "a hole",
            vec![opening(&name, 0), chunk(9, b"x")],
            "OFFSET_MISMATCH",
        ),
        ("too much", with(chunk(size, b"x")), "SIZE_EXCEEDED"),
        (
            "too little",
            vec![opening(&name, 0), finish(size, &good.digest())],
            "SIZE_MISMATCH",
        ),
        (
            "another size",
            with(finish(size + 1, &good.digest())),
            "SIZE_MISMATCH",
        ),
        (
            "another digest",
            with(finish(size, &"0".repeat(64))),
            "DIGEST_MISMATCH",
        ),
        (
            "an end without finish",
            vec![opening(&name, 0), chunk(0, &good.constants)],
            "STREAM_INCOMPLETE",
        ),
    ];
    for (what, frames, reason) in cases {
        let status = bare.send(frames).await.unwrap_err();
        refused(what, &status, Code::InvalidArgument, reason);
        let status = bare.seal(&name).await.unwrap_err();
        refused(what, &status, Code::FailedPrecondition, "ARRAYS_MISSING");
    }
}
