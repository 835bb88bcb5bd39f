//! Runs the program, its service and requests to it.

use std::io::{BufRead, BufReader};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};

use serde_json::Value;

/// The program under test.
const PROGRAM: &str = env!("CARGO_BIN_EXE_kilter-under-test");

/// What a run of the program left.
#[derive(Debug)]
pub(crate) struct Run {
    pub(crate) code: i32,
    pub(crate) out: String,
    pub(crate) err: String,
}

/// The program, ready to be given arguments.
pub(crate) fn program(folder: &Path) -> Command {
    let mut command = Command::new(PROGRAM);
    command.current_dir(folder).env_remove("RUST_BACKTRACE");
    command
}

/// Runs the program in a folder.
pub(crate) fn kilter(folder: &Path, arguments: &[&str]) -> Run {
    let output = program(folder).args(arguments).output().expect("the program starts");
    Run {
        code: output.status.code().unwrap_or(-1),
        out: String::from_utf8_lossy(&output.stdout).into_owned(),
        err: String::from_utf8_lossy(&output.stderr).into_owned(),
    }
}

/// Runs the program and insists that it ends well.
pub(crate) fn kilter_well(folder: &Path, arguments: &[&str]) -> String {
    let run = kilter(folder, arguments);
    assert_eq!(run.code, 0, "{arguments:?}\n{}\n{}", run.out, run.err);
    run.out
}

/// A folder of the tests' own data.
pub(crate) fn data(set: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("data").join(set)
}

/// A JSON file.
pub(crate) fn json_file(path: &Path) -> Value {
    let text = std::fs::read_to_string(path).unwrap_or_else(|error| panic!("{}: {error}", path.display()));
    serde_json::from_str(&text).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// Writes a file, its folder included.
pub(crate) fn write(path: &Path, text: &str) {
    std::fs::create_dir_all(path.parent().expect("a path in a folder")).expect("a folder");
    std::fs::write(path, text).expect("a file");
}

/// A running service.
#[derive(Debug)]
pub(crate) struct Service {
    child: Child,
    address: String,
}

impl Service {
    /// Starts the service of a folder's `kilter.toml`, which must listen on port 0 of loopback.
    pub(crate) fn start(folder: &Path) -> Self {
        let mut child = program(folder)
            .arg("serve")
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .expect("starts");
        let mut lines = BufReader::new(child.stdout.take().expect("piped")).lines();
        let line = lines.next().expect("a first line").expect("readable");
        let address = line.rsplit(' ').next().unwrap_or_default().trim_end_matches('/').to_owned();
        assert!(address.starts_with("http://127.0.0.1:"), "{line}");
        Self { child, address }
    }

    /// Kills the service at once, as a power cut would.
    pub(crate) fn kill(mut self) {
        self.child.kill().expect("killed");
        self.child.wait().expect("ended");
    }

    /// Asks the service to end, and waits.
    pub(crate) fn stop(mut self) -> i32 {
        let asked = Command::new("kill").arg(self.child.id().to_string()).status().expect("asked");
        assert!(asked.success());
        self.child.wait().expect("ended").code().unwrap_or(-1)
    }

    /// Gets a page or document.
    pub(crate) fn get(&self, path: &str) -> (u16, String) {
        answer(agent().get(format!("{}{path}", self.address)).call())
    }

    /// Posts a body.
    pub(crate) fn post(&self, path: &str, content_type: &str, body: &str) -> (u16, String) {
        let request = agent().post(format!("{}{path}", self.address)).header("content-type", content_type);
        answer(request.send(body))
    }

    /// Posts JSON and reads JSON.
    pub(crate) fn post_json(&self, path: &str, body: &Value) -> (u16, Value) {
        let (status, text) = self.post(path, "application/json", &body.to_string());
        (status, serde_json::from_str(&text).unwrap_or_else(|error| panic!("{error}: {text}")))
    }

    /// Gets JSON, successfully.
    pub(crate) fn get_json(&self, path: &str) -> Value {
        let (status, text) = self.get(path);
        assert_eq!(status, 200, "{path}: {text}");
        serde_json::from_str(&text).unwrap_or_else(|error| panic!("{error}: {text}"))
    }
}

impl Drop for Service {
    fn drop(&mut self) {
        // Already ended where the test did so itself.
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

fn agent() -> ureq::Agent {
    ureq::Agent::config_builder().http_status_as_error(false).build().into()
}

fn answer(response: Result<ureq::http::Response<ureq::Body>, ureq::Error>) -> (u16, String) {
    let mut response = response.expect("an answer");
    let status = response.status().as_u16();
    (status, response.body_mut().read_to_string().expect("a text"))
}
