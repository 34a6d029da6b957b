//! What to do next: the test that was planned for this recording, and what always holds.

use super::triage::ToneView;
use crate::suspects::Verdict;

/// A test that would settle what this recording leaves open.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Planned {
    /// What to do, and what it would tell.
    pub words: String,
    /// What can go wrong, or hurt.
    pub cautions: Vec<String>,
}

/// What holds whatever the recording: how to settle open tones, and check settled ones.
pub(super) fn steps(tones: &[ToneView]) -> Vec<String> {
    let open: Vec<String> = tones
        .iter()
        .filter(|t| t.verdict == Verdict::Open)
        .map(|t| t.number.to_string())
        .collect();
    let folded = tones.iter().any(|t| t.verdict == Verdict::Folded);
    let mut steps = Vec::new();
    if !open.is_empty() {
        steps.push(format!(
            "{} {}: record the same place again at another sample rate, one that is no simple \
             fraction of this one. A tone that is real where it shows stays; a folded one moves, and \
             where it moves to tells its zone.",
            if open.len() == 1 { "Tone" } else { "Tones" },
            open.join(", ")
        ));
    }
    if folded {
        steps.push(
            "To check a folded tone, record at a rate more than twice its true frequency, if the \
             recorder can: it must then show where this page says it truly is."
                .into(),
        );
    }
    if !tones.is_empty() {
        steps.push(
            "A cause is settled when the tone comes and goes with the machine, or moves with its \
             speed. Start with what can be seen from the control room: logged speeds, duty times, a \
             drive's display."
                .into(),
        );
    }
    steps
}
