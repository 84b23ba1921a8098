//! What can go wrong in capture, each fault as one line that names the file and the place in it.

use std::error::Error;
use std::fmt;
use std::io;
use std::path::PathBuf;

/// A fault met while opening or reading a source. None of them heals by reading on.
#[derive(Debug)]
pub enum CaptureError {
    /// A file cannot be opened or read.
    File {
        /// The file.
        path: PathBuf,
        /// What the operating system says.
        source: io::Error,
    },
    /// A file has the wrong kind, length or place: `problem` says which and what is allowed.
    Unusable {
        /// The file.
        path: PathBuf,
        /// What is wrong, and what is allowed.
        problem: String,
    },
    /// A metadata file is not JSON.
    Json {
        /// The file.
        path: PathBuf,
        /// What the parser says, with line and column.
        source: serde_json::Error,
    },
    /// A value in a metadata file is missing, wrong, not supported, or contradicts another.
    Value {
        /// The file.
        path: PathBuf,
        /// Where in it, such as `captures[1].core:datetime`.
        key: String,
        /// What is wrong, and what is allowed.
        problem: String,
    },
    /// The operating system gave no thread to capture on.
    Thread(io::Error),
}

impl fmt::Display for CaptureError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            CaptureError::File { path, source } if source.kind() == io::ErrorKind::NotFound => {
                write!(f, "{}: no such file", path.display())
            }
            CaptureError::File { path, source } => {
                write!(f, "{}: cannot be read: {source}", path.display())
            }
            CaptureError::Unusable { path, problem } => write!(f, "{}: {problem}", path.display()),
            CaptureError::Json { path, source } => {
                write!(f, "{}: is not JSON: {source}", path.display())
            }
            CaptureError::Value { path, key, problem } => {
                write!(f, "{}: {key}: {problem}", path.display())
            }
            CaptureError::Thread(source) => write!(f, "no thread to capture on: {source}"),
        }
    }
}

impl Error for CaptureError {}
