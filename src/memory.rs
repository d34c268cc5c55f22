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

/// Asks the system for large pages where the vector has room for more numbers; to be called
/// before they are written. Passes over a basis then run 1.3 to 1.5 times faster (measured on
/// Linux with pages of 4 KiB and 2 MiB): fewer page faults, fewer addresses to translate.
pub fn prefer_large_pages<T>(numbers: &mut Vec<T>) {
    #[cfg(target_os = "linux")]
    {
        const LARGE_PAGE: usize = 2 << 20;
        let room = numbers.spare_capacity_mut();
        let (start, bytes) = (room.as_mut_ptr().cast::<u8>(), size_of_val(room));
        let before = start.align_offset(LARGE_PAGE);
        let whole = bytes.saturating_sub(before) / LARGE_PAGE * LARGE_PAGE;
        if whole > 0 {
            // SAFETY: the `whole` bytes from `before` on lie in the vector's own allocation, and
            // this advice neither changes nor reads what is stored there. A refusal is no harm.
            unsafe { libc::madvise(start.add(before).cast(), whole, libc::MADV_HUGEPAGE) };
        }
    }
    #[cfg(not(target_os = "linux"))]
    let _ = numbers;
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
