//! A PostgreSQL server of the tests' own: Debian's package in a folder that is thrown away.

#![expect(clippy::unwrap_used, reason = "a test that cannot have its server can only fail")]

use std::os::unix::process::CommandExt;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::sync::atomic::{AtomicU32, Ordering};
use std::sync::{Mutex, OnceLock};
use std::time::{Duration, Instant};

use postgres::{Client, NoTls};
use tempfile::TempDir;

/// Waits for its input to end, which it does with the test program, however that ends; then stops
/// the server, and removes its folder unless the test program is still there.
const GUARD: &str = r#""$@" & cat > /dev/null; kill -CONT $!; kill -QUIT $!; wait $!; \
    [ -d "/proc/$TESTS" ] || rm -rf "$FOLDER""#;

/// Of the user, where the server asks for it.
pub const PASSWORD: &str = "quill-and-haven";

/// A server, stopped and thrown away when dropped.
#[derive(Debug)]
pub struct Cluster {
    folder: PathBuf,
    server: Mutex<Child>,
}

/// Where Debian and others put the programs of the server.
fn program(name: &str) -> PathBuf {
    let versions = std::fs::read_dir("/usr/lib/postgresql").into_iter().flatten().filter_map(Result::ok);
    let mut found: Vec<PathBuf> =
        versions.map(|version| version.path().join("bin").join(name)).filter(|path| path.exists()).collect();
    found.sort();
    found.pop().unwrap_or_else(|| name.into())
}

/// A command that runs as another user than root, as which the server refuses to run.
fn command(name: impl AsRef<std::ffi::OsStr>) -> Command {
    let mut command = Command::new(name);
    let number = |arguments: [&str; 2]| -> Option<u32> {
        let output = Command::new("id").args(arguments).output().ok()?;
        String::from_utf8(output.stdout).ok()?.trim().parse().ok()
    };
    if number(["-u", "root"]).is_some() && Command::new("id").arg("-u").output().unwrap().stdout == b"0\n" {
        let missing = "the tests need PostgreSQL's server: apt-get install postgresql";
        command
            .uid(number(["-u", "postgres"]).expect(missing))
            .gid(number(["-g", "postgres"]).expect(missing));
    }
    command
}

impl Cluster {
    /// A server that lets everybody in.
    pub fn start() -> Self {
        Self::start_with("trust")
    }

    /// A server with a way to authenticate.
    pub fn start_with(authentication: &str) -> Self {
        let folder = TempDir::with_prefix("kilter-pg-").unwrap().keep();
        let chown = Command::new("chown").arg("postgres").arg(&folder).stderr(Stdio::null()).status();
        assert!(chown.is_ok());
        let secret = folder.join("password");
        std::fs::write(&secret, format!("{PASSWORD}\n")).unwrap();
        let initialised = command(program("initdb"))
            .args(["--username=postgres", "--encoding=UTF8", "--no-sync", "--locale=C.UTF-8", "--auth"])
            .arg(authentication)
            .arg("--pwfile")
            .arg(secret)
            .arg("-D")
            .arg(folder.join("data"))
            .stdout(Stdio::null())
            .current_dir("/")
            .status()
            .expect("the tests need PostgreSQL's server: apt-get install postgresql");
        assert!(initialised.success());
        let server = Mutex::new(run(&folder));
        let cluster = Self { folder, server };
        cluster.wait();
        cluster
    }

    /// The address of a data base.
    pub fn address(&self, database: &str) -> String {
        let folder = self.folder.to_str().unwrap().replace('/', "%2F");
        format!("postgres://postgres:{PASSWORD}@{folder}/{database}")
    }

    /// A connection to a data base.
    pub fn client(&self, database: &str) -> Client {
        Client::connect(&self.address(database), NoTls).unwrap()
    }

    /// Makes an empty data base and gives its name.
    pub fn new_database(&self) -> String {
        static NUMBER: AtomicU32 = AtomicU32::new(0);
        static ONE_AT_A_TIME: Mutex<()> = Mutex::new(());
        let name = format!("test_{}_{}", std::process::id(), NUMBER.fetch_add(1, Ordering::Relaxed));
        let _turn = ONE_AT_A_TIME.lock().unwrap_or_else(std::sync::PoisonError::into_inner);
        self.client("postgres").batch_execute(&format!("CREATE DATABASE {name}")).unwrap();
        name
    }

    /// Stops the server as a crash would: no checkpoint, no farewell.
    pub fn crash(&self) {
        let mut server = self.server.lock().unwrap();
        drop(server.stdin.take());
        server.wait().unwrap();
    }

    /// Starts it after a crash.
    pub fn start_again(&self) {
        *self.server.lock().unwrap() = run(&self.folder);
        self.wait();
    }

    /// Stops all its processes where they are, or lets them go on.
    pub fn hold(&self, hold: bool) {
        let signal = if hold { "-STOP" } else { "-CONT" };
        let text = std::fs::read_to_string(self.folder.join("data/postmaster.pid")).unwrap();
        let postmaster = text.lines().next().unwrap().to_owned();
        let children: Vec<String> =
            std::fs::read_to_string(format!("/proc/{postmaster}/task/{postmaster}/children"))
                .unwrap()
                .split_whitespace()
                .map(str::to_owned)
                .collect();
        let done = Command::new("kill").arg(signal).arg(&postmaster).args(children).status().unwrap();
        // A child may have ended meanwhile.
        assert!(done.code().is_some());
    }

    fn wait(&self) {
        let begun = Instant::now();
        while let Err(error) = Client::connect(&self.address("postgres"), NoTls) {
            assert!(begun.elapsed() < Duration::from_mins(1), "the server does not start: {error:?}");
            std::thread::sleep(Duration::from_millis(20));
        }
    }
}

fn run(folder: &Path) -> Child {
    let mut child = command("sh")
        .args(["-c", GUARD, "guard"])
        .arg(program("postgres"))
        .arg("-D")
        .arg(folder.join("data"))
        // Processes are killed here, not machines: what the system has been told is kept.
        .args(["-c", "fsync=off", "-c", "listen_addresses=", "-c", "max_connections=400"])
        .args(["-c", "shared_buffers=64MB", "-c", "log_min_messages=fatal", "-k"])
        .arg(folder)
        .env("FOLDER", folder)
        .env("TESTS", std::process::id().to_string())
        .stdin(Stdio::piped())
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .current_dir("/")
        .spawn()
        .unwrap();
    assert!(child.try_wait().unwrap().is_none());
    child
}

impl Drop for Cluster {
    fn drop(&mut self) {
        self.crash();
        let _ = std::fs::remove_dir_all(&self.folder);
    }
}

/// The server that the suite shares.
pub fn shared() -> &'static Cluster {
    static SHARED: OnceLock<Cluster> = OnceLock::new();
    SHARED.get_or_init(Cluster::start)
}
