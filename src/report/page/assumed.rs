//! What a result rests on: as described, as read, or as assumed in want of either.

use super::triage::Subject;
use crate::frontend::{AntiAlias, Family};
use crate::report::text::{count, hertz, plain};
use crate::sources::Recorder;
use crate::spectrum::plan::Plan;
use crate::tones::Search;
use crate::triage::Triage;

/// One thing assumed.
pub(super) struct Assumption {
    pub(super) about: &'static str,
    pub(super) words: String,
}

/// In the order of the signal's way, from the place to the answer.
pub(super) fn assumptions(subject: &Subject, result: &Triage) -> Vec<Assumption> {
    let recorder = &subject.site.recorder;
    let mut all = vec![Assumption {
        about: "sources",
        words: format!(
            "{}, with {}. What is not listed there can only come out as “unlisted”.",
            plain(subject.site_name),
            count(result.sources.len(), "source", "sources")
        ),
    }];
    let mut say = |about, words| all.push(Assumption { about, words });
    say("way to the converter", path(recorder));
    say(
        "recorder's clock",
        match recorder.clock_ppm {
            Some(ppm) => format!("within ± {ppm} ppm (95 %), as described."),
            None => format!(
                "not described: taken to be within ± {} ppm (95 %), as an ordinary crystal.",
                result.clock_described_ppm
            ),
        },
    );
    if !recorder.stages_hz.is_empty() {
        let rates: Vec<String> = recorder.stages_hz.iter().map(|&hz| hertz(hz)).collect();
        say(
            "rates gone through",
            format!("{} Hz, as described.", rates.join(", then ")),
        );
    }
    let spec = &result.spec;
    say(
        "levels",
        match &result.full_scale {
            Some((value, unit)) => {
                format!("0 dBFS is a sine of amplitude {value} {}.", plain(unit))
            }
            None if spec.normalised => "0 dBFS is a sine whose amplitude is full scale.".into(),
            None => "0 dBFS is a sine of amplitude 1: full scale is not described.".into(),
        },
    );
    if !spec.normalised || spec.channels.len() > 1 {
        let names: Vec<String> = spec
            .channels
            .iter()
            .map(|c| match &c.unit {
                Some(unit) => format!("{} [{}]", plain(&c.name), plain(unit)),
                None => plain(&c.name),
            })
            .collect();
        say("channels", format!("{}.", names.join(", ")));
    }
    for note in &spec.notes {
        say("reading", format!("{}.", plain(note)));
    }
    let missing: u64 = result.tones.missing.iter().sum();
    if missing > 0 {
        say(
            "missing samples",
            format!("{missing}, bridged by straight lines."),
        );
    }
    say(
        "search",
        format!(
            "{}; in a recording of noise alone, {} tones would be expected.",
            match result.tones.plan {
                Plan::Whole { samples, .. } => format!("one transform of all {samples} samples"),
                Plan::Segments { segment, .. } => format!(
                    "averaged over segments of {segment} samples, and measured over the whole"
                ),
            },
            Search::default().false_alarms
        ),
    );
    all
}

fn path(recorder: &Recorder) -> String {
    let front = &recorder.front_end;
    let filter = match &front.antialias {
        Some(filter) => format!("an anti-alias filter ({})", filter_words(filter)),
        None => "an anti-alias filter that is not described, which may be steep or absent".into(),
    };
    let band = match front.bandwidth_hz {
        Some(hz) => format!("nothing above {} Hz", hertz(hz)),
        None => "no upper limit that is known".into(),
    };
    let aperture = match front.aperture_s {
        Some(0.0) => "samples taken in an instant".into(),
        Some(s) => format!("each sample averaged over {s} s"),
        None => "an averaging time that is not described".into(),
    };
    format!("{filter}; {band}; {aperture}.")
}

fn filter_words(filter: &AntiAlias) -> String {
    let family = match filter.family {
        Family::Butterworth => "Butterworth".to_owned(),
        Family::Chebyshev1 { ripple_db } => format!("Chebyshev I, ripple {ripple_db} dB"),
        Family::Chebyshev2 { stop_db } => format!("Chebyshev II, stop band {stop_db} dB"),
        Family::Elliptic { ripple_db, stop_db } => {
            format!("elliptic, ripple {ripple_db} dB, stop band {stop_db} dB")
        }
        Family::Bessel => "Bessel".to_owned(),
    };
    format!(
        "{family}, order {}, corner {} Hz",
        filter.order,
        hertz(filter.corner_hz)
    )
}
