//! Colours of charts: Okabe & Ito's, which the colour-blind tell apart.
//!
//! Reference: Okabe, M. & Ito, K. (2008), *Color Universal Design*, jfly.uni-koeln.de/color.

use plotters::style::RGBColor;

use super::Theme;

/// Lines that a chart tells apart at most.
pub(super) const MOST_SERIES: usize = 5;

/// What a colour stands for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Colour {
    /// The ground.
    Paper,
    /// Text and what must not be missed.
    Ink,
    /// Text beside the matter.
    Muted,
    /// Grid lines.
    Grid,
    /// The n-th line.
    Series(usize),
}

/// Every colour there is, in the order of a palette.
const ALL: [Colour; 4 + MOST_SERIES] = [
    Colour::Paper,
    Colour::Ink,
    Colour::Muted,
    Colour::Grid,
    Colour::Series(0),
    Colour::Series(1),
    Colour::Series(2),
    Colour::Series(3),
    Colour::Series(4),
];

type Palette = [(u8, u8, u8); ALL.len()];

/// On white: Okabe & Ito's blue, vermillion and bluish green; their orange and purple darkened until a line of them shows.
const LIGHT: Palette = [
    (0xFF, 0xFF, 0xFF),
    (0x1A, 0x1A, 0x1A),
    (0x55, 0x55, 0x55),
    (0xDD, 0xDD, 0xDD),
    (0x00, 0x72, 0xB2),
    (0xD5, 0x5E, 0x00),
    (0x00, 0x8A, 0x65),
    (0xB0, 0x5A, 0x8C),
    (0x8C, 0x61, 0x00),
];

/// On black: their sky blue, orange, bluish green lightened, reddish purple and yellow.
const DARK: Palette = [
    (0x12, 0x15, 0x18),
    (0xF0, 0xF0, 0xF0),
    (0xB4, 0xB8, 0xBC),
    (0x3A, 0x40, 0x46),
    (0x56, 0xB4, 0xE9),
    (0xE6, 0x9F, 0x00),
    (0x2C, 0xC2, 0x95),
    (0xD9, 0x8C, 0xB6),
    (0xF0, 0xE4, 0x42),
];

/// The colour as it is drawn: on white, unless the theme is dark; [`style`] maps it to the other ground.
pub(super) fn rgb(colour: Colour, theme: Theme) -> RGBColor {
    let palette = if theme == Theme::Dark { &DARK } else { &LIGHT };
    let found = ALL.iter().zip(palette).find(|(known, _)| **known == colour);
    let (r, g, b) = found.map_or((0x80, 0x80, 0x80), |(_, rgb)| *rgb);
    RGBColor(r, g, b)
}

/// Rules that change the ground with the reader's device, and print on white.
pub(super) fn style(theme: Theme) -> String {
    let (media, from, to) = match theme {
        Theme::Light => return String::new(),
        Theme::Auto => ("screen and (prefers-color-scheme:dark)", &LIGHT, &DARK),
        Theme::Dark => ("print", &DARK, &LIGHT),
    };
    let rules = from.iter().zip(to).map(|(from, to)| {
        let (from, to) = (hex(*from), hex(*to));
        format!(".tailcast-chart [fill=\"{from}\"]{{fill:{to}}}.tailcast-chart [stroke=\"{from}\"]{{stroke:{to}}}")
    });
    format!("<style>@media {media}{{{}}}</style>", rules.collect::<String>())
}

fn hex((r, g, b): (u8, u8, u8)) -> String {
    format!("#{r:02X}{g:02X}{b:02X}")
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Contrast of two colours: W3C, Web Content Accessibility Guidelines 2.2, definitions "contrast ratio" and "relative
    /// luminance".
    fn contrast(a: (u8, u8, u8), b: (u8, u8, u8)) -> f64 {
        let channel = |value: u8| {
            let share = f64::from(value) / 255.0;
            if share <= 0.04045 { share / 12.92 } else { ((share + 0.055) / 1.055).powf(2.4) }
        };
        let luminance = |(r, g, b)| 0.2126 * channel(r) + 0.7152 * channel(g) + 0.0722 * channel(b);
        let (a, b): (f64, f64) = (luminance(a), luminance(b));
        (a.max(b) + 0.05) / (a.min(b) + 0.05)
    }

    #[test]
    fn contrast_is_that_of_the_guidelines() {
        // The ends of the scale by its definition; #767676 on white is the grey usually named as just passing (common
        // practice, no source).
        assert!((contrast((0, 0, 0), (255, 255, 255)) - 21.0).abs() < 1e-12);
        assert!((contrast((0x76, 0x76, 0x76), (255, 255, 255)) - 4.54).abs() < 0.01);
    }

    #[test]
    fn text_and_lines_stand_out_on_both_grounds() {
        for palette in [LIGHT, DARK] {
            let [paper, ink, muted, _grid, lines @ ..] = palette;
            // WCAG 2.2, success criterion 1.4.3 (text) and 1.4.11 (graphics).
            assert!(contrast(ink, paper) >= 4.5 && contrast(muted, paper) >= 4.5);
            for line in lines {
                assert!(contrast(line, paper) >= 3.0, "{line:?}: {}", contrast(line, paper));
            }
        }
    }

    #[test]
    fn every_colour_has_one_counterpart() {
        for palette in [LIGHT, DARK] {
            let mut sorted = palette.to_vec();
            sorted.sort_unstable();
            sorted.dedup();
            assert_eq!(sorted.len(), palette.len());
        }
    }
}
