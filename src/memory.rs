//! How much memory there is, so that too large work is refused before anything is allocated.

use crate::error::{Error, Result};

/// Bytes that new allocations may use: what the system calls available, within the limit of
/// the control group. Where neither is known (other systems than Linux), no limit.
pub fn available_bytes() -> u128 {
    [system_available(), control_group_available()]
        .into_iter()
        .flatten()
        .min()
        .unwrap_or(u128::MAX)
}

/// Less than this is never refused: asking the system would take longer than the work.
const NEGLIGIBLE: u128 = 32 << 20;

/// Refuses work that needs more than the memory available.
///
/// # Errors
/// [`Error::Memory`] with the estimate.
pub fn require(what: impl Into<String>, required: u128) -> Result<()> {
    if required <= NEGLIGIBLE {
        return Ok(());
    }
    let available = available_bytes();
    if required <= available {
        Ok(())
    } else {
        Err(Error::Memory {
            what: what.into(),
            required,
            available,
        })
    }
}

fn system_available() -> Option<u128> {
    let text = std::fs::read_to_string("/proc/meminfo").ok()?;
    let line = text.lines().find_map(|l| l.strip_prefix("MemAvailable:"))?;
    let kibibytes: u128 = line.split_whitespace().next()?.parse().ok()?;
    Some(kibibytes * 1024)
}

fn control_group_available() -> Option<u128> {
    let read = |name: &str| -> Option<u128> {
        let text = std::fs::read_to_string(format!("/sys/fs/cgroup/{name}")).ok()?;
        text.trim().parse().ok()
    };
    Some(read("memory.max")?.saturating_sub(read("memory.current")?))
}
