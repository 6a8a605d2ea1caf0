//! A program that is told on its standard input.

use std::process::{ExitStatus, Stdio};
use std::time::Duration;

use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::process::Child;

use crate::DeliveryError;

/// Of what a program writes to its error output, so much is kept.
const SAID: usize = 400;

/// A program with its arguments; no shell is in between.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Command {
    /// The program and its arguments; at least the program.
    pub run: Vec<String>,
    /// After this it is stopped, and counts as failed.
    pub timeout: Duration,
}

impl Command {
    pub(crate) async fn deliver(&self, notice: &str) -> Result<(), DeliveryError> {
        let program = self.run.first().cloned().unwrap_or_default();
        let started = tokio::process::Command::new(&program)
            .args(self.run.iter().skip(1))
            .stdin(Stdio::piped())
            .stdout(Stdio::null())
            .stderr(Stdio::piped())
            // A group of its own, so that what it starts can be stopped with it.
            .process_group(0)
            .kill_on_drop(true)
            .spawn();
        let mut child = started.map_err(|source| DeliveryError::Start { program: program.clone(), source })?;
        let group = child.id();
        match tokio::time::timeout(self.timeout, tell(&mut child, notice)).await {
            Ok(Ok((status, _))) if status.success() => Ok(()),
            Ok(Ok((status, said))) => Err(DeliveryError::Failed { program, how: how(status), said }),
            Ok(Err(source)) => Err(DeliveryError::Start { program, source }),
            Err(_) => {
                stop(group);
                let _ = child.wait().await;
                Err(DeliveryError::TooLong { program, limit: self.timeout })
            }
        }
    }
}

/// Hands the notice over and waits for the end; how it ended and the last words of its error output.
async fn tell(child: &mut Child, notice: &str) -> std::io::Result<(ExitStatus, String)> {
    let (input, errors) = (child.stdin.take(), child.stderr.take());
    let write = async {
        if let Some(mut input) = input {
            // A program may well close its input without reading it: its exit code tells whether that was meant.
            let _ = input.write_all(notice.as_bytes()).await;
        }
    };
    let read = async {
        let mut said = Vec::new();
        if let Some(mut errors) = errors {
            let mut chunk = [0; 1024];
            while let Ok(count @ 1..) = errors.read(&mut chunk).await {
                said.extend_from_slice(&chunk[..count]);
                said.drain(..said.len().saturating_sub(SAID));
            }
        }
        said
    };
    let ((), said, status) = tokio::join!(write, read, child.wait());
    let said = String::from_utf8_lossy(&said);
    let said = said.trim();
    Ok((status?, if said.is_empty() { String::new() } else { format!(": {said}") }))
}

fn how(status: ExitStatus) -> String {
    use std::os::unix::process::ExitStatusExt;
    match (status.code(), status.signal()) {
        (Some(code), _) => format!("exit code {code}"),
        (None, Some(signal)) => format!("signal {signal}"),
        (None, None) => String::from("no exit code"),
    }
}

/// Stops a whole group of processes.
fn stop(group: Option<u32>) {
    let group = group.and_then(|group| i32::try_from(group).ok()).and_then(rustix::process::Pid::from_raw);
    if let Some(group) = group {
        // It may have ended in this moment.
        let _ = rustix::process::kill_process_group(group, rustix::process::Signal::KILL);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shell(script: &str) -> Command {
        Command { run: vec!["/bin/sh".into(), "-c".into(), script.into()], timeout: Duration::from_secs(20) }
    }

    fn run(command: &Command, notice: &str) -> Result<(), DeliveryError> {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().expect("a runtime");
        runtime.block_on(command.deliver(notice))
    }

    #[test]
    fn the_notice_arrives_whole() {
        let folder = tempfile::tempdir().expect("a folder");
        let path = folder.path().join("told");
        let notice = "{\"text\":\"W12 up by 6 dB\"}".repeat(10_000);
        run(&shell(&format!("cat > {}", path.display())), &notice).expect("delivered");
        assert_eq!(std::fs::read_to_string(path).expect("told"), notice);
    }

    #[test]
    fn what_fails_says_how() {
        for (script, expected) in [
            ("echo the line is dead >&2; exit 3", "`/bin/sh` failed (exit code 3): the line is dead"),
            ("kill -TERM $$", "`/bin/sh` failed (signal 15)"),
        ] {
            assert_eq!(run(&shell(script), "{}").expect_err(script).to_string(), expected);
        }
        let none = Command { run: vec!["/nowhere/tell".into()], timeout: Duration::from_secs(1) };
        assert!(run(&none, "{}").expect_err("no program").to_string().contains("/nowhere/tell"));
        // It need not read.
        run(&shell("exec <&-; exit 0"), &"x".repeat(1_000_000)).expect("delivered");
    }

    #[test]
    fn what_takes_too_long_is_stopped_with_its_children() {
        let folder = tempfile::tempdir().expect("a folder");
        let path = folder.path().join("child");
        let script = format!("sleep 600 & echo $! > {}; wait", path.display());
        let command = Command { timeout: Duration::from_millis(300), ..shell(&script) };
        assert!(matches!(run(&command, "{}"), Err(DeliveryError::TooLong { .. })));
        let child = std::fs::read_to_string(path).expect("a child").trim().to_owned();
        let state = || std::fs::read_to_string(format!("/proc/{child}/stat")).unwrap_or_default();
        for _ in 0..200 {
            // Gone, or dead and waiting to be collected.
            if state().is_empty() || state().contains(") Z ") {
                return;
            }
            std::thread::sleep(Duration::from_millis(20));
        }
        panic!("the child still runs: {}", state());
    }
}
