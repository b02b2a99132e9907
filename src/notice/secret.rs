//! Reads a receiver's secret from where the config says that it is.

use std::fs::File;
use std::io::Read;
use std::path::PathBuf;

use secrecy::SecretString;

use crate::config::SecretSource;

/// No token is longer; a wrong path (a device, a log file) must not fill the memory.
const LONGEST: u64 = 4096;

/// Why a secret can't be had. No message ever holds the secret itself.
#[derive(Debug, thiserror::Error)]
pub enum SecretError {
    /// The file isn't there, may not be read or isn't text; the owner can mend it.
    #[error("cannot read the secret from {}: {cause}; the file must be readable by the user that railtide runs as", path.display())]
    Unreadable {
        /// The file.
        path: PathBuf,
        /// What the system said.
        cause: std::io::Error,
    },
    /// The environment variable isn't set, or isn't text.
    #[error(
        "the environment variable {name} that should hold a secret is not set; set it where railtide is started"
    )]
    NotSet {
        /// Its name.
        name: String,
    },
    /// There is nothing in it, or something that can't stand in one line.
    #[error("the secret from {place} is {found}; it must be one line of up to {LONGEST} characters")]
    Unusable {
        /// The file or variable.
        place: String,
        /// `empty`, `too long`, `more than one line`.
        found: &'static str,
    },
}

/// The secret that `source` names, without the line break that editors leave at a file's end.
pub(super) fn resolve(source: &SecretSource) -> Result<SecretString, SecretError> {
    let (text, place) = match source {
        SecretSource::File(path) => {
            let mut text = String::new();
            File::open(path)
                .and_then(|file| file.take(LONGEST + 1).read_to_string(&mut text))
                .map_err(|cause| SecretError::Unreadable { path: path.clone(), cause })?;
            (text, path.display().to_string())
        }
        SecretSource::Env(name) => {
            let text = std::env::var(name).map_err(|_| SecretError::NotSet { name: name.clone() })?;
            (text, format!("the environment variable {name}"))
        }
    };
    let secret = text.trim();
    let found = if secret.is_empty() {
        "empty"
    } else if text.len() as u64 > LONGEST {
        "too long"
    } else if secret.contains(char::is_control) {
        "more than one line"
    } else {
        return Ok(SecretString::from(secret));
    };
    Err(SecretError::Unusable { place, found })
}

#[cfg(test)]
mod tests {
    use super::*;
    use secrecy::ExposeSecret;

    fn from_file(content: &[u8]) -> Result<String, String> {
        let file = tempfile::NamedTempFile::new().unwrap();
        std::fs::write(file.path(), content).unwrap();
        match resolve(&SecretSource::File(file.path().to_owned())) {
            Ok(secret) => Ok(secret.expose_secret().to_owned()),
            Err(error) => Err(error.to_string()),
        }
    }

    #[test]
    fn a_file_gives_its_one_line_without_the_line_break() {
        assert_eq!(from_file(b"tk-123\r\n").as_deref(), Ok("tk-123"));
    }

    #[test]
    fn what_cannot_be_a_token_is_refused_without_showing_it() {
        assert!(from_file(b" \n").unwrap_err().contains("is empty"));
        assert!(from_file(&[b'x'; 5000]).unwrap_err().contains("is too long"));
        let two_lines = from_file(b"first\nsecond").unwrap_err();
        assert!(two_lines.contains("more than one line") && !two_lines.contains("first"), "{two_lines}");
        assert!(from_file(b"\xff\xfe").unwrap_err().contains("cannot read the secret"));
    }

    #[test]
    fn an_endless_file_is_not_read_to_its_end() {
        let error = resolve(&SecretSource::File("/dev/zero".into())).unwrap_err();
        assert!(error.to_string().contains("is too long"), "{error}");
    }

    #[test]
    fn a_missing_file_or_variable_is_named() {
        let error = resolve(&SecretSource::File("/nowhere/token".into())).unwrap_err().to_string();
        assert!(error.contains("/nowhere/token"), "{error}");
        let error = resolve(&SecretSource::Env("RAILTIDE_NO_SUCH_TOKEN".into())).unwrap_err().to_string();
        assert!(error.contains("RAILTIDE_NO_SUCH_TOKEN"), "{error}");
        assert!(resolve(&SecretSource::Env("PATH".into())).is_ok());
    }
}
