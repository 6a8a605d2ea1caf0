//! Notices that the site file was saved, whichever way an editor saves.
//!
//! The folder is watched, not the file: most editors write a new file and rename it over the old one, after which a watch
//! on the file sees nothing any more. If the path is a link, the folder of its target is watched too. The watch is
//! made anew after each look, since the folder itself may have been replaced. As a net below it the file is looked at
//! twice a minute, and at SIGHUP. Only what stands in the file counts: the same text is no change, a file that is
//! missing for a moment is none either.

use std::path::{Path, PathBuf};
use std::time::Duration;

use hushwatch_config::site::{self, Site};
use notify::{EventKind, RecursiveMode, Watcher};
use tokio::signal::unix::{Signal, SignalKind, signal};
use tokio::sync::mpsc;

/// An editor saves in several steps: so long after the last one the file is looked at.
const SETTLE: Duration = Duration::from_millis(300);

/// How often the file is looked at in any case.
const NET: Duration = Duration::from_secs(30);

/// What became of the site file.
#[derive(Debug)]
pub(crate) enum Change {
    /// Another one that is right.
    Right(Box<Site>),
    /// Another one that is refused: all its faults, as they are shown.
    Faulty(String),
    /// It is what it was again, after it had been faulty.
    AsBefore,
}

/// Watches a site file.
#[derive(Debug)]
pub(crate) struct SiteFile {
    path: PathBuf,
    /// The text that was refused last.
    refused: Option<String>,
    hangup: Signal,
    events: mpsc::Receiver<()>,
    tx: mpsc::Sender<()>,
    watcher: Option<notify::RecommendedWatcher>,
}

impl SiteFile {
    /// Watches this file.
    ///
    /// # Errors
    /// The signal cannot be listened to.
    pub(crate) fn new(path: &Path) -> std::io::Result<Self> {
        // One is enough: more events before it was looked at tell nothing new.
        let (tx, events) = mpsc::channel(1);
        let hangup = signal(SignalKind::hangup())?;
        let mut file = Self { path: path.to_owned(), refused: None, hangup, events, tx, watcher: None };
        file.arm();
        Ok(file)
    }

    /// The next change of a file whose text in force is `current`. To be dropped at any time.
    pub(crate) async fn change(&mut self, current: &str) -> Change {
        loop {
            let asked = tokio::select! {
                _ = self.hangup.recv() => true,
                _ = self.events.recv() => {
                    self.settle().await;
                    false
                }
                () = tokio::time::sleep(NET) => false,
            };
            self.arm();
            if let Some(change) = self.look(current, asked) {
                return change;
            }
        }
    }

    /// Waits until nothing has happened for a while.
    async fn settle(&mut self) {
        let quiet = async { while let Ok(Some(())) = tokio::time::timeout(SETTLE, self.events.recv()).await {} };
        // Somebody who saves all the time must not keep it from being looked at.
        let _ = tokio::time::timeout(SETTLE * 10, quiet).await;
    }

    fn look(&mut self, current: &str, asked: bool) -> Option<Change> {
        let text = match std::fs::read_to_string(&self.path) {
            Ok(text) => text,
            Err(error) => {
                if asked {
                    tracing::warn!(path = %self.path.display(), "asked to read the site file anew, but: {error}");
                }
                return None;
            }
        };
        if text == current {
            if asked {
                tracing::info!("asked to read the site file anew: it is as it was");
            }
            return self.refused.take().map(|_| Change::AsBefore);
        }
        if self.refused.as_deref() == Some(text.as_str()) && !asked {
            return None;
        }
        match site::parse(&text, &self.path) {
            Ok(site) => {
                self.refused = None;
                Some(Change::Right(Box::new(site)))
            }
            Err(faults) => {
                self.refused = Some(text);
                Some(Change::Faulty(faults.render(false)))
            }
        }
    }

    /// Watches the folder of the file, and that of its target if it is a link. Where that cannot be (no such folder, no
    /// watches left), the net remains.
    fn arm(&mut self) {
        let tx = self.tx.clone();
        let folders = folders(&self.path);
        let watched = folders.clone();
        let names = names(&self.path);
        let told = move |event: notify::Result<notify::Event>| {
            // Reading the file is an event as well: to look at each of them would never end.
            // And the record may lie in the same folder, where something happens all the time.
            let ours = event.as_ref().map_or(true, |event| {
                let reading = matches!(event.kind, EventKind::Access(access) if !is_write(access));
                !reading
                    && event.paths.iter().any(|path| {
                        watched.contains(path)
                            || path.file_name().is_some_and(|name| names.iter().any(|one| one == name))
                    })
            });
            if ours {
                // Full: it will be looked at anyway.
                let _ = tx.try_send(());
            }
        };
        let watcher = notify::recommended_watcher(told).and_then(|mut watcher| {
            for folder in &folders {
                watcher.watch(folder, RecursiveMode::NonRecursive)?;
            }
            Ok(watcher)
        });
        match watcher {
            Ok(watcher) => self.watcher = Some(watcher),
            Err(error) => {
                tracing::debug!("the site file's folder cannot be watched: {error}");
                self.watcher = None;
            }
        }
    }
}

fn is_write(access: notify::event::AccessKind) -> bool {
    matches!(access, notify::event::AccessKind::Close(notify::event::AccessMode::Write))
}

/// The name of a file and, if it is a link, that of its target.
fn names(path: &Path) -> Vec<std::ffi::OsString> {
    let target = std::fs::canonicalize(path).ok();
    [Some(path.to_owned()), target].iter().flatten().filter_map(|path| Some(path.file_name()?.to_owned())).collect()
}

/// The folder of a file and, if it is a link, that of its target.
fn folders(path: &Path) -> Vec<PathBuf> {
    let folder_of = |path: &Path| match path.parent() {
        Some(folder) if !folder.as_os_str().is_empty() => folder.to_owned(),
        _ => PathBuf::from("."),
    };
    let mut folders = vec![folder_of(path)];
    if let Ok(target) = std::fs::canonicalize(path) {
        let folder = folder_of(&target);
        if !folders.contains(&folder) {
            folders.push(folder);
        }
    }
    folders
}

#[cfg(test)]
mod tests {
    use super::*;

    const SITE: &str = include_str!("../../deploy/site.toml");

    fn site(name: &str) -> String {
        SITE.replace("cabinet E14", name)
            .replace("factor_file = \"clamp-a.csv\"", "factor = [[\"1 MHz\", 1.0], [\"30 MHz\", 2.0]]")
    }

    /// Saves by `save` after a moment; the name of the site that is noticed.
    fn noticed(path: &Path, save: impl FnOnce() + Send + 'static) -> String {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().expect("a runtime");
        runtime.block_on(async {
            let current = std::fs::read_to_string(path).expect("a site file");
            let mut file = SiteFile::new(path).expect("watched");
            let saver = std::thread::spawn(move || {
                std::thread::sleep(Duration::from_millis(100));
                save();
            });
            let change = tokio::time::timeout(Duration::from_secs(20), file.change(&current)).await;
            saver.join().expect("saved");
            match change.expect("the net is not waited for") {
                Change::Right(site) => site.name.clone(),
                other => format!("{other:?}"),
            }
        })
    }

    #[test]
    fn every_way_of_saving_is_noticed() {
        let folder = tempfile::tempdir().expect("a folder");
        let at = |name: &str| folder.path().join(name);
        let path = at("site.toml");
        let write = |path: PathBuf, name: &'static str| move || std::fs::write(path, site(name)).expect("written");
        std::fs::write(&path, site("one")).expect("written");
        assert!(noticed(&path, write(path.clone(), "in place")).ends_with("in place"));
        let (new, target) = (at("new"), path.clone());
        let rename = move || {
            std::fs::write(&new, site("renamed")).expect("written");
            std::fs::rename(new, target).expect("renamed");
        };
        assert!(noticed(&path, rename).ends_with("renamed"));
        // The old file is moved away first, and comes back as another one: a missing file in between is no change.
        let (backup, target) = (at("site.toml~"), path.clone());
        let dance = move || {
            std::fs::rename(&target, backup).expect("moved");
            std::thread::sleep(Duration::from_millis(50));
            std::fs::write(target, site("danced")).expect("written");
        };
        assert!(noticed(&path, dance).ends_with("danced"));
    }

    #[test]
    fn links_and_folders_that_are_swapped_are_noticed() {
        let folder = tempfile::tempdir().expect("a folder");
        let at = |name: &str| folder.path().join(name);
        std::fs::create_dir(at("a")).expect("a folder");
        std::fs::create_dir(at("b")).expect("a folder");
        std::fs::write(at("a/site.toml"), site("one")).expect("written");
        std::fs::write(at("b/site.toml"), site("swapped")).expect("written");
        let link = at("site.toml");
        std::os::unix::fs::symlink(at("a/site.toml"), &link).expect("a link");
        let target = at("a/site.toml");
        let written = noticed(&link, move || std::fs::write(target, site("behind the link")).expect("written"));
        assert!(written.ends_with("behind the link"), "{written}");
        let (new, old, to) = (at("new"), link.clone(), at("b/site.toml"));
        let swap = move || {
            std::os::unix::fs::symlink(to, &new).expect("a link");
            std::fs::rename(new, old).expect("swapped");
        };
        assert!(noticed(&link, swap).ends_with("swapped"));
    }

    #[test]
    fn a_faulty_file_is_told_once_and_its_end_too() {
        let folder = tempfile::tempdir().expect("a folder");
        let path = folder.path().join("site.toml");
        let current = site("one");
        std::fs::write(&path, current.replace("rbw", "rwb")).expect("written");
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().expect("a runtime");
        runtime.block_on(async {
            let mut file = SiteFile::new(&path).expect("watched");
            let Some(Change::Faulty(told)) = file.look(&current, false) else { panic!("it is faulty") };
            assert!(told.contains("did you mean `rbw`"), "{told}");
            assert!(file.look(&current, false).is_none(), "it was told already");
            assert!(matches!(file.look(&current, true), Some(Change::Faulty(_))), "who asks is told again");
            std::fs::write(&path, &current).expect("written");
            assert!(matches!(file.look(&current, false), Some(Change::AsBefore)));
            assert!(file.look(&current, false).is_none());
            std::fs::remove_file(&path).expect("removed");
            assert!(file.look(&current, false).is_none(), "a file that is missing is no change");
        });
    }
}
