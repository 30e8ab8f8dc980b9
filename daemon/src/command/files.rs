//! Which files are meant when none are named.

use std::path::{Path, PathBuf};
use tarecup_config::Faults;
use tarecup_config::station::{self, Station};

/// The config file in force: the named one, else the first of the usual places that exists.
pub fn config_path(named: Option<&Path>) -> Option<PathBuf> {
    if let Some(named) = named {
        return Some(named.to_path_buf());
    }
    let own = std::env::var_os("XDG_CONFIG_HOME")
        .map(PathBuf::from)
        .or_else(|| std::env::var_os("HOME").map(|h| PathBuf::from(h).join(".config")));
    let usual = own.into_iter().map(|dir| dir.join("tarecup/config.toml")).chain([PathBuf::from("/etc/tarecup/config.toml")]);
    usual.into_iter().find(|p| p.is_file())
}

/// Reads the config in force; defaults where there is none.
pub fn station(named: Option<&Path>) -> Result<Station, Faults> {
    match config_path(named) {
        Some(path) => station::load(&path),
        None => station::parse("(no config file)", ""),
    }
}

/// The state directory: the named one, the config's, the service manager's, the user's data folder.
pub fn state_dir(named: Option<&Path>, config: Option<&Path>) -> Result<PathBuf, String> {
    let from_env = || {
        std::env::var_os("STATE_DIRECTORY")
            .map(|dirs| PathBuf::from(dirs.to_string_lossy().split(':').next().unwrap_or_default()))
    };
    let data = || {
        std::env::var_os("XDG_DATA_HOME")
            .map(PathBuf::from)
            .or_else(|| std::env::var_os("HOME").map(|h| PathBuf::from(h).join(".local/share")))
            .map(|dir| dir.join("tarecup"))
    };
    let found = named.or(config).map(Path::to_path_buf).or_else(from_env).or_else(data);
    found.ok_or_else(|| String::from("there is no place for the ledger: name one with --state DIR"))
}
