//! The letter that stands for a source in every picture and table of a page.

use crate::report::table::WORTH_A_LINE;
use crate::suspects::Cause;
use crate::triage::Triage;
use std::collections::BTreeMap;

/// Letters of the listed sources that are proposed for some tone.
pub(super) struct Letters(BTreeMap<usize, String>);

impl Letters {
    /// In the order of the site file, so that they stay from run to run as far as
    /// they can.
    pub(super) fn of(results: &[&Triage]) -> Self {
        let mut letters = BTreeMap::new();
        for result in results {
            let proposed = result.rows().flat_map(|(_, f)| &f.suspects);
            for suspect in proposed.filter(|s| s.probability >= WORTH_A_LINE) {
                if let Cause::Source { source, .. } = suspect.cause {
                    letters.insert(source, String::new());
                }
            }
            for fit in &result.inference.fits {
                if fit.tones_explained >= crate::report::table::EXPLAINS_SOMETHING {
                    letters.insert(fit.source, String::new());
                }
            }
        }
        for (i, letter) in letters.values_mut().enumerate() {
            *letter = numbered(i);
        }
        Letters(letters)
    }

    /// Of a listed source; nothing where it has none.
    pub(super) fn source(&self, source: usize) -> &str {
        self.0.get(&source).map_or("", String::as_str)
    }

    /// Small letters stand for what no list holds.
    pub(super) fn cause(&self, cause: &Cause) -> &str {
        match cause {
            Cause::Source { source, .. } => self.source(*source),
            Cause::Parents(_) => "h",
            Cause::Recorder => "r",
        }
    }
}

/// A to Z, then AA, AB, …
fn numbered(i: usize) -> String {
    let last = char::from(b'A' + (i % 26) as u8);
    match (i / 26).checked_sub(1) {
        Some(rest) => format!("{}{last}", numbered(rest)),
        None => last.to_string(),
    }
}

#[cfg(test)]
mod tests {
    use super::numbered;

    #[test]
    fn letters_never_run_out() {
        assert_eq!(numbered(0), "A");
        assert_eq!(numbered(25), "Z");
        assert_eq!(numbered(26), "AA");
        assert_eq!(numbered(26 + 26 * 26), "AAA");
    }
}
