//! Figures and paragraphs for people.

/// Figures from here on are written with an exponent: nobody counts more than fifteen digits.
const LONGEST: f64 = 1e15;
/// Longest number in a message that is left as it is: 2^64 has 20 digits, a real number up to 17 and its zeros.
const MOST_DIGITS: usize = 24;
/// Smallest figure that is written out.
const SMALLEST: f64 = 0.001;

/// A count with as many digits as matter: thousands in groups, a decimal below a hundred, two digits below one.
///
/// ```
/// use tailcast::report::figure;
/// assert_eq!(figure(1234567.4), "1,234,567");
/// assert_eq!(figure(12.34), "12.3");
/// assert_eq!(figure(7.0), "7");
/// assert_eq!(figure(0.0432), "0.043");
/// assert_eq!(figure(1e-7), "<0.001");
/// assert_eq!(figure(1.25e300), "1.25e300");
/// ```
pub fn figure(value: f64) -> String {
    if value >= LONGEST {
        return format!("{:e}", format!("{value:.3e}").parse().unwrap_or(value));
    }
    if value.fract() == 0.0 || value >= 100.0 {
        return grouped(value.round());
    }
    let text = match value {
        v if v < SMALLEST => format!("<{SMALLEST}"),
        v if v < 0.01 => format!("{v:.4}"),
        v if v < 0.1 => format!("{v:.3}"),
        v if v < 1.0 => format!("{v:.2}"),
        v => format!("{v:.1}"),
    };
    text.strip_suffix(".0").map_or(text.clone(), str::to_owned)
}

/// A message whose numbers of more digits than anybody counts are written with an exponent.
///
/// ```
/// let long = format!("{} is too much", 1e300);
/// assert_eq!(tailcast::report::readable(&long), "1e300 is too much");
/// assert_eq!(tailcast::report::readable("18446744073709551615 nodes"), "18446744073709551615 nodes");
/// ```
pub fn readable(message: &str) -> String {
    let mut text = String::with_capacity(message.len());
    let mut rest = message;
    while let Some(start) = rest.find(|c: char| c.is_ascii_digit()) {
        let (before, from) = rest.split_at(start);
        let end = from.find(|c: char| !c.is_ascii_digit() && c != '.').unwrap_or(from.len());
        let (number, _) = from.split_at(end);
        // A full stop after a number ends the sentence.
        let number = number.trim_end_matches('.');
        let after = from.get(number.len()..).unwrap_or_default();
        text.push_str(before);
        match number.parse::<f64>() {
            Ok(value) if number.len() > MOST_DIGITS => text.push_str(&format!("{value:e}")),
            _ => text.push_str(number),
        }
        rest = after;
    }
    text + rest
}

/// A whole number with its digits in groups of three.
fn grouped(value: f64) -> String {
    let digits = format!("{value:.0}");
    let mut text = String::with_capacity(digits.len() * 4 / 3);
    for (i, digit) in digits.chars().enumerate() {
        if i > 0 && (digits.len() - i).is_multiple_of(3) {
            text.push(',');
        }
        text.push(digit);
    }
    text
}

/// Breaks a paragraph into lines of at most `width` characters; lines after the first start with `indent`.
pub fn wrap(text: &str, width: usize, indent: &str) -> Vec<String> {
    let mut lines = Vec::new();
    let mut line = String::new();
    for word in text.split_whitespace() {
        let fits = line.chars().count() + 1 + word.chars().count() <= width;
        if !line.is_empty() && !fits {
            lines.push(std::mem::replace(&mut line, indent.to_owned()));
        } else if !line.trim().is_empty() {
            line.push(' ');
        }
        line.push_str(word);
    }
    lines.push(line);
    lines
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn lines_keep_to_the_width() {
        let lines = wrap("one two three four five six", 9, "  ");
        assert_eq!(lines, ["one two", "  three", "  four", "  five", "  six"]);
    }
}
