//! The colours, once for pages and pictures.
//!
//! Ink on light paper by day, light on slate in the dark. A verdict has a colour and a
//! shape: what the colour tells, the shape tells too.

/// Name, by day, in the dark.
const COLOURS: [(&str, &str, &str); 12] = [
    ("paper", "#fbfaf6", "#15191f"),
    ("sheet", "#ffffff", "#1c222a"),
    ("ink", "#1d2733", "#e8e4da"),
    ("quiet", "#5a6572", "#a3adb8"),
    ("hair", "#d9d5ca", "#38424e"),
    ("ground", "#d3dbe0", "#35424f"),
    ("trace", "#5d7386", "#8fa6b8"),
    ("direct", "#0a6a66", "#63c9bd"),
    ("folded", "#a8321a", "#ff9272"),
    ("open", "#7a5600", "#e6b955"),
    ("glow", "#ffe9a8", "#453a18"),
    ("wash", "#f1eee5", "#232a33"),
];

/// The custom properties of a page.
pub(super) fn variables() -> String {
    let set = |pick: fn(&(&str, &'static str, &'static str)) -> &'static str| -> String {
        COLOURS
            .iter()
            .map(|c| format!("--{}:{};", c.0, pick(c)))
            .collect()
    };
    let (day, dark) = (set(|c| c.1), set(|c| c.2));
    format!(
        ":root{{color-scheme:light dark;{day}}}\n@media screen and (prefers-color-scheme:dark){{:root{{{dark}}}}}\n"
    )
}

/// A style sheet with the day's colours in place of the properties: for pictures that
/// stand alone, which not every reader resolves properties in.
pub(super) fn by_day(style: &str) -> String {
    COLOURS
        .iter()
        .fold(style.to_owned(), |style, (name, day, _)| {
            style.replace(&format!("var(--{name})"), day)
        })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Relative luminance (WCAG 2.2, definition "relative luminance").
    fn luminance(hex: &str) -> f64 {
        let part = |i: usize| {
            let c = f64::from(u8::from_str_radix(&hex[i..i + 2], 16).unwrap()) / 255.0;
            if c <= 0.04045 {
                c / 12.92
            } else {
                ((c + 0.055) / 1.055).powf(2.4)
            }
        };
        0.2126 * part(1) + 0.7152 * part(3) + 0.0722 * part(5)
    }

    fn contrast(a: &str, b: &str) -> f64 {
        let (a, b) = (luminance(a), luminance(b));
        (a.max(b) + 0.05) / (a.min(b) + 0.05)
    }

    /// Text needs 4.5 : 1 (WCAG 2.2, success criterion 1.4.3).
    #[test]
    fn words_can_be_read_by_day_and_in_the_dark() {
        let find = |name: &str| COLOURS.iter().find(|c| c.0 == name).unwrap();
        for word in ["ink", "quiet", "direct", "folded", "open"] {
            for behind in ["paper", "sheet", "wash", "glow"] {
                let (w, b) = (find(word), find(behind));
                assert!(contrast(w.1, b.1) >= 4.5, "{word} on {behind} by day");
                assert!(contrast(w.2, b.2) >= 4.5, "{word} on {behind} in the dark");
            }
        }
        assert!(contrast("#777777", "#ffffff") < 4.5);
    }

    #[test]
    fn no_property_is_left_in_a_picture_that_stands_alone() {
        assert!(!by_day(super::super::PICTURE_STYLE).contains("var("));
    }
}
