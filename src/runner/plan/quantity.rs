//! Durations and sizes as plans write them: a decimal number and a unit.

use std::time::Duration;

/// What a duration looks like, for messages.
pub(super) const DURATION: &str =
    "a duration above zero such as \"20s\", \"500ms\", \"2min\" or \"1h\"";

/// What a size looks like, for messages.
pub(super) const SIZE: &str = "a size above zero such as \"2 GiB\", \"512 MiB\" or \"64 MB\"";

fn split(text: &str) -> Option<(f64, &str)> {
    let text = text.trim();
    let end = text.find(|c: char| !(c.is_ascii_digit() || c == '.')).unwrap_or(text.len());
    let number: f64 = text[..end].parse().ok()?;
    (number.is_finite() && number > 0.0).then_some((number, text[end..].trim_start()))
}

/// Reads a duration: a number and one of `ms`, `s`, `min`, `h`. At most 1000 hours.
pub(super) fn duration(text: &str) -> Option<Duration> {
    let (number, unit) = split(text)?;
    let seconds = match unit {
        "ms" => number * 1e-3,
        "s" => number,
        "min" => number * 60.0,
        "h" => number * 3600.0,
        _ => return None,
    };
    (1e-3..=3.6e6).contains(&seconds).then(|| Duration::from_secs_f64(seconds))
}

/// Reads a size in bytes: a number and one of `B`, `kB`, `MB`, `GB`, `KiB`, `MiB`, `GiB`, `TiB`.
pub(super) fn size(text: &str) -> Option<u64> {
    let (number, unit) = split(text)?;
    let factor: f64 = match unit {
        "B" => 1.0,
        "kB" => 1e3,
        "MB" => 1e6,
        "GB" => 1e9,
        "KiB" => 1024.0,
        "MiB" => 1024.0 * 1024.0,
        "GiB" => 1024.0 * 1024.0 * 1024.0,
        "TiB" => 1024.0 * 1024.0 * 1024.0 * 1024.0,
        _ => return None,
    };
    let bytes = number * factor;
    // 2^53 bytes is the last size that a double counts exactly.
    (1.0..=9_007_199_254_740_992.0).contains(&bytes).then_some(bytes as u64)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn durations_have_a_number_and_a_unit() {
        assert_eq!(duration("20s"), Some(Duration::from_secs(20)));
        assert_eq!(duration("500 ms"), Some(Duration::from_millis(500)));
        assert_eq!(duration("1.5min"), Some(Duration::from_secs(90)));
        for bad in ["", "20", "s", "-3s", "0s", "20 sec", "1..5s", "infs", "99999h"] {
            assert_eq!(duration(bad), None, "{bad}");
        }
    }

    #[test]
    fn sizes_have_a_number_and_a_unit() {
        assert_eq!(size("2 GiB"), Some(2 << 30));
        assert_eq!(size("1.5MiB"), Some(3 << 19));
        assert_eq!(size("64 MB"), Some(64_000_000));
        for bad in ["", "2", "GiB", "2 gib", "0 B", "-1 MB", "1e3 B", "99999999 TiB"] {
            assert_eq!(size(bad), None, "{bad}");
        }
    }
}
