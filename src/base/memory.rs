//! What the system says of this process's memory.

/// Largest resident size this process has reached, in bytes; `None` where the system does not say.
pub fn peak_bytes() -> Option<u64> {
    status_line("VmHWM:")
}

/// Resident size now, in bytes.
pub fn resident_bytes() -> Option<u64> {
    status_line("VmRSS:")
}

/// What the system could still give without swapping, in bytes.
pub fn available_bytes() -> Option<u64> {
    line_of("/proc/meminfo", "MemAvailable:")
}

fn status_line(label: &str) -> Option<u64> {
    line_of("/proc/self/status", label)
}

fn line_of(path: &str, label: &str) -> Option<u64> {
    let text = std::fs::read_to_string(path).ok()?;
    let line = text.lines().find(|line| line.starts_with(label))?;
    let kibibytes: u64 = line[label.len()..].trim().strip_suffix("kB")?.trim().parse().ok()?;
    Some(kibibytes * 1024)
}
