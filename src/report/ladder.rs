//! Text of the commands `fold` and `unfold`: one row per line and image, or per rung.
//!
//! Both print one table of the same seven columns, which a program can split at white
//! space: every heading and cell is one word. Decimal points stand below each other.

use crate::fold::{Chain, LadderError, Rung, Seen, cycles_per_sample, pi_radians_per_sample};
use crate::units::{SeenHz, Sense, TrueHz};
use std::io::{self, Write};

/// Why a table could not be written.
#[derive(Debug, thiserror::Error)]
pub enum WriteError {
    /// There is no such ladder; nothing has been written.
    #[error(transparent)]
    Ladder(#[from] LadderError),
    /// Writing failed.
    #[error("cannot write the table: {0}")]
    Io(#[from] io::Error),
}

/// One row, true frequency and how it is seen.
#[derive(Debug, Clone, Copy)]
struct Row {
    true_hz: TrueHz,
    seen: Seen,
    image: bool,
}

/// Where analog lines land: for each of `lines` a row with its seen frequency, and
/// below it one for each image that an interpolating stage leaves.
///
/// Columns: `true_hz`, `seen_hz`, `zone`, `sense` (upright or inverted), `image`
/// (yes or no), `cycles_per_sample` (seen frequency over the file's rate, 0 to
/// 0.5), `pi_rad_per_sample` (the same in units of π radians, 0 to 1).
///
/// # Errors
/// More images than fit a ladder, before anything is written; a failing `out`.
pub fn write_fold(lines: &[TrueHz], chain: &Chain, out: &mut dyn Write) -> Result<(), WriteError> {
    let mut rows = Vec::new();
    for &true_hz in lines {
        let row = |seen, image| Row {
            true_hz,
            seen,
            image,
        };
        rows.push(row(chain.see(true_hz), false));
        rows.extend(chain.images(true_hz)?.into_iter().map(|s| row(s, true)));
    }
    Ok(write_rows(&rows, chain, out)?)
}

/// The ladder of analog candidates: for each of `tones` a row per rung up to `up_to`,
/// lowest first; columns as in [`write_fold`].
///
/// # Errors
/// As [`Chain::unfold`], before anything is written; a failing `out`.
pub fn write_unfold(
    tones: &[SeenHz],
    chain: &Chain,
    up_to: TrueHz,
    out: &mut dyn Write,
) -> Result<(), WriteError> {
    let mut rows = Vec::new();
    for &seen in tones {
        let ladder = chain.unfold(seen, up_to)?;
        rows.extend(ladder.into_iter().map(|rung| {
            let Rung {
                true_hz,
                zone,
                sense,
                image,
            } = rung;
            Row {
                true_hz,
                seen: Seen { seen, zone, sense },
                image,
            }
        }));
    }
    Ok(write_rows(&rows, chain, out)?)
}

const HEADINGS: [&str; 7] = [
    "true_hz",
    "seen_hz",
    "zone",
    "sense",
    "image",
    "cycles_per_sample",
    "pi_rad_per_sample",
];

impl Row {
    /// True and seen frequency, cycles and π radians per sample, all without the dust
    /// of rounding.
    ///
    /// They carry a unit in the last place of the largest number on the way from true
    /// to seen, so none is printed beyond a few of those.
    fn numbers(&self, chain: &Chain) -> [String; 4] {
        let rate_hz = chain.file_rate_hz();
        let scale = chain.rates_hz().fold(self.true_hz.0.abs(), f64::max);
        let resolution = 16.0 * f64::EPSILON * scale;
        let hz = |value| plain(value, resolution.max(1e-9));
        let normalised = |value| plain(value, (resolution / rate_hz).max(1e-12));
        let seen = self.seen.seen;
        [
            hz(self.true_hz.0),
            hz(seen.0),
            normalised(cycles_per_sample(seen, rate_hz)),
            normalised(pi_radians_per_sample(seen, rate_hz)),
        ]
    }
}

fn write_rows(rows: &[Row], chain: &Chain, out: &mut dyn Write) -> io::Result<()> {
    let [h_true, h_seen, h_zone, h_sense, h_image, h_cycles, h_pi] = HEADINGS;
    let mut true_hz = Layout::of(h_true);
    let mut seen_hz = Layout::of(h_seen);
    let mut zone_width = h_zone.len();
    for row in rows {
        let [t, s, ..] = row.numbers(chain);
        true_hz.fit(&t);
        seen_hz.fit(&s);
        zone_width = zone_width.max(row.seen.zone.to_string().len());
    }
    writeln!(
        out,
        "{h_true:>t$}  {h_seen:>s$}  {h_zone:>zone_width$}  {h_sense:<8}  {h_image}  {h_cycles}  {h_pi}",
        t = true_hz.width(),
        s = seen_hz.width(),
    )?;
    for row in rows {
        let [t, s, cycles, pi] = row.numbers(chain);
        writeln!(
            out,
            "{}  {}  {zone:>zone_width$}  {sense:<8}  {image:<5}  {cycles:<c$}  {pi}",
            true_hz.cell(&t),
            seen_hz.cell(&s),
            zone = row.seen.zone,
            sense = match row.seen.sense {
                Sense::Upright => "upright",
                Sense::Inverted => "inverted",
            },
            image = if row.image { "yes" } else { "no" },
            c = h_cycles.len(),
        )?;
    }
    Ok(())
}

/// Digits of a number before and behind its point.
fn digits(text: &str) -> (usize, usize) {
    match text.split_once('.') {
        Some((before, after)) => (before.len(), after.len()),
        None => (text.len(), 0),
    }
}

/// How the numbers of a column are set: points below each other, padded behind with
/// spaces, because a zero there would claim a digit.
struct Layout {
    heading: usize,
    before: usize,
    /// With the point.
    after: usize,
}

impl Layout {
    fn of(heading: &str) -> Self {
        Layout {
            heading: heading.len(),
            before: 0,
            after: 0,
        }
    }

    /// Makes room for a number.
    fn fit(&mut self, text: &str) {
        let (before, after) = digits(text);
        self.before = self.before.max(before);
        if after > 0 {
            self.after = self.after.max(after + 1);
        }
    }

    fn width(&self) -> usize {
        self.heading.max(self.before + self.after)
    }

    fn cell(&self, text: &str) -> String {
        let (before, _) = digits(text);
        let padded = format!("{text:<w$}", w = before + self.after);
        format!("{padded:>w$}", w = self.width())
    }
}

/// A number in plain decimals, as many as `resolution` leaves meaning, no zeros at
/// the end.
fn plain(value: f64, resolution: f64) -> String {
    if !value.is_finite() {
        return value.to_string();
    }
    let decimals = (-resolution.log10()).floor().clamp(0.0, 15.0) as usize;
    let text = format!("{value:.decimals$}");
    if text.contains('.') {
        text.trim_end_matches('0').trim_end_matches('.').to_string()
    } else {
        text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn fold_text(lines: &[f64], rates: &[f64]) -> String {
        let lines: Vec<TrueHz> = lines.iter().copied().map(TrueHz).collect();
        let mut out = Vec::new();
        write_fold(&lines, &Chain::new(rates.to_vec()).unwrap(), &mut out).unwrap();
        String::from_utf8(out).unwrap()
    }

    fn unfold_text(tones: &[f64], rates: &[f64], up_to: f64) -> Result<String, WriteError> {
        let tones: Vec<SeenHz> = tones.iter().copied().map(SeenHz).collect();
        let mut out = Vec::new();
        let chain = Chain::new(rates.to_vec()).unwrap();
        write_unfold(&tones, &chain, TrueHz(up_to), &mut out)?;
        Ok(String::from_utf8(out).unwrap())
    }

    #[test]
    fn fold_lists_where_lines_land() {
        let expected = "\
true_hz  seen_hz  zone  sense     image  cycles_per_sample  pi_rad_per_sample
  100       20       3  upright   no     0.25               0.5
   50.5     29.5     2  inverted  no     0.36875            0.7375
    0        0       1  upright   no     0                  0
";
        assert_eq!(fold_text(&[100.0, 50.5, 0.0], &[80.0]), expected);
    }

    #[test]
    fn fold_lists_images_below_their_line() {
        let text = fold_text(&[3000.0], &[8000.0, 24_000.0]);
        let cells: Vec<Vec<&str>> = text
            .lines()
            .map(|l| l.split_whitespace().collect())
            .collect();
        assert_eq!(cells[0], HEADINGS);
        assert_eq!(
            cells[1],
            ["3000", "3000", "1", "upright", "no", "0.125", "0.25"]
        );
        assert_eq!(cells[2][..5], ["3000", "5000", "2", "inverted", "yes"]);
        assert_eq!(cells[3][..5], ["3000", "11000", "3", "upright", "yes"]);
        assert_eq!(cells.len(), 4);
    }

    #[test]
    fn unfold_lists_every_rung_of_every_tone() {
        let expected = "\
true_hz  seen_hz  zone  sense     image  cycles_per_sample  pi_rad_per_sample
    200      200     1  upright   no     0.2                0.4
    800      200     2  inverted  no     0.2                0.4
   1200      200     3  upright   no     0.2                0.4
      0        0     1  upright   no     0                  0
   1000        0     3  upright   no     0                  0
";
        assert_eq!(
            unfold_text(&[200.0, 0.0], &[1000.0], 1500.0).unwrap(),
            expected
        );
    }

    #[test]
    fn a_bad_tone_writes_nothing() {
        let err = unfold_text(&[200.0, 501.0], &[1000.0], 1500.0).unwrap_err();
        assert!(
            matches!(err, WriteError::Ladder(LadderError::Seen { .. })),
            "{err}"
        );
    }

    #[test]
    fn numbers_carry_no_rounding_dust() {
        for (value, resolution, text) in [
            (2000.0 - 1e-9, 1e-8, "2000"),
            (0.1 + 0.2, 1e-12, "0.3"),
            (1e9 / 3.0, 1e-3, "333333333.333"),
            (62_500.0, 1e-11, "62500"),
            (0.0, 1e-15, "0"),
            (1e15, 1.0, "1000000000000000"),
            (0.02, 1e-15, "0.02"),
            (100.0 - 1e-12, 1e-9, "100"),
        ] {
            assert_eq!(plain(value, resolution), text);
        }
        assert_eq!(plain(f64::NAN, 1.0), "NaN");
        // 12 345 678.1 is held with an error of 4e-10, which is all of the last digits
        // of its remainder.
        let text = fold_text(&[12_345_678.1], &[1000.0]);
        assert!(text.contains("  321.9  "), "{text}");
        let text = unfold_text(&[0.1], &[44_100.1], 1e6).unwrap();
        for row in text.lines().skip(1) {
            let true_hz = row.split_whitespace().next().unwrap();
            assert!(digits(true_hz).1 <= 1, "{row}");
        }
    }
}
