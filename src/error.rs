//! The one error type of the library: a kind, the offending value, the remedy.

/// What sort of thing went wrong; callers branch on this, people read the message.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum ErrorKind {
    /// The operating system could not read or write a file.
    Io,
    /// The file is of a kind this program does not read.
    UnknownFormat,
    /// The file claims a known format but its content is damaged, truncated or contradictory.
    Malformed,
    /// The file is valid but uses a feature of its format that is not supported.
    Unsupported,
    /// The file does not state its lateral scale and none was given.
    MissingPitch,
    /// The file does not state the unit of its heights and none was given.
    MissingHeightUnit,
    /// The file holds several maps and none was chosen.
    SeveralMaps,
    /// A setting, option or job entry has a value that cannot be used.
    Setting,
    /// The data do not allow the computation (too few pixels, everything void, ...).
    Data,
    /// The user cancelled the work.
    Cancelled,
}

/// An error a person can act on: what happened with the offending value, and the remedy.
#[derive(Debug, thiserror::Error)]
pub struct Error {
    kind: ErrorKind,
    what: String,
    remedy: String,
    #[source]
    source: Option<Box<dyn std::error::Error + Send + Sync>>,
}

impl std::fmt::Display for Error {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(&self.what)?;
        if !self.remedy.is_empty() {
            write!(f, ". {}", self.remedy)?;
        }
        Ok(())
    }
}

impl Error {
    /// An error of `kind`; `what` names the offending value.
    pub fn new(kind: ErrorKind, what: impl Into<String>) -> Self {
        Self {
            kind,
            what: what.into(),
            remedy: String::new(),
            source: None,
        }
    }

    /// Adds what the user can do about it: one sentence.
    #[must_use]
    pub fn remedy(mut self, remedy: impl Into<String>) -> Self {
        self.remedy = remedy.into();
        self
    }

    /// Keeps the underlying error for the chain of causes.
    #[must_use]
    pub fn source(mut self, source: impl Into<Box<dyn std::error::Error + Send + Sync>>) -> Self {
        self.source = Some(source.into());
        self
    }

    /// Puts `context` (a file, a job entry) in front of the message.
    #[must_use]
    pub fn context(mut self, context: impl std::fmt::Display) -> Self {
        self.what = format!("{context}: {}", self.what);
        self
    }

    /// Puts `path` in front of a message that does not name it yet.
    #[must_use]
    pub fn at(self, path: &std::path::Path) -> Self {
        let name = path.display().to_string();
        if self.what.starts_with(&name) {
            self
        } else {
            self.context(name)
        }
    }

    /// The error that a cancelled computation returns.
    pub fn cancelled() -> Self {
        Self::new(ErrorKind::Cancelled, "cancelled")
    }

    /// An operating-system error on `path`.
    pub fn io(path: &std::path::Path, error: std::io::Error) -> Self {
        Self::new(ErrorKind::Io, format!("{}: {error}", path.display())).source(error)
    }

    /// What sort of thing went wrong.
    pub fn kind(&self) -> ErrorKind {
        self.kind
    }

    /// What happened, without the remedy.
    pub fn what(&self) -> &str {
        &self.what
    }

    /// What the user can do about it; empty where nothing is known.
    pub fn remedy_text(&self) -> &str {
        &self.remedy
    }

    /// Whether the user cancelled.
    pub fn is_cancelled(&self) -> bool {
        self.kind == ErrorKind::Cancelled
    }
}

/// Result with the library's [`Error`].
pub type Result<T> = std::result::Result<T, Error>;
