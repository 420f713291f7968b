#![no_main]
//! Small texts from outside: settings, keys, addresses, secrets, the rows of a source.

use std::sync::LazyLock;

use libfuzzer_sys::fuzz_target;
use tailcast::config::Config;
use tailcast::credential::{Credential, masked};
use tailcast::sources::{Database, counts};
use tailcast::webhook::{Destination, Secret, Target};

/// Every setting's variable, as the file of defaults names them.
static VARIABLES: LazyLock<Vec<String>> = LazyLock::new(|| {
    let unknown = [("TAILCAST_NO_SUCH_SETTING".to_owned(), String::new())];
    let told = Config::from_sources(None, unknown.into_iter()).expect_err("an unknown setting").to_string();
    let words = told.split(|letter: char| !(letter.is_ascii_uppercase() || "_0123456789".contains(letter)));
    words
        .filter(|word| word.starts_with("TAILCAST_") && !word.ends_with("NO_SUCH_SETTING"))
        .map(str::to_owned)
        .collect()
});

fuzz_target!(|given: (u8, &str, Vec<(Option<String>, Option<String>)>)| {
    let (which, text, rows) = given;
    assert!(VARIABLES.len() > 50);
    let variable = VARIABLES[usize::from(which) % VARIABLES.len()].clone();
    if let Err(fault) = Config::from_sources(None, [(variable, text.to_owned())].into_iter()) {
        assert!(!fault.to_string().is_empty());
    }

    if let Some(key) = Credential::parse(text) {
        assert_eq!(key.reveal(), text);
        assert!(!masked(text).contains(text));
    }
    let safe = masked(text);
    assert_eq!(masked(&safe), safe);

    if let Ok(target) = Target::new(text) {
        assert_eq!(Target::new(target.as_str()).expect("its own form").as_str(), target.as_str());
    }
    if let Ok(destination) = Destination::new(text) {
        assert!(destination.takes(&Target::new(text).expect("an address")));
    }
    if let Ok(secret) = Secret::new(text) {
        assert!(secret.sign("1", 0, text).starts_with("v1,"));
    }
    if let Ok(database) = Database::new(text) {
        assert!(text.contains(database.name()));
    }
    match counts(&rows) {
        Ok(counts) => assert!(counts.degrees().len() <= rows.len()),
        Err(fault) => assert!(!fault.to_string().is_empty()),
    }
});
