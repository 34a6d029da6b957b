//! Tests in words: what to do, what it is worth, what will be seen, what to beware of.

use super::page::Planned;
use super::table::{HEAD, QUIET, wrapped};
use super::text::{count, hertz, percent, plain};
use crate::plan::{Outcome, Plan, Shows, Test, Told, What};
use crate::triage::Triage;
use std::io::{self, Write};

/// Outcomes told in one line on the screen.
const MOST_OUTCOMES: usize = 3;
/// Tones of which a test's outcomes are told.
const MOST_TONES: usize = 3;

/// What to do, in the imperative.
pub fn what(test: &Test) -> String {
    match &test.what {
        What::Rate(hz) => format!("record again at {} Hz", hertz(*hz)),
        What::LowPass(hz) => format!(
            "record again with a low-pass of {} Hz (4th order) before the converter",
            hertz(*hz)
        ),
        What::Speed { source, percent } => {
            format!("change the speed of {} by {percent} %", plain(source))
        }
        What::Off { source } => format!("record again with {} switched off", plain(source)),
        What::Longer(times) => format!("record {times} times as long"),
        What::Reference { source } => format!(
            "log the speed or frequency of {} beside the recording",
            plain(source)
        ),
    }
}

/// What to beware of, where a test touches more than the recorder.
pub fn caution(what: &What) -> Option<&'static str> {
    match what {
        What::Rate(_) | What::Longer(_) => None,
        What::LowPass(_) => Some(
            "an input may carry mains or other live parts: leave connecting to it to licensed people, under your local codes",
        ),
        What::Speed { .. } => Some(
            "moving machinery: only by those in charge of it, guards in place, under your local codes",
        ),
        What::Off { .. } => Some(
            "ask who depends on it; isolating and locking out is for licensed people, under your local codes",
        ),
        What::Reference { .. } => Some(
            "keep clear of turning parts and live conductors; fixing a sensor there is for licensed people, under your local codes",
        ),
    }
}

fn shows(shows: &Shows) -> String {
    match shows {
        Shows::Same => "stays as it is".into(),
        Shows::At(hz) => format!("moves to {} Hz", hertz(*hz)),
        Shows::Weaker(db) => format!("weakens by {db:.0} dB"),
        Shows::Gone => "is gone".into(),
        Shows::Fits => "still fits".into(),
        Shows::Strays => "no longer fits its source".into(),
        Shows::Follows(times) => format!(
            "follows the log {} times, {}",
            times.abs(),
            if *times < 0.0 { "mirrored" } else { "upright" }
        ),
    }
}

fn outcome(o: &Outcome) -> String {
    let Some((first, chance)) = o.under.first() else {
        return format!("it {} ({})", shows(&o.shows), percent(o.probability));
    };
    // Others are worth a word where they make a part of the outcome.
    let more = o.probability - chance > 0.1 * o.probability;
    let others = if more { " or another" } else { "" };
    format!(
        "it {} if it is {first}{others} ({})",
        shows(&o.shows),
        percent(o.probability)
    )
}

fn outcomes(told: &Told) -> String {
    let mut parts: Vec<String> = told
        .outcomes
        .iter()
        .take(MOST_OUTCOMES)
        .map(outcome)
        .collect();
    let left = told.outcomes.len().saturating_sub(MOST_OUTCOMES);
    if left > 0 {
        parts.push(format!(
            "or {}",
            count(left, "less likely place", "less likely places")
        ));
    }
    parts.join(", ")
}

fn seen(result: &Triage, tone: usize) -> String {
    result.tones.tones.get(tone).map_or(String::new(), |t| {
        format!("tone {} ({} Hz)", t.number, hertz(t.seen_hz.0))
    })
}

/// The best test for one tone, as the page shows it.
pub fn planned(result: &Triage, test: &Test) -> Planned {
    Planned {
        words: words(result, test),
        cautions: caution(&test.what).map(str::to_owned).into_iter().collect(),
    }
}

/// The best test for one tone, with its caution.
pub fn advice(result: &Triage, test: &Test) -> String {
    let mut text = words(result, test);
    if let Some(caution) = caution(&test.what) {
        text.push_str(&format!(" Caution: {caution}."));
    }
    text
}

fn words(result: &Triage, test: &Test) -> String {
    let Some(told) = test.tones.first() else {
        return what(test);
    };
    format!(
        "for {}, {}; {} to settle it. There {}.",
        seen(result, told.tone),
        what(test),
        percent(told.prospect.settles),
        outcomes(told)
    )
}

/// Writes the tests, best first, at most `top`.
///
/// # Errors
/// Those of `out`.
pub fn write(
    result: &Triage,
    plan: &Plan,
    top: usize,
    width: Option<usize>,
    out: &mut dyn Write,
) -> io::Result<()> {
    let width = width.unwrap_or(110);
    writeln!(
        out,
        "{HEAD}{}{HEAD:#}: {}, {} open",
        plain(&result.recording),
        count(result.tones.tones.len(), "tone", "tones"),
        plan.open.len()
    )?;
    if plan.open.is_empty() {
        return writeln!(out, "\nNothing is open: no further test is needed.");
    }
    let names: Vec<String> = plan
        .open
        .iter()
        .take(8)
        .map(|(tone, bits)| format!("{}, {bits:.1} bits", seen(result, *tone)))
        .collect();
    let more = plan.open.len().saturating_sub(8);
    let more = if more > 0 {
        format!("; {more} more")
    } else {
        String::new()
    };
    for line in wrapped(&format!("  in doubt: {}{more}", names.join("; ")), width) {
        writeln!(out, "{line}")?;
    }
    if plan.tests.is_empty() {
        return writeln!(out, "\nNone of the tests considered would tell more.");
    }
    writeln!(
        out,
        "\n{QUIET}{:>2}  {:>5}  {:>12}  test{QUIET:#}",
        "", "bits", "settles"
    )?;
    for (n, test) in plan.tests.iter().take(top).enumerate() {
        let settles = if plan.open.len() == 1 {
            percent(test.settles)
        } else {
            format!("{:.1} of {}", test.settles, plan.open.len())
        };
        writeln!(
            out,
            "{:>2}  {:>5.2}  {settles:>12}  {}",
            n + 1,
            test.bits,
            what(test)
        )?;
        let indent = 25;
        let mut notes: Vec<String> = test
            .tones
            .iter()
            .filter(|t| t.prospect.bits >= 0.05)
            .take(MOST_TONES)
            .map(|t| format!("{}: {}", seen(result, t.tone), outcomes(t)))
            .collect();
        if let Some(caution) = caution(&test.what) {
            notes.push(format!("Caution: {caution}."));
        }
        for note in notes {
            for line in wrapped(&note, width.saturating_sub(indent).max(30)) {
                writeln!(out, "{:indent$}{QUIET}{line}{QUIET:#}", "")?;
            }
        }
    }
    let best = plan.tests.first();
    writeln!(out)?;
    let short = best.map_or(String::new(), |t| format!("In short: {} first.", what(t)));
    writeln!(out, "{short}")
}

/// Writes everything as JSON.
///
/// # Errors
/// Those of `out`.
pub fn write_json(result: &Triage, plan: &Plan, mut out: impl Write) -> io::Result<()> {
    let tone = |i: usize| result.tones.tones.get(i).map(|t| (t.number, t.seen_hz));
    let tests: Vec<serde_json::Value> = plan
        .tests
        .iter()
        .map(|t| {
            serde_json::json!({
                "test": what(t),
                "what": t.what,
                "bits": t.bits,
                "settles": t.settles,
                "caution": caution(&t.what),
                "tones": t.tones.iter().map(|told| serde_json::json!({
                    "tone": tone(told.tone).map(|t| t.0),
                    "bits": told.prospect.bits,
                    "settles": told.prospect.settles,
                    "outcomes": told.outcomes,
                })).collect::<Vec<_>>(),
            })
        })
        .collect();
    let document = serde_json::json!({
        "program": env!("CARGO_PKG_NAME"),
        "version": env!("CARGO_PKG_VERSION"),
        "recording": result.recording,
        "open": plan.open.iter().map(|(i, bits)| serde_json::json!({
            "tone": tone(*i).map(|t| t.0),
            "seen_hz": tone(*i).map(|t| t.1),
            "bits": bits,
        })).collect::<Vec<_>>(),
        "tests": tests,
    });
    serde_json::to_writer_pretty(&mut out, &document)?;
    out.write_all(b"\n")?;
    out.flush()
}
