//! Standard output and standard error that survive a closed pipe.

use std::io::{ErrorKind, Write};
use std::process::ExitCode;

use super::report::Failure;

/// Writes results to standard output. A reader that has gone away is no error.
pub(super) fn say(text: &str) -> Result<(), Failure> {
    let mut out = std::io::stdout().lock();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(error) if error.kind() != ErrorKind::BrokenPipe => {
            Err(Failure::input(format!("standard output: {error}")))
        }
        _ => Ok(()),
    }
}

/// Writes results to standard output and ends well.
pub(super) fn say_and_end(text: &str) -> Result<ExitCode, Failure> {
    say(text)?;
    Ok(ExitCode::SUCCESS)
}

/// Writes a message to standard error; when nobody listens there, nothing can be done.
pub(super) fn tell(text: &str) {
    let _ = writeln!(std::io::stderr().lock(), "{text}");
}
