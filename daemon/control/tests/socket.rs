//! Both ends over a real socket.

#![expect(clippy::expect_used, reason = "a test fails by a panic that tells what was expected")]

use std::io::{Read, Write};
use std::os::unix::fs::PermissionsExt;
use std::os::unix::net::UnixStream;
use std::path::Path;

use hushwatch_control::{
    Client, ControlError, Hello, ListenError, MarkReference, PROTOCOL, Peer, Reply, Request, When, converse, listen,
};

fn hello(protocol: u32) -> Hello {
    Hello { protocol, version: "0.1.0".into(), site: "hall 2".into(), record: "e14.db".into() }
}

/// A service that answers `Done` to a flush of user 0 or of this user, and refuses everything else.
fn serve(path: &Path, protocol: u32) -> tokio::runtime::Runtime {
    let runtime =
        tokio::runtime::Builder::new_multi_thread().worker_threads(1).enable_all().build().expect("a runtime");
    let listener = runtime.block_on(async { listen(path) }).expect("a socket");
    runtime.spawn(async move {
        while let Ok((stream, _)) = listener.accept().await {
            tokio::spawn(converse(stream, move |request, peer: Peer| {
                std::future::ready(match request {
                    Request::Hello => Reply::Hello(hello(protocol)),
                    Request::Flush if peer.process.is_some() => Reply::Done,
                    other => Reply::Refused { why: format!("not this: {other:?}") },
                })
            }));
        }
    });
    runtime
}

fn folder() -> tempfile::TempDir {
    tempfile::Builder::new().prefix("hw").tempdir().expect("a folder")
}

#[test]
fn questions_and_answers() {
    let folder = folder();
    let path = folder.path().join("e14.sock");
    let _service = serve(&path, PROTOCOL);
    assert_eq!(std::fs::metadata(&path).expect("a socket").permissions().mode() & 0o777, 0o660);
    let mut client = Client::connect(&path).expect("connected");
    assert_eq!(client.hello(), &hello(PROTOCOL));
    assert_eq!(client.ask(&Request::Flush).expect("done"), Reply::Done);
    let mark = MarkReference {
        cable: "W12".into(),
        kind: "after".into(),
        when: When::Last(60_000_000),
        who: None,
        note: String::new(),
    };
    let refused = client.ask(&Request::Reference(mark)).expect_err("refused");
    assert!(refused.to_string().contains("W12"), "{refused}");
    assert_eq!(client.ask(&Request::Flush).expect("done"), Reply::Done, "a refusal ends no conversation");
}

#[test]
fn garbage_is_told_and_ends_the_conversation_but_not_the_service() {
    let folder = folder();
    let path = folder.path().join("e14.sock");
    let _service = serve(&path, PROTOCOL);
    for bytes in
        [b"GET / HTTP/1.1\r\n\r\n".to_vec(), b"{}\n".to_vec(), vec![0xff; 70_000], b"{\"ask\":\"fly\"}\n".to_vec()]
    {
        let mut stream = UnixStream::connect(&path).expect("connected");
        let _ = stream.write_all(&bytes);
        let _ = stream.shutdown(std::net::Shutdown::Write);
        let mut told = String::new();
        let _ = stream.read_to_string(&mut told);
        assert!(told.contains("\"refused\"") || bytes.len() > 65_536, "{told}");
    }
    Client::connect(&path).expect("the service still answers");
}

#[test]
fn what_is_wrong_is_told() {
    let folder = folder();
    let path = folder.path().join("e14.sock");
    assert!(matches!(Client::connect(&path), Err(ControlError::NoService(_))));
    let service = serve(&path, PROTOCOL + 1);
    assert!(matches!(Client::connect(&path), Err(ControlError::OtherVersion { .. })));
    let taken = service.block_on(async { listen(&path) }).expect_err("taken");
    assert!(matches!(taken, ListenError::Taken(_)), "{taken}");
    // A killed service leaves its socket behind: nobody listens there, so it is taken over.
    drop(service);
    assert!(matches!(Client::connect(&path), Err(ControlError::NoService(_))));
    let _next = serve(&path, PROTOCOL);
    Client::connect(&path).expect("taken over");
}

#[test]
fn what_is_no_socket_is_left_alone() {
    let folder = folder();
    let path = folder.path().join("letter");
    std::fs::write(&path, "dear aunt").expect("written");
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().expect("a runtime");
    let error = runtime.block_on(async { listen(&path) }).expect_err("refused");
    assert!(matches!(error, ListenError::NoSocket(_)), "{error}");
    assert_eq!(std::fs::read_to_string(&path).expect("still there"), "dear aunt");
}
