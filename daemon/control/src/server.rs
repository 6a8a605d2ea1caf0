//! The service's end: the socket, and a conversation on it.

use std::io::ErrorKind;
use std::os::unix::fs::{FileTypeExt, PermissionsExt};
use std::path::{Path, PathBuf};
use std::time::Duration;

use thiserror::Error;
use tokio::io::{AsyncBufReadExt, AsyncReadExt, AsyncWriteExt, BufReader};
use tokio::net::{UnixListener, UnixStream};
use tokio::time::timeout;

use crate::{LONGEST_LINE, Reply, Request};

/// Owner and group may ask, nobody else.
const MODE: u32 = 0o660;

/// How long the other end may be silent, or not take what is answered.
const PATIENCE: Duration = Duration::from_mins(1);

/// Why there is no socket.
#[derive(Debug, Error)]
pub enum ListenError {
    /// Another service has it.
    #[error("another service answers at {}", .0.display())]
    Taken(PathBuf),
    /// Something else lies there; it was not touched.
    #[error("{} is not a socket; it was not touched", .0.display())]
    NoSocket(PathBuf),
    /// The file system says no.
    #[error("{}: {source}", path.display())]
    File {
        /// The socket.
        path: PathBuf,
        /// What it says.
        source: std::io::Error,
    },
}

/// Who asks, as the kernel knows it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Peer {
    /// The user's number.
    pub user: u32,
    /// The process, if it is known.
    pub process: Option<i32>,
}

/// Opens the socket for owner and group. A socket that a killed service has left behind is removed.
///
/// # Errors
/// Another service listens there, something else lies there, or the file system refuses.
pub fn listen(path: &Path) -> Result<UnixListener, ListenError> {
    let wrong = |source| ListenError::File { path: path.to_owned(), source };
    match std::fs::symlink_metadata(path) {
        Ok(found) if !found.file_type().is_socket() => return Err(ListenError::NoSocket(path.to_owned())),
        Ok(_) if std::os::unix::net::UnixStream::connect(path).is_ok() => {
            return Err(ListenError::Taken(path.to_owned()));
        }
        Ok(_) => std::fs::remove_file(path).map_err(wrong)?,
        Err(error) if error.kind() == ErrorKind::NotFound => {
            if let Some(folder) = path.parent().filter(|folder| !folder.as_os_str().is_empty()) {
                std::fs::create_dir_all(folder).map_err(wrong)?;
            }
        }
        Err(error) => return Err(wrong(error)),
    }
    let listener = UnixListener::bind(path).map_err(wrong)?;
    std::fs::set_permissions(path, std::fs::Permissions::from_mode(MODE)).map_err(wrong)?;
    Ok(listener)
}

/// Answers the requests of one connection until the other end hangs up, is silent for too long or sends what is no
/// request (it is told so first).
pub async fn converse<F, Answer>(stream: UnixStream, mut answer: F)
where
    F: FnMut(Request, Peer) -> Answer,
    Answer: Future<Output = Reply>,
{
    let Ok(credentials) = stream.peer_cred() else { return };
    let peer = Peer { user: credentials.uid(), process: credentials.pid() };
    let (read, mut write) = stream.into_split();
    let mut read = BufReader::new(read);
    loop {
        let mut line = Vec::new();
        let mut limited = (&mut read).take(LONGEST_LINE as u64);
        let Ok(Ok(count)) = timeout(PATIENCE, limited.read_until(b'\n', &mut line)).await else { return };
        if count == 0 {
            return;
        }
        let (reply, last) = match understood(&line) {
            Ok(request) => (answer(request, peer).await, false),
            Err(why) => {
                tracing::warn!(user = peer.user, why, "a request on the control socket was not understood");
                (Reply::Refused { why }, true)
            }
        };
        let Ok(mut bytes) = serde_json::to_vec(&reply) else { return };
        bytes.push(b'\n');
        let sent = timeout(PATIENCE, write.write_all(&bytes)).await;
        if last || !matches!(sent, Ok(Ok(()))) {
            return;
        }
    }
}

/// What a line asks for.
fn understood(line: &[u8]) -> Result<Request, String> {
    if line.last() != Some(&b'\n') {
        return Err(format!("a request is a line of {LONGEST_LINE} bytes at most"));
    }
    serde_json::from_slice(line).map_err(|error| format!("this is no request: {error}"))
}
