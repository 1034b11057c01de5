//! What the command-line tests stand on: the program as child processes that never outlive their test, short
//! sequences, worlds with faults, and instruments asked past the program. Asserts nothing about the program.

use std::fs::{self, File};
use std::io::{BufRead, BufReader, Read};
use std::os::unix::process::{CommandExt, ExitStatusExt};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, ExitStatus, Stdio};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use darkline::journal;
use darkline_core::entry::{Entry, EntryKind, State};
use darkline_drivers::link::{Address, BoxStream, Dial};
use rustix::process::{Pid, Signal, kill_process, kill_process_group};
use serde_json::Value;
use tempfile::TempDir;
use tokio::io::{AsyncReadExt, AsyncWriteExt};

/// Far longer than anything here takes, on the busiest machine: what is still running then hangs.
pub const PATIENCE: Duration = Duration::from_secs(240);

/// A shipped file of the repository.
pub fn shipped(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join(name)
}

/// A coil scan of so many currents; each takes about a quarter of a second. Where `count` is small it is a
/// whole scan; where it is large the test ends it early.
pub fn sequence(count: u32) -> String {
    sequence_of(count, "40 ms")
}

/// The same with sweeps of this duration, up and down, twice each.
pub fn sequence_of(count: u32, duration: &str) -> String {
    format!(
        r#"
title = "Short"

[set]
"control.frequency" = "80 MHz"
"control.power"     = "0 dBm"
"control.output"    = "on"
"probe.power"       = "-3 dBm"
"probe.output"      = "on"
"coil.output"       = "on"

[[step]]
quantity = "coil.current"
from     = "-20 mA"
to       = "20 mA"
count    = {count}
order    = "rising"
settle   = {{ within = "20 uA", readings = 3, at_least = "20 ms", give_up = "20 s" }}

[sweep]
quantity  = "probe.frequency"
centre    = "80 MHz"
span      = "120 kHz"
duration  = "{duration}"
direction = "both"
record    = {{ signal = "scope.ch1", reference = "scope.ch2", lock = "scope.ch3" }}
samples   = 200
averages  = 2

[[guard]]
quantity  = "lock.level"
between   = ["0.4 V", "0.8 V"]
otherwise = "wait"
give_up   = "10 min"

[[guard]]
signal    = "lock"
between   = ["0.4 V", "0.8 V"]
otherwise = "repeat"
attempts  = 5

[resonance]
shape  = "lorentzian"
follow = false
"#
    )
}

/// A folder of one test's own, and the files in it.
pub struct Desk {
    folder: TempDir,
}

impl Desk {
    pub fn new() -> Self {
        Self {
            folder: tempfile::tempdir().unwrap(),
        }
    }

    /// Path of a file here, whether it exists or not.
    pub fn path(&self, name: &str) -> PathBuf {
        self.folder.path().join(name)
    }

    /// Writes a file here.
    pub fn write(&self, name: &str, text: impl AsRef<[u8]>) -> PathBuf {
        let path = self.path(name);
        fs::write(&path, text).unwrap();
        path
    }

    /// The shipped world with these faults, and `more` at its end.
    pub fn world(&self, faults: &[&str], more: &str) -> PathBuf {
        let mut text = fs::read_to_string(shipped("mock/world.toml")).unwrap();
        text.push('\n');
        text.push_str(more);
        for fault in faults {
            text.push_str(&format!("\n[[fault]]\nwhat = \"{fault}\"\n"));
        }
        self.write("world.toml", text)
    }

    /// `darkline scan` of this sequence, with its run folder below here.
    pub fn scan(&self, sequence: &str) -> Command {
        let mut command = darkline(&["scan"]);
        command.arg(self.write("sequence.toml", sequence));
        command.arg("--bench").arg(shipped("mock/bench.toml"));
        command.arg("--into").arg(self.runs());
        command.arg("--json");
        command
    }

    pub fn runs(&self) -> PathBuf {
        self.path("runs")
    }

    /// The one run folder, once it is there.
    pub fn run_folder(&self) -> Option<PathBuf> {
        let mut entries = fs::read_dir(self.runs()).ok()?;
        Some(entries.next()?.unwrap().path())
    }

    /// Waits until the run has completed `points` points. Whoever runs it is still at it then.
    pub fn wait_for_points(&self, running: &mut Running, points: usize) -> PathBuf {
        let since = Instant::now();
        loop {
            if let Some(folder) = self.run_folder()
                && completed_points(&folder) >= points
            {
                return folder;
            }
            if let Some(status) = running.child.try_wait().unwrap() {
                panic!(
                    "ended with {status} before {points} points were done: {}",
                    running.error_so_far()
                );
            }
            assert!(since.elapsed() < PATIENCE, "no {points} points in time");
            std::thread::sleep(Duration::from_millis(20));
        }
    }
}

/// The program with these arguments, without colour, reading nothing.
pub fn darkline(arguments: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_darkline"));
    command
        .args(arguments)
        .env("NO_COLOR", "1")
        .env_remove("DARKLINE_LOG")
        .stdin(Stdio::null());
    command
}

/// A running program. It is killed with this value.
pub struct Running {
    child: Child,
    output: Option<JoinHandle<String>>,
    error: Option<PathBuf>,
    _kept: Option<TempDir>,
}

/// How a program ended, and what it said.
#[derive(Debug)]
pub struct Ended {
    pub status: ExitStatus,
    pub output: String,
    pub error: String,
}

impl Running {
    /// Starts it in a process group of its own, with its words kept.
    pub fn start(mut command: Command) -> Self {
        let kept = tempfile::tempdir().unwrap();
        let error = kept.path().join("stderr");
        let mut child = command
            .process_group(0)
            .stdout(Stdio::piped())
            .stderr(File::create(&error).unwrap())
            .spawn()
            .unwrap();
        let mut output = child.stdout.take().unwrap();
        let reading = std::thread::spawn(move || {
            let mut bytes = Vec::new();
            let _ = output.read_to_end(&mut bytes);
            String::from_utf8_lossy(&bytes).into_owned()
        });
        Self {
            child,
            output: Some(reading),
            error: Some(error),
            _kept: Some(kept),
        }
    }

    /// Starts it with both outputs as pipes that the caller reads, or closes.
    pub fn start_piped(mut command: Command) -> (Self, impl Read, impl Read) {
        let mut child = command
            .process_group(0)
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .unwrap();
        let (output, error) = (child.stdout.take().unwrap(), child.stderr.take().unwrap());
        let running = Self {
            child,
            output: None,
            error: None,
            _kept: None,
        };
        (running, output, error)
    }

    pub fn id(&self) -> i32 {
        i32::try_from(self.child.id()).unwrap()
    }

    pub fn is_running(&mut self) -> bool {
        self.child.try_wait().unwrap().is_none()
    }

    /// Sends a signal to it alone.
    pub fn signal(&self, signal: Signal) {
        kill_process(Pid::from_raw(self.id()).unwrap(), signal).unwrap();
    }

    /// Sends a signal to it and its children in its group, as a terminal does at Ctrl-C.
    pub fn signal_group(&self, signal: Signal) {
        // The group is gone where it has just ended.
        let _ = kill_process_group(Pid::from_raw(self.id()).unwrap(), signal);
    }

    /// Whether it has a child that runs with this argument.
    pub fn has_child(&self, argument: &str) -> bool {
        let processes = fs::read_dir("/proc").unwrap().flatten();
        let children = processes.filter(|process| {
            let stat = fs::read_to_string(process.path().join("stat")).unwrap_or_default();
            // After the name in brackets: state, parent.
            let fields = stat.rsplit(')').next().unwrap_or_default();
            fields.split_whitespace().nth(1) == Some(self.id().to_string().as_str())
        });
        children.into_iter().any(|child| {
            let line = fs::read(child.path().join("cmdline")).unwrap_or_default();
            line.split(|byte| *byte == 0)
                .any(|word| word == argument.as_bytes())
        })
    }

    pub fn error_so_far(&self) -> String {
        let path = self.error.as_ref().unwrap();
        String::from_utf8_lossy(&fs::read(path).unwrap()).into_owned()
    }

    /// Waits for its end.
    pub fn finish(mut self) -> Ended {
        let since = Instant::now();
        let status = loop {
            if let Some(status) = self.child.try_wait().unwrap() {
                break status;
            }
            if since.elapsed() > PATIENCE {
                let said = self.error.is_some().then(|| self.error_so_far());
                panic!("still running after {PATIENCE:?}: {said:?}");
            }
            std::thread::sleep(Duration::from_millis(20));
        };
        Ended {
            status,
            output: self
                .output
                .take()
                .map_or_else(String::new, |reading| reading.join().unwrap()),
            error: match self.error {
                Some(_) => self.error_so_far(),
                None => String::new(),
            },
        }
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        // Reaped already where `finish` was waited for: then this does nothing.
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

/// Runs a program to its end.
pub fn run(command: Command) -> Ended {
    Running::start(command).finish()
}

impl Ended {
    /// Asserts the exit code: by itself, not by a signal or a panic.
    #[track_caller]
    pub fn assert_code(&self, code: i32) -> &Self {
        assert_eq!(
            (self.status.code(), self.status.signal()),
            (Some(code), None),
            "{self:#?}"
        );
        assert!(!self.error.contains("panicked"), "{self:#?}");
        self
    }

    /// Asserts words on standard error.
    #[track_caller]
    pub fn assert_says(&self, words: &[&str]) -> &Self {
        for word in words {
            assert!(
                self.error.contains(word),
                "`{word}` is missing in\n{}",
                self.error
            );
        }
        self
    }

    /// The last line of standard output as JSON; nothing but whole lines stands before it.
    #[track_caller]
    pub fn json(&self) -> Value {
        let last = self.output.lines().last().unwrap_or_default();
        let value: Value = serde_json::from_str(last).unwrap_or_else(|error| {
            panic!("{error} in the last line of standard output: {self:#?}")
        });
        assert!(value.is_object(), "{value}");
        value
    }
}

/// A mock bench in a process of its own: it outlives the scans on it, so that its instruments can be asked.
pub struct Instruments {
    _serving: Running,
    /// The file for `--links`.
    pub links: PathBuf,
    addresses: Vec<(String, Address)>,
}

impl Instruments {
    /// Serves the shipped world.
    pub fn serve(desk: &Desk) -> Self {
        let (serving, output, _) = Running::start_piped(darkline(&["mock", "--json"]));
        let mut line = String::new();
        BufReader::new(output).read_line(&mut line).unwrap();
        let listing: Value = serde_json::from_str(&line).unwrap();
        let addresses = listing["instruments"]
            .as_array()
            .unwrap()
            .iter()
            .map(|one| {
                let address = one["address"].as_str().unwrap().parse().unwrap();
                (one["name"].as_str().unwrap().to_owned(), address)
            })
            .collect();
        Self {
            _serving: serving,
            links: desk.write("links.json", line),
            addresses,
        }
    }

    /// Asks an instrument past the program, over a link of its own.
    pub fn ask(&self, name: &str, query: &str) -> String {
        let address = &self.addresses.iter().find(|one| one.0 == name).unwrap().1;
        let runtime = tokio::runtime::Builder::new_current_thread()
            .enable_all()
            .build()
            .unwrap();
        runtime.block_on(async {
            let mut stream = address.dial().await.unwrap();
            let asking = exchange(&mut stream, query);
            let reply = tokio::time::timeout(Duration::from_secs(30), asking).await;
            reply.unwrap_or_else(|_| panic!("`{name}` does not answer `{query}`"))
        })
    }

    /// Asserts that no light is driven and no current flows, as the instruments themselves say.
    #[track_caller]
    pub fn assert_dark(&self) {
        for name in ["probe", "control", "coil"] {
            assert_eq!(self.ask(name, "OUTP?"), "0", "{name}");
        }
        let setpoint: f64 = self.ask("coil", "CURR?").parse().unwrap();
        assert_eq!(setpoint, 0.0);
        let current: f64 = self.ask("coil", "MEAS:CURR?").parse().unwrap();
        assert!(current.abs() < 1e-4, "{current} A flow");
    }

    /// Asserts that the scan does drive them: what is dark later was not dark before.
    #[track_caller]
    pub fn assert_lit(&self) {
        for name in ["probe", "control"] {
            assert_eq!(self.ask(name, "OUTP?"), "1", "{name}");
        }
    }
}

async fn exchange(stream: &mut BoxStream, query: &str) -> String {
    stream
        .write_all(format!("{query}\n").as_bytes())
        .await
        .unwrap();
    stream.flush().await.unwrap();
    let mut reply = Vec::new();
    while reply.last() != Some(&b'\n') {
        reply.push(stream.read_u8().await.unwrap());
    }
    String::from_utf8(reply).unwrap().trim().to_owned()
}

/// What a journal says, as far as it is whole.
pub fn entries(folder: &Path) -> Vec<Entry> {
    journal::records(folder).map_or_else(
        |_| Vec::new(),
        |records| {
            records
                .map_while(Result::ok)
                .map(|record| record.entry)
                .collect()
        },
    )
}

pub fn completed_points(folder: &Path) -> usize {
    entries(folder)
        .iter()
        .filter(|entry| matches!(entry.kind, EntryKind::Point(_)))
        .count()
}

/// Asserts that a run folder is readable and ended so: its journal is whole, and `rebuild` makes the very
/// archive of it that the scan left.
#[track_caller]
pub fn assert_readable(folder: &Path, state: State) {
    let read: Result<Vec<_>, _> = journal::records(folder).unwrap().collect();
    let last = read.unwrap().pop().unwrap().entry.kind;
    assert!(
        matches!(last, EntryKind::Closed { state: closed, .. } if closed == state),
        "{last:?}"
    );
    let archive = folder.join("run.h5");
    let left = fs::read(&archive).unwrap();
    let mut command = darkline(&["rebuild"]);
    command.arg(folder);
    let rebuilt = run(command);
    rebuilt.assert_code(0);
    assert_eq!(rebuilt.output.trim(), archive.display().to_string());
    assert!(fs::read(&archive).unwrap() == left, "another archive");
    assert!(left.starts_with(b"\x89HDF\r\n\x1a\n"));
    for name in ["bench.toml", "sequence.toml", "wire.jsonl"] {
        assert!(folder.join(name).is_file(), "{name}");
    }
    for line in fs::read_to_string(folder.join("wire.jsonl"))
        .unwrap()
        .lines()
    {
        serde_json::from_str::<Value>(line).unwrap();
    }
}

/// A port of the loopback on which nobody listens.
pub fn closed_port() -> u16 {
    let listener = std::net::TcpListener::bind("127.0.0.1:0").unwrap();
    listener.local_addr().unwrap().port()
}
