//! The one guarded way from Python into the kernels.

use crate::error::Error;
use crate::progress::Progress;
use pyo3::exceptions::PyKeyboardInterrupt;
use pyo3::prelude::*;
use std::ops::ControlFlow;

/// Runs a kernel without the interpreter; its error becomes one of `fockhull.errors`.
pub fn enter<T: Send>(
    py: Python<'_>,
    kernel: impl FnOnce() -> Result<T, Error> + Send,
) -> PyResult<T> {
    py.detach(kernel).map_err(|error| raise(py, &error))
}

/// As [`enter`], for kernels that report progress: the monitor lets signals through and calls
/// `progress(stage, done, total, products, residual)` if there is one.
///
/// An exception raised there (KeyboardInterrupt included) stops the kernel and is raised again.
pub fn enter_monitored<T: Send>(
    py: Python<'_>,
    progress: Option<Py<PyAny>>,
    kernel: impl FnOnce(&mut (dyn FnMut(&Progress) -> ControlFlow<()> + '_)) -> Result<T, Error> + Send,
) -> PyResult<T> {
    let mut raised = None;
    let result = py.detach(|| {
        kernel(&mut |report| match relay(progress.as_ref(), report) {
            Ok(()) => ControlFlow::Continue(()),
            Err(error) => {
                raised = Some(error);
                ControlFlow::Break(())
            }
        })
    });
    match (raised, result) {
        (Some(error), _) => Err(error),
        (None, result) => result.map_err(|error| raise(py, &error)),
    }
}

fn relay(progress: Option<&Py<PyAny>>, report: &Progress) -> PyResult<()> {
    Python::attach(|py| {
        py.check_signals()?;
        if let Some(callable) = progress {
            callable.call1(
                py,
                (
                    report.stage,
                    report.done,
                    report.total,
                    report.products,
                    report.residual,
                ),
            )?;
        }
        Ok(())
    })
}

/// The exception that stands for an error of the core.
pub fn raise(py: Python<'_>, error: &Error) -> PyErr {
    let built = match error {
        Error::Argument {
            argument,
            given,
            expected,
        } => instance(py, "ArgumentError", (*argument, given, expected)),
        Error::Index {
            argument,
            given,
            expected,
        } => instance(
            py,
            "ArgumentIndexError",
            (*argument, format!("index {given}"), expected),
        ),
        Error::TooManyConfigurations { .. } | Error::Memory { .. } => {
            instance(py, "SizeError", (error.to_string(),))
        }
        Error::Interrupted => return PyKeyboardInterrupt::new_err(()),
        _ => instance(py, "ComputationError", (error.to_string(),)),
    };
    match built {
        Ok(exception) => PyErr::from_value(exception),
        Err(failure) => failure,
    }
}

fn instance<'py, A>(py: Python<'py>, class: &str, arguments: A) -> PyResult<Bound<'py, PyAny>>
where
    A: pyo3::call::PyCallArgs<'py>,
{
    py.import("fockhull.errors")?
        .getattr(class)?
        .call1(arguments)
}
