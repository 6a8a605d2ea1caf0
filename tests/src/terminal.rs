//! A pseudo-terminal under a path of one's choice.

use std::fs::File;
use std::os::unix::fs::symlink;
use std::path::Path;

use rustix::fd::OwnedFd;
use rustix::fs::{Mode, OFlags};
use rustix::pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt};
use rustix::termios::{OptionalActions, tcgetattr, tcsetattr};

/// Both ends of a terminal; it hangs up when this is dropped.
#[derive(Debug)]
pub struct Terminal {
    /// The device's end.
    pub master: File,
    /// Kept open and raw: a terminal starts with echo, and hangs up whenever its last reader leaves.
    pub slave: OwnedFd,
}

impl Terminal {
    /// A new terminal; `link` leads to it. What other tests start must not keep it open: hence CLOEXEC.
    pub fn at(link: &Path) -> Self {
        let master = openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY | OpenptFlags::CLOEXEC).expect("a pseudo-terminal");
        grantpt(&master).expect("grantpt");
        unlockpt(&master).expect("unlockpt");
        let name = ptsname(&master, Vec::new()).expect("its name").into_string().expect("UTF-8");
        let flags = OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC;
        let slave = rustix::fs::open(&name, flags, Mode::empty()).expect("its other end");
        let mut raw = tcgetattr(&slave).expect("its settings");
        raw.make_raw();
        tcsetattr(&slave, OptionalActions::Now, &raw).expect("raw");
        let _ = std::fs::remove_file(link);
        symlink(&name, link).expect("a link");
        Self { master: File::from(master), slave }
    }
}
