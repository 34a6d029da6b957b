//! The analog path before the converter, against an independent implementation and
//! what the definitions of the families ask for.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use foldtrace::frontend::{
    AntiAlias, FLOOR_DB, Family, FilterError, FrontEnd, Gain, aperture_db, undescribed_antialias,
};
use foldtrace::units::TrueHz;
use std::collections::HashMap;

fn family(row: &HashMap<String, String>) -> Family {
    let db = |key: &str| row[key].parse::<f64>().unwrap();
    match row["family"].as_str() {
        "butterworth" => Family::Butterworth,
        "bessel" => Family::Bessel,
        "chebyshev1" => Family::Chebyshev1 {
            ripple_db: db("ripple_db"),
        },
        "chebyshev2" => Family::Chebyshev2 {
            stop_db: db("stop_db"),
        },
        "elliptic" => Family::Elliptic {
            ripple_db: db("ripple_db"),
            stop_db: db("stop_db"),
        },
        other => panic!("family {other}"),
    }
}

/// Rows of the reference whose magnitude is missed by more than the budget.
///
/// Both sides add up to 40 logarithms of values up to 300 dB: 1e-12 of the value, and
/// as much absolutely. The zeros and poles of an elliptic filter are worked out from
/// its modulus, which a steep filter (here order 11, 3 dB against 20 dB) has within
/// 1e-7 of 1: there the reference itself is good to some 1e-9 dB.
fn misses(scale_corner: f64) -> Vec<String> {
    let text = include_str!("reference/filters.csv");
    let rows: Vec<HashMap<String, String>> = csv::Reader::from_reader(text.as_bytes())
        .deserialize()
        .map(|row| row.unwrap())
        .collect();
    assert_eq!(rows.len(), 960);
    rows.iter()
        .filter_map(|row| {
            let filter = AntiAlias {
                family: family(row),
                order: row["order"].parse().unwrap(),
                corner_hz: row["corner_hz"].parse::<f64>().unwrap() * scale_corner,
            };
            let f = TrueHz(row["f_hz"].parse().unwrap());
            // Nothing is given below the floor.
            let expected = row["magnitude_db"].parse::<f64>().unwrap().max(FLOOR_DB);
            let got = filter.magnitude_db(f).unwrap();
            let budget = match filter.family {
                Family::Elliptic { .. } => 1e-8,
                _ => 1e-12 * (1.0 + expected.abs()),
            };
            ((got - expected).abs() > budget).then(|| format!("{row:?}: {got}"))
        })
        .collect()
}

#[test]
fn magnitudes_match_the_reference() {
    let misses = misses(1.0);
    assert!(misses.is_empty(), "{misses:#?}");
}

#[test]
fn the_magnitude_checker_can_fail() {
    // A corner off by 1 part in 10⁹ shows wherever a response has a slope: in all
    // but the flat ends of the curves and the loosely checked elliptic ones.
    let found = misses(1.0 + 1e-9).len();
    assert!(found > 300, "{found}");
}

const CORNER: f64 = 1000.0;

fn magnitude(family: Family, order: u32, f: f64) -> f64 {
    let filter = AntiAlias {
        family,
        order,
        corner_hz: CORNER,
    };
    filter.magnitude_db(TrueHz(f)).unwrap()
}

#[test]
fn the_corner_means_what_it_says() {
    let half_power = -10.0 * 2f64.log10();
    for order in 1..=20 {
        let at = |family| magnitude(family, order, CORNER);
        let close = |got: f64, expected: f64| {
            assert!(
                (got - expected).abs() < 1e-9,
                "order {order}: {got}, {expected}"
            );
        };
        close(at(Family::Butterworth), half_power);
        close(at(Family::Bessel), half_power);
        close(at(Family::Chebyshev1 { ripple_db: 0.5 }), -0.5);
        close(at(Family::Chebyshev2 { stop_db: 60.0 }), -60.0);
        let elliptic = Family::Elliptic {
            ripple_db: 0.5,
            stop_db: 60.0,
        };
        close(at(elliptic), -0.5);
    }
}

#[test]
fn far_slopes_and_depths() {
    // 6.02 dB per octave and order without zeros; Chebyshev II and elliptic of even
    // order stay at their stop band's depth, of odd order fall by 6.02 dB per octave.
    let octave = 20.0 * 2f64.log10();
    let slope = |family, order| {
        magnitude(family, order, 300.0 * CORNER) - magnitude(family, order, 600.0 * CORNER)
    };
    for order in 1..=5 {
        let n = f64::from(order);
        for family in [
            Family::Butterworth,
            Family::Bessel,
            Family::Chebyshev1 { ripple_db: 1.0 },
        ] {
            let got = slope(family, order);
            assert!((got - n * octave).abs() < 0.01, "{family:?} {order}: {got}");
        }
    }
    let stop = Family::Chebyshev2 { stop_db: 50.0 };
    let both = Family::Elliptic {
        ripple_db: 1.0,
        stop_db: 50.0,
    };
    for family in [stop, both] {
        assert!(
            (magnitude(family, 4, 1e9) + 50.0).abs() < 1e-6,
            "{family:?}"
        );
        assert!((slope(family, 5) - octave).abs() < 0.01, "{family:?}");
        for i in 0..4000 {
            let f = CORNER * (3.0 + f64::from(i) * 0.013);
            assert!(magnitude(family, 4, f) <= -50.0 + 1e-9, "{family:?} {f}");
        }
    }
}

#[test]
fn extremes_stay_in_range() {
    let families = [
        Family::Butterworth,
        Family::Bessel,
        Family::Chebyshev1 { ripple_db: 0.1 },
        Family::Chebyshev2 { stop_db: 80.0 },
        Family::Elliptic {
            ripple_db: 0.1,
            stop_db: 80.0,
        },
        // All but a brick wall, and all but nothing.
        Family::Elliptic {
            ripple_db: 3.0,
            stop_db: 3.1,
        },
        Family::Elliptic {
            ripple_db: 1e-6,
            stop_db: 200.0,
        },
    ];
    for family in families {
        for order in [1, 2, 3, 19, 20] {
            for f in [
                0.0,
                1e-300,
                1e-3,
                999.999,
                1000.0,
                1e4,
                1e12,
                1e200,
                f64::MAX,
            ] {
                let db = magnitude(family, order, f);
                assert!(
                    (FLOOR_DB..=0.0).contains(&db),
                    "{family:?} {order} {f}: {db}"
                );
            }
        }
    }
}

#[test]
fn apertures_average_whole_cycles_away() {
    // Common practice: averaging over one sample period costs 3.92 dB at half the
    // rate and has its first zero at the rate; sin(x)/x of π/2 and 3π/2.
    let tau = 1.0 / 8000.0;
    assert!((aperture_db(TrueHz(4000.0), tau) + 3.922_398).abs() < 1e-6);
    assert!((aperture_db(TrueHz(12_000.0), tau) + 13.464_823).abs() < 1e-6);
    assert_eq!(aperture_db(TrueHz(8000.0), tau), FLOOR_DB);
    assert_eq!(aperture_db(TrueHz(80_000.0), tau), FLOOR_DB);
    assert_eq!(aperture_db(TrueHz(0.0), tau), 0.0);
    assert_eq!(aperture_db(TrueHz(1e9), 0.0), 0.0);
}

fn described() -> FrontEnd {
    FrontEnd {
        bandwidth_hz: Some(50_000.0),
        antialias: Some(AntiAlias {
            family: Family::Butterworth,
            order: 4,
            corner_hz: CORNER,
        }),
        aperture_s: Some(1.0 / 8000.0),
    }
}

#[test]
fn what_is_described_is_certain_and_adds_up() {
    let front = described();
    let f = TrueHz(6000.0);
    let gain = front.gain(f, 8000.0);
    let sum = magnitude(Family::Butterworth, 4, 6000.0) + aperture_db(f, 1.0 / 8000.0);
    assert_eq!((gain.mean_db, gain.sd_db), (sum, 0.0));
    assert_eq!(front.gain(TrueHz(-6000.0), 8000.0), gain);
    let nothing = Gain {
        mean_db: FLOOR_DB,
        sd_db: 0.0,
    };
    assert_eq!(front.gain(TrueHz(50_001.0), 8000.0), nothing);
    assert!(front.gain(TrueHz(50_000.0), 8000.0).mean_db > FLOOR_DB);
    // The aperture alone unknown: a little unsure, and more so further up.
    let no_aperture = FrontEnd {
        aperture_s: None,
        ..front
    };
    let (low, high) = (
        no_aperture.gain(TrueHz(400.0), 8000.0),
        no_aperture.gain(TrueHz(20_000.0), 8000.0),
    );
    assert!(0.0 < low.sd_db && low.sd_db < 0.1, "{low:?}");
    assert!(1.5 < high.sd_db && high.sd_db < 3.0, "{high:?}");
}

#[test]
fn what_is_not_described_is_unknown_and_not_absent() {
    let front = FrontEnd::default();
    let rate = 8000.0;
    let mut last = undescribed_antialias(TrueHz(0.0), rate);
    assert!(last.sd_db <= 1.0 && last.mean_db == 0.0);
    for i in 1..40_000 {
        let f = TrueHz(f64::from(i) * 10.0);
        let gain = front.gain(f, rate);
        // Falls and widens steadily, without a step at half the rate.
        assert!(
            gain.mean_db <= last.mean_db && gain.sd_db >= last.sd_db,
            "{f:?}"
        );
        assert!(
            gain.mean_db > last.mean_db - 0.1 && gain.sd_db < last.sd_db + 0.3,
            "{f:?}"
        );
        // No filter at all is never out of the question.
        assert!(gain.mean_db + 2.0 * gain.sd_db >= 0.0, "{f:?}: {gain:?}");
        last = gain;
    }
    // Nor is a steep one, an octave up.
    let octave = front.gain(TrueHz(2.0 * rate), rate);
    assert!(octave.mean_db - 3.0 * octave.sd_db < -60.0, "{octave:?}");
    // An aperture and a bandwidth count all the same.
    let part = FrontEnd {
        bandwidth_hz: Some(30_000.0),
        aperture_s: Some(1.0 / rate),
        antialias: None,
    };
    assert_eq!(part.gain(TrueHz(rate), rate).mean_db, FLOOR_DB);
    assert_eq!(part.gain(TrueHz(30_001.0), rate).sd_db, 0.0);
    assert!(part.gain(TrueHz(12_000.0), rate).mean_db < front.gain(TrueHz(12_000.0), rate).mean_db);
}

#[test]
fn no_filter_is_named() {
    let filter = |family, order, corner_hz| {
        AntiAlias {
            family,
            order,
            corner_hz,
        }
        .validate()
    };
    use Family::{Bessel, Butterworth, Chebyshev1, Chebyshev2, Elliptic};
    assert_eq!(filter(Bessel, 0, 1.0), Err(FilterError::Order { order: 0 }));
    assert_eq!(
        filter(Bessel, 21, 1.0),
        Err(FilterError::Order { order: 21 })
    );
    assert!(matches!(
        filter(Butterworth, 1, f64::NAN),
        Err(FilterError::Corner { .. })
    ));
    assert!(matches!(
        filter(Chebyshev1 { ripple_db: 0.0 }, 1, 1.0),
        Err(FilterError::Decibels {
            key: "ripple_db",
            ..
        })
    ));
    assert!(matches!(
        filter(
            Chebyshev2 {
                stop_db: f64::INFINITY
            },
            1,
            1.0
        ),
        Err(FilterError::Decibels { key: "stop_db", .. })
    ));
    let upside_down = Elliptic {
        ripple_db: 10.0,
        stop_db: 10.0,
    };
    let err = filter(upside_down, 3, 1.0).unwrap_err();
    assert!(
        err.to_string()
            .starts_with("ripple_db = 10 is not below stop_db = 10"),
        "{err}"
    );
    // Where nobody asked, such a filter is as good as none.
    let front = FrontEnd {
        antialias: Some(AntiAlias {
            family: Bessel,
            order: 0,
            corner_hz: 1.0,
        }),
        ..FrontEnd::default()
    };
    assert_eq!(
        front.gain(TrueHz(9e3), 8e3),
        FrontEnd::default().gain(TrueHz(9e3), 8e3)
    );
}
