//! The companion's end: blocking, with time limits.

use std::io::{BufRead, BufReader, ErrorKind, Read, Write};
use std::os::unix::net::UnixStream;
use std::path::{Path, PathBuf};
use std::time::Duration;

use thiserror::Error;

use crate::{Hello, LONGEST_LINE, PROTOCOL, Reply, Request};

/// How long the service may take to answer: it may be in the middle of a commit to a slow disk.
const PATIENCE: Duration = Duration::from_secs(20);

/// Why there was no answer.
#[derive(Debug, Error)]
pub enum ControlError {
    /// Nobody listens.
    #[error("no service answers at {}: is `hushwatchd` running with this site file?", .0.display())]
    NoService(PathBuf),
    /// One may not ask.
    #[error("{} may not be used by this user: those in the socket's group may", .0.display())]
    NotAllowed(PathBuf),
    /// The two programs are of different versions.
    #[error("the service is of version {service} and speaks another protocol: take the same version of both")]
    OtherVersion {
        /// The service's version.
        service: String,
    },
    /// What came is no reply.
    #[error("the service gave no proper answer: {0}")]
    Garbage(String),
    /// The connection broke, or took too long.
    #[error("the connection to the service: {0}")]
    Broken(#[from] std::io::Error),
    /// The service will not.
    #[error("{0}")]
    Refused(String),
}

/// A conversation with the service.
#[derive(Debug)]
pub struct Client {
    stream: BufReader<UnixStream>,
    hello: Hello,
}

impl Client {
    /// Connects, and sees to it that both speak the same protocol.
    ///
    /// # Errors
    /// Nobody listens there, one may not, or the other end is of another version.
    pub fn connect(path: &Path) -> Result<Self, ControlError> {
        let stream = UnixStream::connect(path).map_err(|error| match error.kind() {
            ErrorKind::NotFound | ErrorKind::ConnectionRefused => ControlError::NoService(path.to_owned()),
            ErrorKind::PermissionDenied => ControlError::NotAllowed(path.to_owned()),
            _ => ControlError::Broken(error),
        })?;
        stream.set_read_timeout(Some(PATIENCE))?;
        stream.set_write_timeout(Some(PATIENCE))?;
        let mut stream = BufReader::new(stream);
        match exchange(&mut stream, &Request::Hello)? {
            Reply::Hello(hello) if hello.protocol == PROTOCOL => Ok(Self { stream, hello }),
            Reply::Hello(hello) => Err(ControlError::OtherVersion { service: hello.version }),
            other => Err(ControlError::Garbage(format!("{other:?}"))),
        }
    }

    /// Who is at the other end.
    pub fn hello(&self) -> &Hello {
        &self.hello
    }

    /// Asks.
    ///
    /// # Errors
    /// The connection broke, what came is no reply, or the service refuses.
    pub fn ask(&mut self, request: &Request) -> Result<Reply, ControlError> {
        match exchange(&mut self.stream, request)? {
            Reply::Refused { why } => Err(ControlError::Refused(why)),
            reply => Ok(reply),
        }
    }
}

fn exchange(stream: &mut BufReader<UnixStream>, request: &Request) -> Result<Reply, ControlError> {
    let mut line = serde_json::to_vec(request).map_err(|error| ControlError::Garbage(error.to_string()))?;
    line.push(b'\n');
    if line.len() > LONGEST_LINE {
        return Err(ControlError::Refused(format!("the request is longer than {LONGEST_LINE} bytes")));
    }
    stream.get_mut().write_all(&line)?;
    let mut line = Vec::new();
    stream.by_ref().take(LONGEST_LINE as u64).read_until(b'\n', &mut line)?;
    match line.last() {
        None => Err(ControlError::Broken(ErrorKind::UnexpectedEof.into())),
        Some(b'\n') => serde_json::from_slice(&line).map_err(|error| ControlError::Garbage(error.to_string())),
        Some(_) => Err(ControlError::Garbage(String::from("a line without an end"))),
    }
}
