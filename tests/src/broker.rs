//! A real Mosquitto on a free port, with its own folder, that can be killed and started again.

use std::fs;
use std::net::TcpStream;
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

use tempfile::TempDir;

use crate::{PATIENCE, free_port};

/// A Mosquitto broker on loopback. Sessions and retained messages outlive a restart.
pub struct Broker {
    folder: TempDir,
    port: u16,
    process: Option<Child>,
}

impl Broker {
    /// Starts a broker on a free port.
    ///
    /// # Panics
    /// Mosquitto is not installed, or does not come up.
    #[must_use]
    pub fn start() -> Self {
        let folder = tempfile::tempdir().expect("a temporary folder");
        let port = free_port();
        // Saved on every change: what a client was acknowledged must outlive a kill.
        let mut config = format!(
            "listener {port} 127.0.0.1\nallow_anonymous true\npersistence true\npersistence_location {}/\n\
             autosave_on_changes true\nautosave_interval 1\nmax_queued_messages 0\nlog_dest file {}\n",
            folder.path().display(),
            folder.path().join("broker.log").display(),
        );
        if rustix::process::geteuid().is_root() {
            // Else it drops to its own user, cannot write its folder, and forgets every session without a word.
            config.push_str("user root\n");
        }
        fs::write(folder.path().join("mosquitto.conf"), config)
            .expect("the broker's configuration");
        let mut broker = Self {
            folder,
            port,
            process: None,
        };
        broker.restart();
        broker
    }

    /// Where it listens on loopback.
    #[must_use]
    pub fn port(&self) -> u16 {
        self.port
    }

    /// Its address in the form the site file wants.
    #[must_use]
    pub fn url(&self) -> String {
        format!("mqtt://127.0.0.1:{}", self.port)
    }

    /// Ends the broker without warning, as a power cut would.
    pub fn kill(&mut self) {
        if let Some(mut process) = self.process.take() {
            process.kill().expect("the broker runs");
            process.wait().expect("the broker ends");
        }
    }

    /// Ends the broker in good order: all it has confirmed is in its file. (Mosquitto 2.0 saves now and then only, also with
    /// `autosave_on_changes`: after [`Broker::kill`] messages that it confirmed and did not deliver may be gone.)
    ///
    /// # Panics
    /// It does not end.
    pub fn stop(&mut self) {
        if let Some(mut process) = self.process.take() {
            let pid = rustix::process::Pid::from_child(&process);
            rustix::process::kill_process(pid, rustix::process::Signal::TERM)
                .expect("the broker runs");
            process.wait().expect("the broker ends");
        }
    }

    /// Starts the broker again on the same port with what it kept.
    ///
    /// # Panics
    /// It does not listen within a minute.
    pub fn restart(&mut self) {
        self.kill();
        let process = Command::new(program())
            .arg("-c")
            .arg(self.folder.path().join("mosquitto.conf"))
            .stdout(Stdio::null())
            .stderr(Stdio::null())
            .spawn()
            .expect("mosquitto is missing: tests/run installs it");
        self.process = Some(process);
        let start = Instant::now();
        while TcpStream::connect(("127.0.0.1", self.port)).is_err() {
            let log = || fs::read_to_string(self.folder.path().join("broker.log"));
            assert!(
                start.elapsed() < PATIENCE,
                "the broker does not listen: {:?}",
                log()
            );
            std::thread::sleep(Duration::from_millis(20));
        }
    }
}

impl Drop for Broker {
    fn drop(&mut self) {
        self.kill();
    }
}

/// Debian keeps the broker in /usr/sbin, which is not on everybody's path.
fn program() -> &'static str {
    let system = "/usr/sbin/mosquitto";
    if Path::new(system).exists() {
        system
    } else {
        "mosquitto"
    }
}
