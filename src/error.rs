//! The one error type of the core; the binding maps it variant by variant.

use num_bigint::BigUint;

/// Result of every fallible operation of the core.
pub type Result<T> = std::result::Result<T, Error>;

/// What can go wrong, with enough detail to mend it.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum Error {
    /// An argument outside what the operation accepts.
    #[error("`{argument}`: got {given}; expected {expected}")]
    Argument {
        /// Name of the argument as the caller wrote it.
        argument: &'static str,
        /// What came.
        given: String,
        /// What is accepted, and how to get there.
        expected: String,
    },
    /// An index outside its range.
    #[error("`{argument}`: got index {given}; expected {expected}")]
    Index {
        /// Name of the argument as the caller wrote it.
        argument: &'static str,
        /// The index that came.
        given: String,
        /// The accepted range.
        expected: String,
    },
    /// A state space whose configurations cannot be numbered in 64 bits.
    #[error(
        "the sector has {dimension} configurations, more than 64-bit indices can number; \
         only methods that enumerate nothing (lowest configurations, the polytope) work here"
    )]
    TooManyConfigurations {
        /// The exact dimension.
        dimension: BigUint,
    },
    /// Work that does not fit in memory, refused before allocating.
    #[error("{what} needs about {} but only {} is available", readable_bytes(*.required), readable_bytes(*.available))]
    Memory {
        /// What would have been allocated.
        what: String,
        /// Estimated need in bytes.
        required: u128,
        /// Bytes available.
        available: u128,
    },
    /// A dense LAPACK routine reported failure.
    #[error("LAPACK routine {routine} failed with info = {info}")]
    Lapack {
        /// Name of the routine.
        routine: &'static str,
        /// Its return code.
        info: i32,
    },
    /// The caller asked to stop.
    #[error("interrupted")]
    Interrupted,
    /// An iteration stopped before its goal.
    #[error("{what} did not converge: {reached} after {iterations} iterations; {advice}")]
    NotConverged {
        /// Name of the iteration.
        what: &'static str,
        /// Accuracy reached, in words.
        reached: String,
        /// Iterations done.
        iterations: usize,
        /// What the caller can do.
        advice: &'static str,
    },
}

impl Error {
    /// An [`Error::Argument`] from anything printable.
    pub fn argument(
        argument: &'static str,
        given: impl std::fmt::Display,
        expected: impl Into<String>,
    ) -> Self {
        Error::Argument {
            argument,
            given: given.to_string(),
            expected: expected.into(),
        }
    }

    /// An [`Error::Index`] from anything printable.
    pub fn index(
        argument: &'static str,
        given: impl std::fmt::Display,
        expected: impl Into<String>,
    ) -> Self {
        Error::Index {
            argument,
            given: given.to_string(),
            expected: expected.into(),
        }
    }
}

/// Bytes in the largest unit that keeps at least one digit before the point.
pub fn readable_bytes(bytes: u128) -> String {
    const UNITS: [&str; 7] = ["bytes", "KiB", "MiB", "GiB", "TiB", "PiB", "EiB"];
    let mut value = bytes as f64;
    let mut unit = 0;
    while value >= 1024.0 && unit + 1 < UNITS.len() {
        value /= 1024.0;
        unit += 1;
    }
    if unit == 0 {
        format!("{bytes} bytes")
    } else {
        format!("{value:.1} {}", UNITS[unit])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn messages_name_argument_given_and_expected() {
        let error = Error::argument("weights", "[0.3, 0.7]", "decreasing values");
        assert_eq!(
            error.to_string(),
            "`weights`: got [0.3, 0.7]; expected decreasing values"
        );
        assert_eq!(readable_bytes(1536), "1.5 KiB");
        assert_eq!(readable_bytes(12), "12 bytes");
    }
}
