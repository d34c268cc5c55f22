//! Work space that outlives a product: fresh pages cost more than the arithmetic on them.

use crate::scalar::Scalar;
use std::sync::{Mutex, MutexGuard, PoisonError};

/// Bytes of a cache line, which is also the widest register.
const LINE: usize = 64;

/// Buffers that wait for their next use; as many as were ever in use at once.
#[derive(Debug, Default)]
pub struct Buffers<T>(Mutex<Vec<Vec<T>>>);

impl<T: Scalar> Buffers<T> {
    /// Calls `work` with numbers of any value that begin at a cache line.
    pub fn with<R>(&self, length: usize, work: impl FnOnce(&mut [T]) -> R) -> R {
        let mut buffer = self.waiting().pop().unwrap_or_default();
        let needed = length + LINE / size_of::<T>();
        if buffer.len() < needed {
            buffer.resize(needed, T::zero());
        }
        let offset = buffer.as_ptr().align_offset(LINE).min(needed - length);
        let result = work(&mut buffer[offset..offset + length]);
        self.waiting().push(buffer);
        result
    }

    fn waiting(&self) -> MutexGuard<'_, Vec<Vec<T>>> {
        self.0.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl<T> Clone for Buffers<T> {
    fn clone(&self) -> Self {
        Buffers(Mutex::default())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_buffer_waits_for_its_next_use() {
        let buffers = Buffers::<f64>::default();
        let first = buffers.with(100, |numbers| {
            numbers.fill(1.0);
            numbers.as_ptr() as usize
        });
        assert_eq!(first % LINE, 0);
        let (again, nested) = buffers.with(50, |numbers| {
            let nested = buffers.with(10, |others| others.as_ptr() as usize);
            (numbers.as_ptr() as usize, nested)
        });
        assert_eq!(again, first);
        assert_ne!(nested, first);
        assert_eq!(buffers.waiting().len(), 2);
    }
}
