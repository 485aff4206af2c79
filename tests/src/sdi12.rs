//! An SDI-12 line on the far end of a pty, behind an adapter that makes the break itself.

use std::collections::BTreeMap;
use std::fs::File;
use std::sync::{Arc, Mutex};
use std::time::Duration;

use tokio::io::{AsyncReadExt as _, AsyncWriteExt as _};
use tokio::task::JoinHandle;

/// Values a sensor gives, by its address.
type Values = Arc<Mutex<BTreeMap<char, Vec<f64>>>>;

/// Sensors that answer `a!`, `aI!`, `aM!`, `aC!` and `aD0!`.
pub struct Sdi12Line {
    path: String,
    values: Values,
    _near: File,
    task: JoinHandle<()>,
}

impl Sdi12Line {
    /// Starts a line on a new pty.
    ///
    /// # Panics
    /// The system gives no pty.
    #[must_use]
    pub fn start() -> Self {
        let (mut far, near, path) = crate::pty::open();
        let values = Values::default();
        let held = Arc::clone(&values);
        let task = tokio::spawn(async move {
            let mut heard = String::new();
            while let Ok(byte) = far.read_u8().await {
                if byte != b'!' {
                    heard.push(char::from(byte));
                    continue;
                }
                let command = std::mem::take(&mut heard);
                let answers = answer(&command, &held);
                for text in answers {
                    let _ = far.write_all(format!("{text}\r\n").as_bytes()).await;
                    tokio::time::sleep(Duration::from_millis(50)).await;
                }
            }
        });
        Self {
            path,
            values,
            _near: near,
            task,
        }
    }

    /// The serial device to name in the site file.
    #[must_use]
    pub fn path(&self) -> &str {
        &self.path
    }

    /// Sets what a sensor gives; it is there from then on.
    ///
    /// # Panics
    /// A test thread panicked.
    pub fn set(&self, address: char, values: &[f64]) {
        let mut held = self.values.lock().expect("no test thread panicked");
        held.insert(address, values.to_vec());
    }
}

impl Drop for Sdi12Line {
    fn drop(&mut self) {
        self.task.abort();
    }
}

/// What is said to a command: the answer, and the service request after it.
fn answer(command: &str, held: &Values) -> Vec<String> {
    let held = held.lock().expect("no test thread panicked");
    let Some((address, body)) = command.split_at_checked(1) else {
        return Vec::new();
    };
    let address = address.chars().next().expect("one letter");
    let Some(values) = held.get(&address) else {
        return Vec::new();
    };
    let count = values.len();
    match body {
        "" => vec![address.to_string()],
        "I" => vec![format!("{address}14INVENTEDPIEZO 10")],
        "M" => vec![format!("{address}001{count}"), address.to_string()],
        "C" => vec![format!("{address}000{count:02}")],
        "D0" => {
            let values: String = values.iter().map(|v| format!("{v:+}")).collect();
            vec![format!("{address}{values}")]
        }
        _ => Vec::new(),
    }
}
