//! Which processes belong to a trial: those that inherited its folder as their `TMPDIR`, whether or not they are
//! still in the process group. A process that changes this variable of its own escapes; where the system has no
//! `/proc`, nobody is found, and the process group is all there is.

use std::path::Path;

/// Lists the processes of the trial whose folder is `room`.
pub(super) fn members(room: &Path) -> Vec<i32> {
    let mark = [b"TMPDIR=".as_slice(), room.as_os_str().as_encoded_bytes()].concat();
    let Ok(entries) = std::fs::read_dir("/proc") else {
        return Vec::new();
    };
    let numbers = entries.filter_map(|entry| entry.ok()?.file_name().to_str()?.parse::<i32>().ok());
    numbers.filter(|process| carries(*process, &mark)).collect()
}

fn carries(process: i32, mark: &[u8]) -> bool {
    let environment = std::fs::read(format!("/proc/{process}/environ")).unwrap_or_default();
    environment.split(|byte| *byte == 0).any(|variable| variable == mark)
}

/// Ends every process of the trial that is left.
pub(super) fn end_all(room: &Path) {
    #[cfg(unix)]
    {
        use nix::sys::signal::{Signal, kill};
        use nix::unistd::Pid;
        // One that was just starting another may leave it behind: look again until nobody is left.
        for _ in 0..16 {
            let left = members(room);
            if left.is_empty() {
                return;
            }
            for process in left {
                // It may have ended by itself meanwhile.
                let _ = kill(Pid::from_raw(process), Signal::SIGKILL);
            }
            std::thread::sleep(std::time::Duration::from_millis(1));
        }
    }
    #[cfg(not(unix))]
    let _ = room;
}
