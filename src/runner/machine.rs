//! What the run ran on, and when: the only clock readings outside of budgets.

use std::collections::BTreeMap;
use std::time::{Instant, SystemTime, UNIX_EPOCH};

use serde::{Deserialize, Serialize};

/// A machine, as far as it matters to times.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Machine {
    /// Operating system.
    pub system: String,
    /// Instruction set.
    pub architecture: String,
    /// Name of the processor, where the system tells it.
    pub processor: Option<String>,
    /// Vector instructions that dense kernels choose between.
    pub features: Vec<String>,
    /// Cores this process may use.
    pub cores: usize,
    /// Memory of the machine, in bytes.
    pub memory_bytes: Option<u64>,
}

/// Returns the number of cores this process may use, at least one.
pub(super) fn cores() -> usize {
    std::thread::available_parallelism().map_or(1, usize::from)
}

/// Describes this machine.
pub(super) fn describe() -> Machine {
    let cpu = facts("/proc/cpuinfo");
    let memory = facts("/proc/meminfo");
    let kilobytes =
        memory.get("MemTotal").and_then(|text| text.split(' ').next()?.parse::<u64>().ok());
    Machine {
        system: std::env::consts::OS.to_owned(),
        architecture: std::env::consts::ARCH.to_owned(),
        processor: cpu.get("model name").cloned(),
        features: features().into_iter().map(str::to_owned).collect(),
        cores: cores(),
        memory_bytes: kilobytes.map(|kilobytes| kilobytes * 1024),
    }
}

/// Returns the number of processes that ran or wanted to run, averaged over the last minute; none where the
/// system does not tell.
pub(super) fn load_average() -> Option<f64> {
    std::fs::read_to_string("/proc/loadavg").ok()?.split(' ').next()?.parse().ok()
}

/// Processor time spent up to a moment: by all programs, and by this one with the processes it has waited
/// for. The unit of the first is a hundredth of a second.
#[derive(Clone, Copy, Debug)]
pub(super) struct Busy {
    at: Instant,
    all_s: f64,
    own_s: f64,
}

impl Busy {
    /// Reads the counters of the system; none where it has none.
    pub(super) fn now() -> Option<Self> {
        let text = std::fs::read_to_string("/proc/stat").ok()?;
        Some(Busy { at: Instant::now(), all_s: busy_seconds(&text)?, own_s: own_seconds()? })
    }

    /// Returns how many cores other programs kept busy on average since `then`.
    pub(super) fn others_since(&self, then: &Busy) -> Option<f64> {
        let wall = self.at.duration_since(then.at).as_secs_f64();
        let others = (self.all_s - then.all_s) - (self.own_s - then.own_s);
        (wall > 0.0).then(|| (others / wall).max(0.0))
    }
}

/// Sums user, nice, system, interrupt and stolen time of all cores from the first line of `/proc/stat`, whose
/// fields are hundredths of a second (proc(5): user nice system idle iowait irq softirq steal).
fn busy_seconds(stat: &str) -> Option<f64> {
    let fields: Vec<f64> = stat
        .lines()
        .next()?
        .strip_prefix("cpu ")?
        .split_whitespace()
        .map(|field| field.parse().ok())
        .collect::<Option<_>>()?;
    let busy = [0, 1, 2, 5, 6, 7].into_iter().filter_map(|at| fields.get(at)).sum::<f64>();
    Some(busy / 100.0)
}

/// Returns the processor time of this process and of the processes it has waited for.
fn own_seconds() -> Option<f64> {
    #[cfg(unix)]
    {
        use nix::sys::resource::{UsageWho, getrusage};
        use nix::sys::time::TimeValLike;
        let spent = |who| {
            let usage = getrusage(who).ok()?;
            let microseconds =
                usage.user_time().num_microseconds() + usage.system_time().num_microseconds();
            Some(microseconds as f64 * 1e-6)
        };
        Some(spent(UsageWho::RUSAGE_SELF)? + spent(UsageWho::RUSAGE_CHILDREN)?)
    }
    #[cfg(not(unix))]
    None
}

/// Lists the cores that threads of this process can be tied to; none where the system knows no such thing.
pub(super) fn pinnable_cores() -> Vec<usize> {
    #[cfg(target_os = "linux")]
    {
        use nix::sched::{CpuSet, sched_getaffinity};
        use nix::unistd::Pid;
        sched_getaffinity(Pid::from_raw(0)).map_or_else(
            |_| Vec::new(),
            |set| (0..CpuSet::count()).filter(|core| set.is_set(*core).unwrap_or(false)).collect(),
        )
    }
    #[cfg(not(target_os = "linux"))]
    Vec::new()
}

/// Ties the calling thread, and what it starts, to one of `cores`: the `worker`-th, counted around.
pub(super) fn pin(worker: usize, cores: &[usize]) {
    #[cfg(target_os = "linux")]
    if !cores.is_empty() {
        use nix::sched::{CpuSet, sched_setaffinity};
        use nix::unistd::Pid;
        let mut set = CpuSet::new();
        if set.set(cores[worker % cores.len()]).is_ok() {
            // A thread that the system does not tie runs where the system puts it.
            let _ = sched_setaffinity(Pid::from_raw(0), &set);
        }
    }
    #[cfg(not(target_os = "linux"))]
    let _ = (worker, cores);
}

/// Reads `name : value` lines, the first of each name; empty where the system has no such file.
fn facts(path: &str) -> BTreeMap<String, String> {
    let text = std::fs::read_to_string(path).unwrap_or_default();
    let mut facts = BTreeMap::new();
    for line in text.lines() {
        if let Some((name, value)) = line.split_once(':') {
            facts.entry(name.trim().to_owned()).or_insert_with(|| value.trim().to_owned());
        }
    }
    facts
}

/// Lists the vector instructions that dense kernels choose between.
fn features() -> Vec<&'static str> {
    #[allow(unused_mut, reason = "stays empty on other architectures")]
    let mut found = Vec::new();
    #[cfg(target_arch = "x86_64")]
    {
        let known = [
            ("sse4.2", is_x86_feature_detected!("sse4.2")),
            ("avx", is_x86_feature_detected!("avx")),
            ("avx2", is_x86_feature_detected!("avx2")),
            ("fma", is_x86_feature_detected!("fma")),
            ("avx512f", is_x86_feature_detected!("avx512f")),
        ];
        found.extend(known.iter().filter(|(_, has)| *has).map(|(name, _)| *name));
    }
    found
}

/// Returns the time now as `YYYY-MM-DDThh:mm:ssZ`.
pub(super) fn now() -> String {
    let seconds =
        SystemTime::now().duration_since(UNIX_EPOCH).map_or(0, |elapsed| elapsed.as_secs());
    timestamp(seconds)
}

/// Writes seconds since 1970 as a date of the Gregorian calendar, by counting 400-year cycles from
/// 1 March 2000 backwards (the shift by months makes the leap day the last of its year).
fn timestamp(seconds: u64) -> String {
    const CYCLE: u64 = 146_097;
    let (day, second) = (seconds / 86_400, seconds % 86_400);
    // 719,468 days lie between 1 March of year 0 and 1 January 1970.
    let shifted = day + 719_468;
    let (cycle, day_of_cycle) = (shifted / CYCLE, shifted % CYCLE);
    let year_of_cycle =
        (day_of_cycle - day_of_cycle / 1460 + day_of_cycle / 36_524 - day_of_cycle / 146_096) / 365;
    let day_of_year =
        day_of_cycle - (365 * year_of_cycle + year_of_cycle / 4 - year_of_cycle / 100);
    let shifted_month = (5 * day_of_year + 2) / 153;
    let day_of_month = day_of_year - (153 * shifted_month + 2) / 5 + 1;
    let month = if shifted_month < 10 { shifted_month + 3 } else { shifted_month - 9 };
    let year = year_of_cycle + cycle * 400 + u64::from(month <= 2);
    let (hour, minute, second) = (second / 3600, second / 60 % 60, second % 60);
    format!("{year:04}-{month:02}-{day_of_month:02}T{hour:02}:{minute:02}:{second:02}Z")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_load_of_other_programs_is_what_this_one_did_not_spend() {
        let stat = "cpu  100 20 30 5000 7 1 2 40 9 9\ncpu0 50 10 15 2500 3 0 1 20 4 4\n";
        assert_eq!(busy_seconds(stat), Some((100 + 20 + 30 + 1 + 2 + 40) as f64 / 100.0));
        assert_eq!(busy_seconds("intr 5"), None);
        let at = Instant::now();
        let then = Busy { at, all_s: 100.0, own_s: 3.0 };
        let now = Busy { at: at + std::time::Duration::from_secs(10), all_s: 125.0, own_s: 13.0 };
        assert_eq!(now.others_since(&then), Some(1.5));
        assert_eq!(then.others_since(&then), None);
    }

    #[test]
    fn timestamps_follow_the_calendar() {
        // Reference values from `date -u -d @N`.
        for (seconds, expected) in [
            (0, "1970-01-01T00:00:00Z"),
            (951_782_399, "2000-02-28T23:59:59Z"),
            (951_782_400, "2000-02-29T00:00:00Z"),
            (1_709_210_096, "2024-02-29T12:34:56Z"),
            (1_735_689_599, "2024-12-31T23:59:59Z"),
            (4_107_542_400, "2100-03-01T00:00:00Z"),
        ] {
            assert_eq!(timestamp(seconds), expected);
        }
    }
}
