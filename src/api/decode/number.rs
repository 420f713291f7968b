//! Numbers, judged by their text.

use serde_json::value::RawValue;

use super::{At, Faults, advice_for, kind_of, quoted};

/// Whole numbers written with a fraction or exponent are taken up to here, where they are still exact.
const MAX_EXACT_FLOAT: f64 = 9_007_199_254_740_992.0; // 2^53

/// A finite real number.
pub fn real(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<f64> {
    let outcome = match raw.get().parse::<f64>() {
        // JSON's grammar was checked, so what starts like a number is one; "NaN" and "inf" are strings there.
        // Adding 0 turns -0 into 0: they are one number, and must give one digest.
        Ok(value) if value.is_finite() => return Some(value + 0.0),
        Ok(_) => format!("{} is too large for a 64-bit real number", quoted(raw)),
        Err(_) => format!("a number is wanted here, not {}{}", kind_of(raw), advice_for(raw, &at)),
    };
    faults.add(&at, outcome);
    None
}

/// A whole number from 0 to `most`; 2.0 and 1e3 are whole too.
pub fn whole(raw: &RawValue, at: At<'_>, most: u64, faults: &mut Faults) -> Option<u64> {
    match read_whole(raw, &at, most) {
        Ok(value) => Some(value),
        Err(detail) => {
            faults.add(&at, detail);
            None
        }
    }
}

fn read_whole(raw: &RawValue, at: &At<'_>, most: u64) -> Result<u64, String> {
    let text = raw.get();
    let beyond = || {
        let power = if most.trailing_ones() == most.count_ones() {
            format!(" (2^{} - 1)", most.count_ones())
        } else {
            String::new()
        };
        format!("{} is above the largest allowed here, {most}{power}", quoted(raw))
    };
    if text.bytes().all(|byte| byte.is_ascii_digit()) {
        return text.parse().ok().filter(|&value| value <= most).ok_or_else(beyond);
    }
    let Ok(value) = text.parse::<f64>() else {
        return Err(format!("a whole number is wanted here, not {}{}", kind_of(raw), advice_for(raw, at)));
    };
    match whole_from_float(value) {
        Some(value) if value <= most => Ok(value),
        Some(_) => Err(beyond()),
        None if value < 0.0 => Err(format!("{} is negative; {} starts at 0", quoted(raw), at.subject())),
        None if value > most as f64 => Err(beyond()),
        None if value > MAX_EXACT_FLOAT => {
            Err(format!("{} is too large to be told exactly in this form; write it with digits alone", quoted(raw)))
        }
        None => Err(format!("{} is not a whole number", quoted(raw))),
    }
}

/// The whole number that a float stands for, when it stands for exactly one.
pub fn whole_from_float(value: f64) -> Option<u64> {
    // Not-a-number fails the range test.
    ((0.0..=MAX_EXACT_FLOAT).contains(&value) && value.fract() == 0.0).then_some(value as u64)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str) -> Result<u64, String> {
        let mut faults = Faults::default();
        let raw: &RawValue = serde_json::from_str(text).unwrap();
        whole(raw, At::ROOT, u64::MAX, &mut faults).ok_or_else(|| faults.into_parts().0.remove(0).detail)
    }

    #[test]
    fn whole_numbers_in_any_spelling() {
        for (text, value) in
            [("0", 0), ("-0", 0), ("2.0", 2), ("1e3", 1000), ("18446744073709551615", u64::MAX), ("0e0", 0)]
        {
            assert_eq!(read(text), Ok(value), "{text}");
        }
    }

    #[test]
    fn everything_else_is_refused_in_words() {
        for (text, words) in [
            ("1.5", "not a whole number"),
            ("-1", "negative"),
            ("-1e-9", "negative"),
            ("1e400", "2^64 - 1"),
            ("18446744073709551616", "2^64 - 1"),
            ("1e17", "digits alone"),
            ("\"NaN\"", "not a string"),
            ("\"5\"", "without quotes"),
            ("null", "leave the field out"),
            ("true", "not a boolean"),
            ("[1]", "not an array"),
            ("{}", "not an object"),
        ] {
            let detail = read(text).unwrap_err();
            assert!(detail.contains(words), "{text}: {detail}");
        }
    }

    #[test]
    fn reals_are_finite() {
        let mut faults = Faults::default();
        for text in ["1e400", "-1e400", "\"Infinity\"", "null"] {
            assert_eq!(real(serde_json::from_str(text).unwrap(), At::ROOT, &mut faults), None, "{text}");
        }
        for text in ["1e-400", "-0", "-0.0", "-1e-400"] {
            let value = real(serde_json::from_str(text).unwrap(), At::ROOT, &mut faults).unwrap();
            assert_eq!(value.to_bits(), 0, "{text}");
        }
        assert_eq!(faults.into_parts().0.len(), 4);
    }
}
