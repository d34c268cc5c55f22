//! How long work reports back and how it is stopped.

use std::ops::ControlFlow;

/// A report from inside long work.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Progress {
    /// What is being done, in a word or two.
    pub stage: &'static str,
    /// Units done so far (converged levels, for an eigensolver).
    pub done: usize,
    /// Units in all.
    pub total: usize,
    /// Products with the operator so far.
    pub products: usize,
    /// Present error measure (largest residual norm of the wanted levels).
    pub residual: f64,
}

/// Called from the calling thread once per step; `Break` stops the work.
pub type Monitor<'a> = dyn FnMut(&Progress) -> ControlFlow<()> + 'a;

/// A monitor that never stops anything.
pub fn silent(_: &Progress) -> ControlFlow<()> {
    ControlFlow::Continue(())
}
