//! What may be near any recorder, for the person without a site file.
//!
//! Machines are not among them: a shaft or drive nobody described could be at any
//! speed. Tolerances are wide where the trade is, so that a fold of such a source
//! counts for little until something else speaks for it. Each source carries where
//! its value comes from; nothing here was looked up, so values of published
//! documents are marked as being from memory.

use super::clock::{self, Clock};
use super::mains::{self, Mains};
use super::quantity::Tolerance;
use super::tone::Tone;
use super::{Catalogue, Recorder, Site, Source};

/// Sources of the built-in site that cannot both be there: one place has one mains.
const MAINS_GROUP: &str = "mains";

/// Multiples of a supply.
struct Supply {
    name: &'static str,
    hz: f64,
    tolerance: Tolerance,
    orders: u32,
    group: Option<&'static str>,
    citation: &'static str,
}

/// Multiples of a clock; steady if its tolerance is a crystal's.
struct Oscillator {
    name: &'static str,
    hz: f64,
    tolerance: Tolerance,
    orders: u32,
    citation: &'static str,
}

const SUPPLIES: [Supply; 4] = [
    Supply {
        name: "mains 50 Hz",
        hz: 50.0,
        tolerance: mains::TOLERANCE,
        orders: mains::ORDERS,
        group: Some(MAINS_GROUP),
        citation: "EN 50160: 50 Hz ± 1 % for 99.5 % of a year (from memory)",
    },
    Supply {
        name: "mains 60 Hz",
        hz: 60.0,
        tolerance: mains::TOLERANCE,
        orders: mains::ORDERS,
        group: Some(MAINS_GROUP),
        citation: "60 Hz as in the Americas; ± 1 % as for 50 Hz (common practice)",
    },
    Supply {
        name: "railway supply",
        hz: 16.7,
        tolerance: Tolerance::percent(2.0),
        orders: 20,
        group: None,
        citation: "EN 50163: 16.7 Hz, formerly 16 2/3 Hz (from memory); tolerance common practice",
    },
    Supply {
        name: "aircraft supply",
        hz: 400.0,
        tolerance: Tolerance::percent(5.0),
        orders: 20,
        group: None,
        citation: "400 Hz of ISO 1540 and MIL-STD-704, 380 to 420 Hz with transients (from memory)",
    },
];

const CONVERTER: &str =
    "switching converters without a crystal hold about ± 10 % (common practice)";

/// Ten multiples or more of each: these waveforms have edges, and a list that ends
/// after three would fit any family of three too well.
const OSCILLATORS: [Oscillator; 13] = [
    Oscillator {
        name: "mobile phone frame",
        hz: 2600.0 / 12.0,
        tolerance: clock::TOLERANCE,
        orders: 20,
        citation: "ETSI TS 145 002: one burst each 60/13 ms (from memory)",
    },
    Oscillator {
        name: "cordless phone frame",
        hz: 100.0,
        tolerance: clock::TOLERANCE,
        orders: 20,
        citation: "ETSI EN 300 175: 10 ms frames (from memory)",
    },
    Oscillator {
        name: "USB frame",
        hz: 1000.0,
        tolerance: Tolerance::ppm(500.0),
        orders: 16,
        citation: "USB 2.0: a frame each 1.000 ms ± 500 ns, micro-frames at its 8th multiple (from memory)",
    },
    Oscillator {
        name: "display refresh",
        hz: 60.0,
        tolerance: Tolerance::percent(0.5),
        orders: 10,
        citation: "common practice: 59.94 or 60 Hz",
    },
    Oscillator {
        name: "display line rate",
        hz: 31_469.0,
        tolerance: Tolerance::percent(0.5),
        orders: 10,
        citation: "640 by 480 at 60 Hz: 525 lines in each picture (from memory)",
    },
    Oscillator {
        name: "625-line television",
        hz: 15_625.0,
        tolerance: Tolerance::ppm(200.0),
        orders: 10,
        citation: "ITU-R BT.470: 15 625 Hz ± 0.02 % (from memory)",
    },
    Oscillator {
        name: "525-line television",
        hz: 4_500_000.0 / 286.0,
        tolerance: clock::TOLERANCE,
        orders: 10,
        citation: "ITU-R BT.1700: 4.5 MHz / 286 (from memory)",
    },
    Oscillator {
        name: "watch crystal",
        hz: 32_768.0,
        tolerance: clock::TOLERANCE,
        orders: 10,
        citation: "2^15 Hz (common practice)",
    },
    Oscillator {
        name: "converter near 65 kHz",
        hz: 65_000.0,
        tolerance: Tolerance::percent(10.0),
        orders: 10,
        citation: CONVERTER,
    },
    Oscillator {
        name: "converter near 100 kHz",
        hz: 100_000.0,
        tolerance: Tolerance::percent(10.0),
        orders: 10,
        citation: CONVERTER,
    },
    Oscillator {
        name: "converter near 132 kHz",
        hz: 132_000.0,
        tolerance: Tolerance::percent(10.0),
        orders: 10,
        citation: CONVERTER,
    },
    Oscillator {
        name: "lamp ballast",
        hz: 40_000.0,
        tolerance: Tolerance::percent(50.0),
        orders: 8,
        citation: "electronic ballasts run at 20 to 60 kHz (common practice)",
    },
    Oscillator {
        name: "ultrasonic cleaner",
        hz: 26_500.0,
        tolerance: Tolerance::percent(8.0),
        orders: 10,
        citation: "25 and 28 kHz transducers (common practice)",
    },
];

/// Of a general list few are at any one place: about one of the sixteen that are
/// no supply mains. (For the two mains, which exclude each other, their group's
/// prior counts instead.)
const PRESENCE: f64 = 0.06;

impl Site {
    /// The sources assumed where no site file lists any, and a recorder of which
    /// nothing is known. `mains 50 Hz` and `mains 60 Hz` exclude each other.
    pub fn builtin() -> Site {
        let mut latents = Vec::new();
        let mut sources: Vec<Source> = Vec::new();
        for supply in SUPPLIES {
            let description = Mains {
                name: supply.name.to_owned(),
                hz: supply.hz,
                tolerance: supply.tolerance,
                orders: supply.orders,
            };
            sources.push(Source {
                citation: supply.citation.to_owned(),
                exclusive_group: supply.group.map(str::to_owned),
                presence: PRESENCE,
                ..description.expand(&mut latents).1
            });
        }
        for oscillator in OSCILLATORS {
            let description = Clock {
                name: oscillator.name.to_owned(),
                hz: oscillator.hz,
                tolerance: oscillator.tolerance,
                steadiness: clock::steadiness(oscillator.hz, oscillator.tolerance),
                orders: oscillator.orders,
                sidebands: None,
            };
            sources.push(Source {
                citation: oscillator.citation.to_owned(),
                presence: PRESENCE,
                ..description.expand(&mut latents)
            });
        }
        let ranging = Tone {
            name: "ultrasonic ranging".to_owned(),
            hz: 40_000.0,
            tolerance: Tolerance::Hz(1000.0),
        };
        sources.push(Source {
            citation: "40 kHz ± 1 kHz transducers (common practice)".to_owned(),
            ..ranging.expand(&mut latents)
        });
        Site {
            catalogue: Catalogue { latents, sources },
            recorder: Recorder::default(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::HashSet;

    #[test]
    fn every_builtin_source_says_where_it_comes_from() {
        let site = Site::builtin();
        assert_eq!(site.catalogue.sources.len(), 18);
        for source in &site.catalogue.sources {
            let said = &source.citation;
            assert!(
                said.contains("from memory") || said.contains("common practice"),
                "{}: {said}",
                source.name
            );
        }
        let names: HashSet<_> = site.catalogue.sources.iter().map(|s| &s.name).collect();
        assert_eq!(names.len(), site.catalogue.sources.len());
    }

    /// 525 lines, 30/1.001 pictures a second (ITU-R BT.1700, from memory).
    #[test]
    fn line_rates_agree_with_picture_rates() {
        let site = Site::builtin();
        let hz = |name: &str| {
            let latents = &site.catalogue.latents;
            latents.iter().find(|l| l.name == name).unwrap().nominal_hz
        };
        let line_525 = hz("525-line television");
        assert!((line_525 - 525.0 * 30.0 / 1.001).abs() < 1e-6);
        assert_eq!(hz("625-line television"), 625.0 * 25.0);
        assert!((hz("display line rate") - 525.0 * 60.0 / 1.001).abs() < 1.0);
    }

    #[test]
    fn only_the_two_mains_exclude_each_other() {
        let site = Site::builtin();
        let grouped: Vec<_> = site
            .catalogue
            .sources
            .iter()
            .filter(|s| s.exclusive_group.as_deref() == Some(MAINS_GROUP))
            .map(|s| s.name.as_str())
            .collect();
        assert_eq!(grouped, ["mains 50 Hz", "mains 60 Hz"]);
    }
}
