//! Where a secret is to be had. The secret itself never stands in the config and never enters this room.

use std::fmt;
use std::path::PathBuf;

/// The place of one secret; whoever needs it reads it there, at the moment of need.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum SecretSource {
    /// The whole content of a file, without the white space around it.
    File(PathBuf),
    /// An environment variable, by its name.
    Env(String),
}

impl fmt::Display for SecretSource {
    /// `file /etc/railtide/webhook.token`, `environment variable RAILTIDE_TOKEN`
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            SecretSource::File(path) => write!(f, "file {}", path.display()),
            SecretSource::Env(name) => write!(f, "environment variable {name}"),
        }
    }
}
