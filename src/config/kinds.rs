//! Values of the wrong kind. The settings' reader would cast them: 2.5 and true to whole numbers, 1 to true.

use config::{Value, ValueKind};

use super::fault::SettingsError;

/// Checks that every value in `given` is of the kind that the same key has in `defaults`.
pub fn check_file(defaults: &Value, given: &Value, path: &str) -> Result<(), SettingsError> {
    match (&defaults.kind, &given.kind) {
        (ValueKind::Table(known), ValueKind::Table(table)) => {
            for (name, value) in table {
                let inner = if path.is_empty() { name.clone() } else { format!("{path}.{name}") };
                // Unknown keys are told before.
                if let Some(default) = known.get(name) {
                    check_file(default, value, &inner)?;
                }
            }
            Ok(())
        }
        (default, value) => {
            let fits = match wanted(default) {
                Some(WHOLE) => is_whole(value),
                Some(TRUTH) => matches!(value, ValueKind::Boolean(_)),
                _ => true,
            };
            refuse_unless(fits, path, default, &given.to_string())
        }
    }
}

/// Checks that a variable's text is of the kind that its key has in `defaults`.
pub fn check_text(defaults: &Value, path: &str, text: &str) -> Result<(), SettingsError> {
    let default = path.split('.').try_fold(defaults, |value, name| match &value.kind {
        ValueKind::Table(table) => table.get(name),
        _ => None,
    });
    let Some(default) = default.map(|value| &value.kind) else { return Ok(()) };
    let fits = match wanted(default) {
        Some(WHOLE) => text.parse::<u64>().is_ok(),
        Some(TRUTH) => matches!(text, "true" | "false"),
        _ => true,
    };
    refuse_unless(fits, path, default, text)
}

const WHOLE: &str = "a whole number that is not negative";
const TRUTH: &str = "true or false";

/// What a key takes whose default is this, in words; none for what the reader checks by itself.
fn wanted(default: &ValueKind) -> Option<&'static str> {
    match default {
        ValueKind::I64(_) | ValueKind::U64(_) | ValueKind::I128(_) | ValueKind::U128(_) => Some(WHOLE),
        ValueKind::Boolean(_) => Some(TRUTH),
        _ => None,
    }
}

fn is_whole(value: &ValueKind) -> bool {
    match value {
        ValueKind::I64(number) => *number >= 0,
        ValueKind::I128(number) => *number >= 0,
        ValueKind::U64(_) | ValueKind::U128(_) => true,
        _ => false,
    }
}

fn refuse_unless(fits: bool, path: &str, default: &ValueKind, given: &str) -> Result<(), SettingsError> {
    match wanted(default) {
        Some(wanted) if !fits => {
            Err(SettingsError::WrongKind { key: path.to_owned(), wanted, given: given.to_owned() })
        }
        _ => Ok(()),
    }
}
