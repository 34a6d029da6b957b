//! The site file of a command, or the built-in list.

use super::output::{Stop, shown, usage};
use foldtrace::sources::Site;
use std::path::Path;

/// The site and the name it goes by in the reports.
pub fn load_site(path: Option<&Path>) -> Result<(Site, String), Stop> {
    match path {
        None => Ok((
            Site::builtin(),
            "built-in list (give --site to name your own)".into(),
        )),
        Some(path) => {
            let site = Site::load(path).map_err(|e| usage(format!("{}: {e}", shown(path))))?;
            Ok((site, path.to_string_lossy().into_owned()))
        }
    }
}
