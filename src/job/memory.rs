//! What a run takes of the machine's memory.

/// Largest resident memory of this process so far, MiB; nothing where the system does not say.
///
/// Linux keeps the figure as `VmHWM` (kB) in `/proc/self/status` (proc_pid_status(5)).
#[must_use]
pub fn peak_mib() -> Option<f64> {
    if !cfg!(target_os = "linux") {
        return None;
    }
    kilobytes(&std::fs::read_to_string("/proc/self/status").ok()?)
        .map(|kilobytes| kilobytes / 1024.0)
}

fn kilobytes(status: &str) -> Option<f64> {
    status
        .lines()
        .find_map(|line| line.strip_prefix("VmHWM:"))?
        .trim()
        .strip_suffix("kB")?
        .trim_end()
        .parse()
        .ok()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_line_is_found_and_read() {
        let status = "Name:\tthalweg\nVmPeak:\t  300000 kB\nVmHWM:\t   43210 kB\n";
        assert_eq!(kilobytes(status), Some(43210.0));
        assert_eq!(kilobytes("Name:\tthalweg\n"), None);
    }

    #[test]
    #[cfg(target_os = "linux")]
    fn memory_that_was_touched_is_counted() {
        let block = vec![1u8; 64 << 20];
        assert!(block.iter().step_by(4096).all(|&b| b == 1));
        assert!(peak_mib().is_some_and(|peak| peak > 64.0));
    }
}
