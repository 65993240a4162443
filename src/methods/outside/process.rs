//! Runs a program in a process group that is ended whole, and keeps the end of what it prints.

use std::io::{self, Read, Write};
use std::path::Path;
use std::process::{Command, Stdio};
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::sync::mpsc::{self, RecvTimeoutError};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

use crate::budget::{Halt, Stopwatch};

/// How often the limits are looked at.
const LOOK: Duration = Duration::from_millis(5);

/// How long the readers of the program's output may take after its end.
const FAREWELL: Duration = Duration::from_millis(500);

/// Variables of the environment that a program inherits, where they are set.
const INHERITED: [&str; 7] =
    ["PATH", "HOME", "LANG", "LC_ALL", "VIRTUAL_ENV", "PYTHONPATH", "LD_LIBRARY_PATH"];

/// Variables that keep numerical libraries to one thread, as every method has one.
const ONE_THREAD: [&str; 4] =
    ["OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "RAYON_NUM_THREADS"];

/// What a program may take.
pub(super) struct Limits {
    /// Processor time of each of its processes, in seconds.
    pub(super) processor_s: u64,
    /// Address space of each of its processes, in bytes.
    pub(super) memory: Option<u64>,
    /// Size of each file it writes, in bytes.
    pub(super) file_bytes: u64,
}

/// How a program is watched.
pub(crate) struct Watch<'a> {
    /// What it reads from standard input.
    pub(crate) input: Vec<u8>,
    /// What it may print, in bytes.
    pub(crate) printed_bytes: u64,
    /// How much of the end of each output is kept, in bytes.
    pub(crate) kept_bytes: usize,
    /// Asked again and again, with the number of bytes printed so far, whether the program must end.
    pub(crate) check: &'a dyn Fn(u64) -> Result<(), Halt>,
}

/// How a program ended.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(crate) enum Ending {
    /// By itself, with this code.
    Exited(i32),
    /// By this signal.
    Signalled(i32),
    /// It was ended because the trial is over.
    Halted(Halt),
    /// It was ended because it printed too much.
    Flood,
}

/// What is known of a program that has ended.
pub(crate) struct Outcome {
    pub(crate) ending: Ending,
    pub(crate) wall: Duration,
    /// Processor time of it and of those of its children that it waited for.
    pub(crate) processor: Option<Duration>,
    /// Largest resident set, in bytes.
    pub(crate) peak_bytes: Option<u64>,
    /// The end of its standard output.
    pub(crate) printed: String,
    complained: String,
}

impl Outcome {
    /// Returns the last line that it wrote to standard error, or else to standard output, for messages.
    pub(crate) fn last_words(&self) -> String {
        let last = |text: &str| {
            text.lines()
                .rev()
                .find(|line| !line.trim().is_empty())
                .map(|line| line.trim().to_owned())
        };
        last(&self.complained)
            .or_else(|| last(&self.printed))
            .map_or(String::new(), |line| format!("; its last words: {line}"))
    }
}

/// The end of an output, and how much there was.
#[derive(Clone, Default)]
struct Tail {
    text: Arc<Mutex<Vec<u8>>>,
    bytes: Arc<AtomicU64>,
    ended: Arc<AtomicBool>,
}

impl Tail {
    /// Reads to the end in a thread of its own, so that the program never waits for a reader.
    fn follow(&self, mut source: impl Read + Send + 'static, kept: usize) {
        let tail = self.clone();
        std::thread::spawn(move || {
            let mut buffer = vec![0; 1 << 16];
            while let Ok(count) = source.read(&mut buffer) {
                if count == 0 {
                    break;
                }
                tail.bytes.fetch_add(count as u64, Ordering::Relaxed);
                let mut text = tail.text.lock().unwrap_or_else(PoisonError::into_inner);
                text.extend_from_slice(&buffer[..count]);
                let surplus = text.len().saturating_sub(kept);
                text.drain(..surplus);
            }
            tail.ended.store(true, Ordering::Release);
        });
    }

    fn text(&self) -> String {
        let text = self.text.lock().unwrap_or_else(PoisonError::into_inner);
        String::from_utf8_lossy(&text).into_owned()
    }
}

/// Returns the shell line that sets the limits and becomes the program.
fn limiting(limits: &Limits) -> String {
    let memory =
        limits.memory.map_or(String::new(), |bytes| format!("ulimit -v {}; ", bytes >> 10));
    // POSIX counts files in units of 512 bytes.
    format!(
        "ulimit -c 0; ulimit -t {}; ulimit -f {}; {memory}exec \"$@\"",
        limits.processor_s,
        limits.file_bytes / 512
    )
}

/// Makes the command that starts `words` with `room` as the last argument under `limits`, in `folder`.
pub(super) fn limited(words: &[String], folder: &Path, room: &Path, limits: &Limits) -> Command {
    let mut shell = Command::new("/bin/sh");
    shell.args(["-c", &limiting(limits), "rankassay-outside"]).args(words).arg(room);
    let here = if folder.as_os_str().is_empty() { Path::new(".") } else { folder };
    shell.current_dir(here).env_clear();
    for name in INHERITED {
        if let Some(value) = std::env::var_os(name) {
            shell.env(name, value);
        }
    }
    shell.env("TMPDIR", room);
    for name in ONE_THREAD {
        shell.env(name, "1");
    }
    shell
}

/// Runs a command until it ends or `watch.check` says that it must.
///
/// # Errors
/// It cannot be started.
#[cfg(unix)]
pub(crate) fn run(command: &mut Command, watch: Watch<'_>) -> io::Result<Outcome> {
    use std::os::unix::process::CommandExt;

    let input = if watch.input.is_empty() { Stdio::null() } else { Stdio::piped() };
    command.process_group(0).stdin(input).stdout(Stdio::piped()).stderr(Stdio::piped());
    let clock = Stopwatch::start();
    let mut child = command.spawn()?;
    let group = child.id() as i32;
    let (printed, complained) = (Tail::default(), Tail::default());
    printed.follow(child.stdout.take().expect("standard output is piped"), watch.kept_bytes);
    complained.follow(child.stderr.take().expect("standard error is piped"), watch.kept_bytes);
    if let Some(mut stdin) = child.stdin.take() {
        let input = watch.input;
        // A program that does not read its input ends in its own way.
        std::thread::spawn(move || stdin.write_all(&input));
    }
    let (sender, receiver) = mpsc::channel();
    std::thread::spawn(move || {
        use wait4::Wait4;
        // Nobody listens any more when the run is over.
        let _ = sender.send(child.wait4());
    });
    let bytes = |tail: &Tail| tail.bytes.load(Ordering::Relaxed);
    let flooding = || bytes(&printed) + bytes(&complained) > watch.printed_bytes;
    let mut forced = None;
    let used = loop {
        match receiver.recv_timeout(LOOK) {
            Ok(used) => break used?,
            Err(RecvTimeoutError::Disconnected) => {
                return Err(io::Error::other("the program was lost"));
            }
            Err(RecvTimeoutError::Timeout) if forced.is_some() => {}
            Err(RecvTimeoutError::Timeout) => {
                forced = match (watch.check)(bytes(&printed)) {
                    Err(halt) => Some(Ending::Halted(halt)),
                    Ok(()) if flooding() => Some(Ending::Flood),
                    Ok(()) => None,
                };
                if forced.is_some() {
                    end_group(group);
                }
            }
        }
    };
    let wall = clock.elapsed();
    // Children that outlive the program go with it.
    end_group(group);
    let farewell = Stopwatch::start();
    let both_ended =
        || [&printed, &complained].iter().all(|tail| tail.ended.load(Ordering::Acquire));
    while !both_ended() && farewell.elapsed() < FAREWELL {
        std::thread::sleep(Duration::from_millis(1));
    }
    let ending = forced.unwrap_or_else(|| {
        use std::os::unix::process::ExitStatusExt;
        match (used.status.code(), used.status.signal()) {
            _ if flooding() => Ending::Flood,
            (Some(code), _) => Ending::Exited(code),
            (None, signal) => Ending::Signalled(signal.unwrap_or(0)),
        }
    });
    Ok(Outcome {
        ending,
        wall,
        processor: Some(used.rusage.utime + used.rusage.stime),
        peak_bytes: Some(used.rusage.maxrss),
        printed: printed.text(),
        complained: complained.text(),
    })
}

/// Kills every process of the group; none being left is as good.
#[cfg(unix)]
fn end_group(group: i32) {
    use nix::sys::signal::{Signal, killpg};
    use nix::unistd::Pid;
    let _ = killpg(Pid::from_raw(group), Signal::SIGKILL);
}

/// Refuses: process groups are those of Unix systems.
#[cfg(not(unix))]
pub(crate) fn run(_command: &mut Command, _watch: Watch<'_>) -> io::Result<Outcome> {
    Err(io::Error::other("other programs are run on Unix systems only"))
}
