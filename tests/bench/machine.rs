//! What Linux says about the machine and this process. Elsewhere the figures are missing, as NaN.

use std::{fs, time::Duration};

pub fn processor() -> String {
    let text = fs::read_to_string("/proc/cpuinfo").unwrap_or_default();
    let line = text.lines().find(|line| line.starts_with("model name"));
    line.and_then(|line| line.split(": ").nth(1)).unwrap_or("unknown processor").to_owned()
}

pub fn cores() -> usize {
    std::thread::available_parallelism().map_or(1, Into::into)
}

/// Processes that were running or waiting, on average over the last minute.
pub fn load() -> f64 {
    let text = fs::read_to_string("/proc/loadavg").unwrap_or_default();
    text.split(' ').next().and_then(|number| number.parse().ok()).unwrap_or(f64::NAN)
}

/// Processor time that the calling thread has used.
pub fn thread_time() -> Duration {
    let text = fs::read_to_string("/proc/thread-self/schedstat").unwrap_or_default();
    Duration::from_nanos(text.split(' ').next().and_then(|number| number.parse().ok()).unwrap_or(0))
}

/// Processor time that all threads of this process have used, in hundredths of a second's precision.
pub fn process_time() -> Duration {
    let text = fs::read_to_string("/proc/self/stat").unwrap_or_default();
    // The name may hold anything, but ends with the last parenthesis.
    let fields: Vec<&str> = text.rsplit(')').next().unwrap_or("").split_whitespace().collect();
    let ticks = |at: usize| fields.get(at).and_then(|number| number.parse::<u64>().ok()).unwrap_or(0);
    Duration::from_millis(10 * (ticks(11) + ticks(12)))
}

/// Memory of this process that is resident, in bytes.
pub fn resident() -> f64 {
    let text = fs::read_to_string("/proc/self/status").unwrap_or_default();
    let line = text.lines().find(|line| line.starts_with("VmRSS:"));
    line.and_then(|line| line.split_whitespace().nth(1)?.parse::<f64>().ok()).map_or(f64::NAN, |kilobytes| kilobytes * 1024.0)
}
