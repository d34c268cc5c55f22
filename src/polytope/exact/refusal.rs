//! Requests for lists too long to make.

use crate::error::Error;

/// The refusal of a list, with what makes it too long.
pub(super) fn too_large(what: String) -> Error {
    Error::argument(
        "weights",
        what,
        "a list short enough to be made; fewer weights or a higher `limit` may help, and \
         support, contains, project and stretch need no list at any number of weights",
    )
}
