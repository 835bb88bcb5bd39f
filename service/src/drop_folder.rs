//! Drop folders: files that arrive in `incoming` are scored once and appear whole in `scored`.
//!
//! A worker claims a file by renaming it into `working` under a name of its own, which only one
//! can do, and locks it, so that a file left by a worker that died can be told from one in hand.
//! The result, the refused rows and the receipt are written aside and renamed, the records are in
//! the ledger before that, and the claimed file is removed last. At whatever point a worker dies,
//! the next one starts the same file anew, and ids that the ledger has count once.

mod file;
mod hash;

use std::fs::{self, File, TryLockError};
use std::io;
use std::path::{Path, PathBuf};
use std::time::{Duration, SystemTime};

use anyhow::Context;
use uuid::Uuid;

use crate::clock::Clock;
use crate::config::DropConfig;
use crate::metrics::Metrics;
use crate::registry::Registry;

/// Stands between a worker's mark and the name of a claimed file.
const CLAIM_MARK: char = '~';
/// How often a file is taken up again after its worker died. A file that brings workers down must
/// not do so for ever.
const MOST_ATTEMPTS: u32 = 3;
/// A file that was written to more recently is not complete yet.
const SETTLED: Duration = Duration::from_secs(2);

/// One drop folder.
#[derive(Debug)]
pub(crate) struct DropFolder {
    model: String,
    folder: PathBuf,
    done_mark: bool,
}

/// What a sweep did.
#[derive(Debug, Default, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Swept {
    /// Files that were dealt with.
    pub(crate) files: usize,
    /// Those of them that were set aside as a whole or known already.
    pub(crate) not_scored: usize,
    /// Rows that were scored.
    pub(crate) scored_rows: u64,
    /// Rows that were refused.
    pub(crate) refused_rows: u64,
}

impl DropFolder {
    /// The drop folder of a configuration; `folder` is its path from here.
    pub(crate) fn new(config: &DropConfig, folder: PathBuf) -> Self {
        Self { model: config.model.clone(), folder, done_mark: config.done_mark }
    }

    /// Deals with all files that are complete, and with those that dead workers left.
    ///
    /// # Errors
    /// Where the folder, the disk or the ledger fails. A file that cannot be read is no error: it is
    /// set aside with its reason.
    pub(crate) fn sweep(
        &self,
        registry: &Registry,
        metrics: &Metrics,
        clock: Clock,
    ) -> anyhow::Result<Swept> {
        for name in ["incoming", "working", "scored", "refused", "receipts"] {
            let path = self.sub(name);
            fs::create_dir_all(&path)
                .with_context(|| format!("could not make folder `{}`", path.display()))?;
        }
        let mut swept = Swept::default();
        for claimed in self.files("working")? {
            self.deal_with(&claimed, registry, metrics, clock, &mut swept)?;
        }
        for arrived in self.files("incoming")? {
            if !self.is_complete(&arrived)? {
                continue;
            }
            if let Some(claimed) = self.claim(&arrived)? {
                self.deal_with(&claimed, registry, metrics, clock, &mut swept)?;
            }
        }
        Ok(swept)
    }

    fn sub(&self, name: &str) -> PathBuf {
        self.folder.join(name)
    }

    /// Regular files in a subfolder, by name; hidden ones are somebody's work in progress.
    fn files(&self, subfolder: &str) -> anyhow::Result<Vec<PathBuf>> {
        let folder = self.sub(subfolder);
        let read = || -> io::Result<Vec<PathBuf>> {
            let mut files = Vec::new();
            for entry in fs::read_dir(&folder)? {
                let entry = entry?;
                let hidden = entry.file_name().as_encoded_bytes().starts_with(b".");
                if !hidden && entry.file_type()?.is_file() {
                    files.push(entry.path());
                }
            }
            files.sort();
            Ok(files)
        };
        read().with_context(|| format!("could not read folder `{}`", folder.display()))
    }

    /// Whether a file is complete: its done mark is there, or it has not been written to for a
    /// while. Renaming into place does not touch the time of writing, so a file that a careful
    /// sender renamed is waited for no longer than it takes to settle.
    fn is_complete(&self, path: &Path) -> anyhow::Result<bool> {
        if path.extension().is_some_and(|extension| extension == "done") && self.done_mark {
            return Ok(false);
        }
        if self.done_mark {
            return Ok(done_mark_of(path).exists());
        }
        loop {
            let Ok(known) = fs::metadata(path) else { return Ok(false) };
            let age =
                known.modified().ok().and_then(|written| SystemTime::now().duration_since(written).ok());
            match age {
                Some(age) if age >= SETTLED => return Ok(true),
                // A time of writing in the future says nothing; take the file as it is.
                None => return Ok(true),
                Some(age) => std::thread::sleep(SETTLED.saturating_sub(age)),
            }
        }
    }

    /// Takes a file for this worker; `None` where another one was faster.
    fn claim(&self, path: &Path) -> anyhow::Result<Option<PathBuf>> {
        let Some(name) = path.file_name() else { return Ok(None) };
        let mut claimed = std::ffi::OsString::from(format!("{}{CLAIM_MARK}", Uuid::now_v7().simple()));
        claimed.push(name);
        let claimed = self.sub("working").join(claimed);
        match fs::rename(path, &claimed) {
            Ok(()) => {
                if self.done_mark {
                    // The mark has served; where it cannot be removed it does no harm.
                    let _ = fs::remove_file(done_mark_of(path));
                }
                Ok(Some(claimed))
            }
            Err(error) if error.kind() == io::ErrorKind::NotFound => Ok(None),
            Err(error) => Err(error).with_context(|| format!("could not take up `{}`", path.display())),
        }
    }

    /// Deals with a claimed file, unless another worker has it in hand.
    fn deal_with(
        &self,
        claimed: &Path,
        registry: &Registry,
        metrics: &Metrics,
        clock: Clock,
        swept: &mut Swept,
    ) -> anyhow::Result<()> {
        let lock = match File::open(claimed) {
            Ok(file) => file,
            // Another worker has finished it meanwhile.
            Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(()),
            Err(error) => {
                return Err(error).with_context(|| format!("could not open `{}`", claimed.display()));
            }
        };
        match lock.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => return Ok(()),
            Err(TryLockError::Error(error)) => {
                return Err(error).with_context(|| format!("could not lock `{}`", claimed.display()));
            }
        }
        if !claimed.exists() {
            return Ok(());
        }
        let claim = Claim::of(claimed);
        let receipt = if claim.attempts < MOST_ATTEMPTS {
            let again = claimed.with_file_name(Claim { attempts: claim.attempts + 1, ..claim }.file_name());
            fs::rename(claimed, &again)
                .with_context(|| format!("could not take up `{}`", claimed.display()))?;
            file::process(self, &again, registry, metrics, clock)?
        } else {
            file::set_aside(self, claimed, registry, metrics, clock)?
        };
        swept.files += 1;
        swept.not_scored += usize::from(receipt.state != file::FileState::Scored);
        swept.scored_rows += receipt.scored;
        swept.refused_rows += receipt.refused;
        metrics.drop_files.with_label_values(&[self.model.as_str(), receipt.state.name()]).inc();
        Ok(())
    }
}

/// The name of a claimed file: the worker's mark, how often it was taken up, the name it came under.
#[derive(Debug, Clone, PartialEq, Eq)]
struct Claim {
    mark: String,
    attempts: u32,
    original: String,
}

impl Claim {
    fn of(claimed: &Path) -> Self {
        let name = claimed.file_name().unwrap_or_default().to_string_lossy().into_owned();
        let (head, original) = name.split_once(CLAIM_MARK).unwrap_or(("", name.as_str()));
        let (mark, attempts) = head.split_once('.').unwrap_or((head, "0"));
        Self { mark: mark.to_owned(), attempts: attempts.parse().unwrap_or(0), original: original.to_owned() }
    }

    fn file_name(&self) -> String {
        format!("{}.{}{CLAIM_MARK}{}", self.mark, self.attempts, self.original)
    }
}

fn done_mark_of(path: &Path) -> PathBuf {
    let mut marked = path.as_os_str().to_owned();
    marked.push(".done");
    marked.into()
}
