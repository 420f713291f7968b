//! `backup` and `restore`: copies of the database file, and what to know about them.

use std::path::Path;

use super::{Stop, print, runtime};
use crate::config::DatabaseConfig;
use crate::service::{BackupReport, back_up, restore};

/// Makes a copy of the database, also while a service runs on it.
pub fn make(database: &DatabaseConfig, file: &Path, replace: bool) -> Result<(), Stop> {
    let made = runtime()?.block_on(back_up(database, file, replace)).map_err(|error| Stop::failed("backup", error))?;
    print(&format!("{} holds {}; it is sound and on disk\n{}", file.display(), held(&made), lists(&made)))
}

/// Puts a copy in the database's place.
pub fn put_back(database: &DatabaseConfig, file: &Path) -> Result<(), Stop> {
    let put = runtime()?.block_on(restore(database, file)).map_err(|error| Stop::failed("restore", error))?;
    let aside = put.aside.map_or_else(String::new, |path| {
        let warning = if put.was_damaged {
            " It is damaged, so nothing told whether a service has it open: one that has must be started again."
        } else {
            ""
        };
        format!("What stood there is kept as {}.{warning}\n", path.display())
    });
    print(&format!("The database holds {} now.\n{aside}{}", held(&put.holds), lists(&put.holds)))
}

fn held(report: &BackupReport) -> String {
    format!("{} runs and {} networks in {} bytes", report.runs, report.networks, report.bytes)
}

fn lists(report: &BackupReport) -> String {
    match report.open_lists {
        0 => String::new(),
        open => format!(
            "{open} link lists had not been counted. They lie beside the database and are in no backup: where one is not found after a \
             restore its job fails, and the list is to be sent again.\n"
        ),
    }
}
