//! The built `borewake` program: run to its end, or run as the daemon and killed, stopped or asked.

use std::ffi::OsStr;
use std::fs::{self, File};
use std::os::unix::process::ExitStatusExt as _;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, ExitStatus, Stdio};
use std::sync::OnceLock;
use std::time::Instant;

use rustix::process::{Pid, Signal, kill_process};

use crate::{PATIENCE, root, until};

/// What a command printed and how it ended.
#[derive(Debug)]
pub struct Output {
    /// Exit code; `None` when a signal ended it.
    pub code: Option<i32>,
    /// Standard output.
    pub stdout: String,
    /// Standard error.
    pub stderr: String,
}

impl Output {
    /// Standard output as one JSON document.
    ///
    /// # Panics
    /// It is none.
    #[must_use]
    pub fn json(&self) -> serde_json::Value {
        serde_json::from_str(&self.stdout).unwrap_or_else(|e| panic!("no JSON ({e}): {self:?}"))
    }

    /// The same output, once it is sure that the command did what was asked.
    ///
    /// # Panics
    /// The exit code is not 0.
    #[must_use]
    pub fn done(self) -> Self {
        assert_eq!(self.code, Some(0), "{self:#?}");
        self
    }
}

/// Runs `borewake` with arguments to its end.
pub fn borewake<A: AsRef<OsStr>>(arguments: &[A]) -> Output {
    borewake_in(&root(), arguments)
}

/// Runs `borewake` with arguments to its end, in a folder.
pub fn borewake_in<A: AsRef<OsStr>>(folder: &Path, arguments: &[A]) -> Output {
    let output = Command::new(program())
        .args(arguments)
        .current_dir(folder)
        .stdin(Stdio::null())
        .output()
        .expect("borewake starts");
    Output {
        code: output.status.code(),
        stdout: String::from_utf8_lossy(&output.stdout).into_owned(),
        stderr: String::from_utf8_lossy(&output.stderr).into_owned(),
    }
}

/// The program built beside this test, built now where it is not there yet.
///
/// # Panics
/// It does not build.
#[must_use]
pub fn program() -> &'static Path {
    static PROGRAM: OnceLock<PathBuf> = OnceLock::new();
    PROGRAM.get_or_init(|| {
        // target/<profile>/deps/<this test>
        let test = std::env::current_exe().expect("the test knows its own path");
        let built = test
            .ancestors()
            .nth(2)
            .expect("tests lie in target/<profile>/deps")
            .join("borewake");
        // A test run by itself must not find the program as it was before the last change.
        let status = Command::new(env!("CARGO"))
            .args(["build", "--quiet", "--workspace", "--bins"])
            .current_dir(root())
            .status()
            .expect("cargo starts");
        assert!(status.success(), "borewake does not build");
        built
    })
}

/// A running `borewake run SITE`.
pub struct Daemon {
    site: PathBuf,
    log: PathBuf,
    process: Child,
}

impl Daemon {
    /// Starts the daemon on a site file; its log is appended to `daemon.log` beside it.
    ///
    /// # Panics
    /// It cannot be started.
    #[must_use]
    pub fn spawn(site: &Path) -> Self {
        let log = site.with_file_name("daemon.log");
        let file = File::options()
            .create(true)
            .append(true)
            .open(&log)
            .expect("a log file");
        let process = Command::new(program())
            .arg("run")
            .arg(site)
            .current_dir(site.parent().expect("a site file lies in a folder"))
            .stdin(Stdio::null())
            .stdout(file.try_clone().expect("the log file"))
            .stderr(file)
            .spawn()
            .expect("borewake starts");
        Self {
            site: site.to_path_buf(),
            log,
            process,
        }
    }

    /// Starts the daemon and waits until it answers.
    pub async fn start(site: &Path) -> Self {
        let mut daemon = Self::spawn(site);
        daemon.ready().await;
        daemon
    }

    /// Waits until the daemon answers on its control socket.
    pub async fn ready(&mut self) {
        until("the daemon to answer", async || {
            if let Some(status) = self.process.try_wait().expect("a child can be waited for") {
                panic!("the daemon ended with {status}:\n{}", self.log());
            }
            (borewake(&[OsStr::new("alarms"), self.site.as_os_str()]).code == Some(0)).then_some(())
        })
        .await;
    }

    /// What the daemon has logged so far, over all starts on this site file.
    #[must_use]
    pub fn log(&self) -> String {
        fs::read_to_string(&self.log).unwrap_or_default()
    }

    /// Ends the daemon without warning, as a power cut would.
    pub fn kill(mut self) {
        self.process.kill().expect("the daemon runs");
        let status = self.process.wait().expect("the daemon ends");
        assert_eq!(
            status.signal(),
            Some(9),
            "the daemon ended by itself:\n{}",
            self.log()
        );
    }

    /// Sends a signal and waits for the end.
    ///
    /// # Panics
    /// The daemon does not end within a minute.
    pub fn stop(mut self, signal: Signal) -> ExitStatus {
        let pid = i32::try_from(self.process.id())
            .ok()
            .and_then(Pid::from_raw)
            .expect("a process number");
        kill_process(pid, signal).expect("the daemon runs");
        let start = Instant::now();
        loop {
            if let Some(status) = self.process.try_wait().expect("a child can be waited for") {
                return status;
            }
            assert!(
                start.elapsed() < PATIENCE,
                "the daemon does not stop:\n{}",
                self.log()
            );
            std::thread::sleep(std::time::Duration::from_millis(20));
        }
    }
}

impl Drop for Daemon {
    fn drop(&mut self) {
        if std::thread::panicking() {
            eprintln!("log of the daemon:\n{}", self.log());
        }
        // Already ended ones give an error that does not matter.
        let _ = self.process.kill();
        let _ = self.process.wait();
    }
}
