//! Sampling arithmetic: worked examples, and properties over random rates and chains.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use foldtrace::fold::{
    Chain, LadderError, MAX_RUNGS, Rung, cycles_per_sample, fold, pi_radians_per_sample, rungs,
    unfold, zone,
};
use foldtrace::units::{SeenHz, Sense, TrueHz};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};

/// The textbook formula with nothing done for precision: the slow obvious twin.
fn naive_fold(f: f64, rate: f64) -> f64 {
    (f - rate * (f / rate).round()).abs()
}

#[test]
fn worked_examples_of_one_rate() {
    // Common practice: (true, rate, seen, zone).
    let cases = [
        (100.0, 80.0, 20.0, 3),
        (1200.0, 1000.0, 200.0, 3),
        (50.0, 80.0, 30.0, 2),
        (0.0, 48.0, 0.0, 1),
        (3999.0, 8000.0, 3999.0, 1),
        (4001.0, 8000.0, 3999.0, 2),
        // On a fold: counted with the zone above.
        (4000.0, 8000.0, 4000.0, 2),
        (8000.0, 8000.0, 0.0, 3),
        (12_000.0, 8000.0, 4000.0, 4),
        // A 62.5 kHz oscillator in a 1 kS/s recorder looks like a constant.
        (62_500.0, 1000.0, 500.0, 126),
        (1e9, 25.0, 0.0, 80_000_001),
        (999_999_993.0, 25.0, 7.0, 80_000_000),
    ];
    for (f, rate, seen, z) in cases {
        let f = TrueHz(f);
        assert_eq!(fold(f, rate), SeenHz(seen), "{f:?} at {rate}");
        assert_eq!(zone(f, rate), z, "{f:?} at {rate}");
        let by_chain = Chain::single(rate).unwrap().see(f);
        assert_eq!(by_chain.seen, SeenHz(seen), "{f:?} at {rate}");
        assert_eq!(by_chain.zone, z, "{f:?} at {rate}");
        assert_eq!(by_chain.sense.is_inverted(), z % 2 == 0, "{f:?} at {rate}");
    }
}

#[test]
fn ladders_list_both_signs_once() {
    let hz = |ladder: Vec<Rung>| -> Vec<(f64, u64)> {
        ladder.iter().map(|r| (r.true_hz.0, r.zone)).collect()
    };
    assert_eq!(
        hz(unfold(SeenHz(20.0), 80.0, TrueHz(180.0)).unwrap()),
        [(20.0, 1), (60.0, 2), (100.0, 3), (140.0, 4), (180.0, 5)]
    );
    assert_eq!(
        hz(unfold(SeenHz(0.0), 80.0, TrueHz(170.0)).unwrap()),
        [(0.0, 1), (80.0, 3), (160.0, 5)]
    );
    assert_eq!(
        hz(unfold(SeenHz(40.0), 80.0, TrueHz(210.0)).unwrap()),
        [(40.0, 2), (120.0, 4), (200.0, 6)]
    );
    assert_eq!(hz(unfold(SeenHz(20.0), 80.0, TrueHz(19.0)).unwrap()), []);
}

#[test]
fn folding_is_exact_where_the_plain_formula_is_not() {
    // 2f and f ± k·r of such values are exact in binary, so equality is asked for.
    let mut rng = StdRng::seed_from_u64(1);
    let mut naive_errors = 0;
    for _ in 0..20_000 {
        let rate: f64 = rng.random_range(1.0..200_000.0);
        let f: f64 = rng.random_range(0.0..1e9);
        // The IEEE remainder operator is exact and shares no code with `fold`.
        let rem = f % rate;
        let exact = rem.min(rate - rem);
        assert_eq!(fold(TrueHz(f), rate).0, exact, "f = {f:?}, rate = {rate:?}");
        naive_errors += usize::from(naive_fold(f, rate) != exact);
    }
    assert!(
        naive_errors > 1000,
        "the plain formula erred {naive_errors} times only"
    );
}

/// Random chains: plain, decimating, interpolating, whole ratios and not.
fn random_chain(rng: &mut StdRng, stages: usize) -> Chain {
    let mut rates = vec![rng.random_range(50.0..2000.0)];
    while rates.len() < stages {
        let last = rates[rates.len() - 1];
        let next = match rng.random_range(0..4) {
            0 => last / f64::from(rng.random_range(2..7)),
            1 => last / rng.random_range(1.0..6.0),
            2 => last * rng.random_range(1.0..4.0),
            _ => last,
        };
        rates.push(next);
    }
    Chain::new(rates).unwrap()
}

/// Checks every rung of a ladder against the forward direction; `Err` says why not.
fn check_rungs(chain: &Chain, nu: SeenHz, ladder: &[Rung]) -> Result<(), String> {
    for pair in ladder.windows(2) {
        if pair[0].true_hz >= pair[1].true_hz {
            return Err(format!("not rising at {pair:?}"));
        }
    }
    for rung in ladder {
        // Budget: the rung's own rounding, and one of each stage's rates.
        let tolerance = 8.0 * f64::EPSILON * (rung.true_hz.0 + chain.converter_rate_hz());
        let close = |seen: SeenHz| (seen.0 - nu.0).abs() <= tolerance;
        let there = if rung.image {
            let images = chain.images(rung.true_hz).unwrap();
            images
                .iter()
                .any(|s| close(s.seen) && s.zone == rung.zone && s.sense == rung.sense)
        } else {
            let s = chain.see(rung.true_hz);
            close(s.seen) && s.zone == rung.zone && s.sense == rung.sense
        };
        if !there {
            return Err(format!("{rung:?} does not come back to {nu:?}"));
        }
        if (rung.zone % 2 == 0) != rung.sense.is_inverted() {
            return Err(format!("{rung:?}: zone and sense disagree"));
        }
    }
    Ok(())
}

#[test]
fn every_rung_comes_back_through_random_chains() {
    let mut rng = StdRng::seed_from_u64(2);
    let (mut rungs_seen, mut images_seen) = (0, 0);
    for case in 0..2000 {
        let stages = 1 + case % 4;
        let chain = random_chain(&mut rng, stages);
        let nu = SeenHz(0.5 * chain.file_rate_hz() * rng.random_range(0.001..0.999));
        let ladder = chain.unfold(nu, TrueHz(5000.0)).unwrap();
        check_rungs(&chain, nu, &ladder)
            .unwrap_or_else(|why| panic!("case {case}, {chain:?}: {why}"));
        rungs_seen += ladder.len();
        images_seen += ladder.iter().filter(|r| r.image).count();
    }
    assert!(
        rungs_seen > 20_000 && images_seen > 2000,
        "{rungs_seen}, {images_seen}"
    );
}

#[test]
fn the_rung_checker_can_fail() {
    let chain = Chain::new(vec![1000.0, 400.0]).unwrap();
    let nu = SeenHz(70.0);
    let good = chain.unfold(nu, TrueHz(3000.0)).unwrap();
    check_rungs(&chain, nu, &good).unwrap();
    let mut moved = good.clone();
    moved[2].true_hz.0 += 1e-6;
    assert!(check_rungs(&chain, nu, &moved).is_err());
    let mut wrong_zone = good.clone();
    wrong_zone[1].zone += 2;
    assert!(check_rungs(&chain, nu, &wrong_zone).is_err());
    let mut doubled = good.clone();
    doubled.insert(1, good[1]);
    assert!(check_rungs(&chain, nu, &doubled).is_err());
    let mut image = good;
    image[0].image = true;
    assert!(check_rungs(&chain, nu, &image).is_err());
}

/// Intervals of `[from, to]` in which the map does not turn, in order, each with
/// the seen frequency at its ends. The map has slope ±1 wherever it has one, so an
/// interval holds no turn exactly if the seen frequency moves by its whole length;
/// any other is halved, down to a sliver around the turn itself.
fn straight_pieces(chain: &Chain, from: f64, to: f64, pieces: &mut Vec<[f64; 2]>) {
    let at = |f: f64| chain.see(TrueHz(f)).seen.0;
    let (a, b) = (at(from), at(to));
    if ((b - a).abs() - (to - from)).abs() < 1e-9 {
        pieces.push([a, b]);
    } else if to - from > 1e-7 {
        let middle = 0.5 * (from + to);
        straight_pieces(chain, from, middle, pieces);
        straight_pieces(chain, middle, to, pieces);
    }
}

#[test]
fn no_rung_is_missing() {
    let mut rng = StdRng::seed_from_u64(3);
    for case in 0..400 {
        let chain = random_chain(&mut rng, 1 + case % 4);
        let nu = 0.5 * chain.file_rate_hz() * rng.random_range(0.05..0.95);
        let top = rng.random_range(1.0..100.0) * chain.file_rate_hz();
        let mut pieces = Vec::new();
        straight_pieces(&chain, 0.0, top, &mut pieces);
        let crossings = pieces
            .iter()
            .filter(|[a, b]| (*a < nu) != (*b < nu))
            .count();
        let ladder = chain.unfold(SeenHz(nu), TrueHz(top)).unwrap();
        let listed = ladder.iter().filter(|r| !r.image).count();
        assert_eq!(listed, crossings, "case {case}, {chain:?}, ν = {nu}");
    }
}

#[test]
fn every_image_has_its_rung() {
    let mut rng = StdRng::seed_from_u64(4);
    let mut images_seen = 0;
    for case in 0..1000 {
        let chain = random_chain(&mut rng, 2 + case % 3);
        let f = TrueHz(rng.random_range(1.0..3000.0));
        for image in chain.images(f).unwrap() {
            images_seen += 1;
            // A rung just beside ν: the image's own rounding must not push ν past
            // the end of the file's band.
            let nu = SeenHz(image.seen.0.min(0.5 * chain.file_rate_hz()));
            let ladder = chain.unfold(nu, TrueHz(3001.0)).unwrap();
            assert!(
                ladder.iter().any(|r| (r.true_hz.0 - f.0).abs() < 1e-8),
                "case {case}: {image:?} of {f:?} in {chain:?}"
            );
        }
    }
    assert!(images_seen > 500, "{images_seen}");
}

#[test]
fn images_of_an_interpolated_tone() {
    // Common practice: 3 kHz at 8 kS/s brought to 24 kS/s without a filter shows
    // also at 8 − 3, 8 + 3 kHz; 16 − 3 kHz is beyond the new half rate.
    let chain = Chain::new(vec![8000.0, 24_000.0]).unwrap();
    let images = chain.images(TrueHz(3000.0)).unwrap();
    let got: Vec<_> = images.iter().map(|s| (s.seen.0, s.zone, s.sense)).collect();
    assert_eq!(
        got,
        [(5000.0, 2, Sense::Inverted), (11_000.0, 3, Sense::Upright)]
    );
    assert_eq!(chain.see(TrueHz(3000.0)).seen, SeenHz(3000.0));
    // The constant and the half rate have their images in pairs that coincide.
    let hz = |f| -> Vec<f64> {
        let images = chain.images(TrueHz(f)).unwrap();
        images.iter().map(|s| s.seen.0).collect()
    };
    assert_eq!(hz(0.0), [8000.0]);
    assert_eq!(hz(4000.0), [12_000.0]);
    // Nothing but images can show above the old half rate.
    let ladder = chain.unfold(SeenHz(5000.0), TrueHz(9000.0)).unwrap();
    let got: Vec<_> = ladder
        .iter()
        .map(|r| (r.true_hz.0, r.zone, r.image))
        .collect();
    assert_eq!(got, [(3000.0, 2, true), (5000.0, 3, true)]);
    assert!(
        Chain::single(8000.0)
            .unwrap()
            .images(TrueHz(1.0))
            .unwrap()
            .is_empty()
    );
}

#[test]
fn a_line_that_is_also_its_image_is_listed_as_itself() {
    // Up by three and down again: the images of 200 Hz fold back onto 200 Hz.
    let chain = Chain::new(vec![1000.0, 3000.0, 1000.0]).unwrap();
    let ladder = chain.unfold(SeenHz(200.0), TrueHz(1500.0)).unwrap();
    let got: Vec<_> = ladder
        .iter()
        .map(|r| (r.true_hz.0, r.zone, r.image))
        .collect();
    assert_eq!(
        got,
        [(200.0, 1, false), (800.0, 2, false), (1200.0, 3, false)]
    );
}

/// Sense by numeric slope of the map; `None` beside a turn.
fn slope(chain: &Chain, f: f64) -> Option<f64> {
    let h = 1e-5;
    let at = |f: f64| chain.see(TrueHz(f)).seen.0;
    let slope = (at(f + h) - at(f - h)) / (2.0 * h);
    // The map has slope ±1 everywhere else; rounding is 1e-11 of that here.
    (slope.abs() > 0.999).then_some(slope)
}

#[test]
fn inversion_is_the_slope_of_the_map() {
    let mut rng = StdRng::seed_from_u64(5);
    let (mut inverted, mut upright) = (0, 0);
    for case in 0..20_000 {
        let chain = random_chain(&mut rng, 1 + case % 4);
        let f = rng.random_range(1.0..5000.0);
        let seen = chain.see(TrueHz(f));
        let Some(slope) = slope(&chain, f) else {
            continue;
        };
        assert_eq!(
            seen.sense.sign(),
            slope.signum(),
            "case {case}: {f} in {chain:?}"
        );
        assert_eq!(
            seen.zone.is_multiple_of(2),
            slope < 0.0,
            "case {case}: {f} in {chain:?}"
        );
        if slope < 0.0 {
            inverted += 1
        } else {
            upright += 1
        }
    }
    // Both kinds are met, so neither a constant sense nor a constant sign passes.
    assert!(inverted > 5000 && upright > 5000, "{inverted} {upright}");
}

#[test]
fn zone_counts_the_monotone_pieces() {
    let mut rng = StdRng::seed_from_u64(6);
    let mut turns_seen = 0;
    for case in 0..400 {
        let chain = random_chain(&mut rng, 1 + case % 4);
        let top = rng.random_range(1.0..100.0) * chain.file_rate_hz();
        let mut pieces = Vec::new();
        straight_pieces(&chain, 0.0, top, &mut pieces);
        let rises: Vec<bool> = pieces.iter().map(|[a, b]| b > a).collect();
        let turns = rises.windows(2).filter(|w| w[0] != w[1]).count() as u64;
        turns_seen += turns;
        assert_eq!(
            chain.see(TrueHz(top)).zone,
            turns + 1,
            "case {case}: up to {top} in {chain:?}"
        );
    }
    assert!(turns_seen > 10_000, "{turns_seen}");
}

#[test]
fn whole_decimation_gives_the_zone_of_the_last_rate() {
    let mut rng = StdRng::seed_from_u64(7);
    // The second group divides into rates that are not whole multiples to the bit.
    let chains = [
        vec![96_000.0, 48_000.0, 8000.0],
        vec![48_000.0, 8000.0],
        vec![48_000.0, 48_000.0, 16_000.0],
        vec![44_100.0, 14_700.0, 4900.0],
        vec![48_000.0 / 1.001, 48_000.0 / 1.001 / 6.0],
        vec![48_000.3, 16_000.1, 16_000.1 / 7.0],
    ];
    for rates in chains {
        let last = rates[rates.len() - 1];
        let chain = Chain::new(rates).unwrap();
        for _ in 0..5000 {
            let f = TrueHz(rng.random_range(0.0..1e6));
            let seen = chain.see(f);
            assert_eq!(seen.zone, zone(f, last), "{f:?} in {chain:?}");
            // Budget: one rounding per stage of numbers up to the first rate.
            assert!(
                (seen.seen.0 - fold(f, last).0).abs() < 1e-8,
                "{f:?} in {chain:?}"
            );
        }
    }
    // Common practice: on the folds of every stage, too.
    let chain = Chain::new(vec![48_000.0, 8000.0]).unwrap();
    for k in 0..40 {
        let f = TrueHz(4000.0 * f64::from(k));
        assert_eq!(chain.see(f).zone, zone(f, 8000.0), "{f:?}");
        assert_eq!(chain.see(f).seen, fold(f, 8000.0), "{f:?}");
    }
    // And a chain of another ratio differs, or this test would say nothing.
    let odd = Chain::new(vec![48_000.0, 11_025.0]).unwrap();
    assert_ne!(
        odd.see(TrueHz(30_000.0)).zone,
        zone(TrueHz(30_000.0), 11_025.0)
    );
    assert_ne!(
        odd.see(TrueHz(30_000.0)).seen,
        fold(TrueHz(30_000.0), 11_025.0)
    );
}

#[test]
fn edge_rungs_agree_with_the_forward_zone() {
    let chains = [
        vec![48_000.0, 8000.0],
        vec![8000.0],
        vec![96_000.0, 32_000.0, 8000.0],
        vec![1000.0, 300.0],
        vec![1000.0, 400.0, 100.0],
        vec![800.0, 800.0],
    ];
    for rates in chains {
        let chain = Chain::new(rates).unwrap();
        for nu in [0.0, 0.5 * chain.file_rate_hz()] {
            for rung in chain.unfold(SeenHz(nu), TrueHz(200_000.0)).unwrap() {
                let seen = chain.see(rung.true_hz);
                assert_eq!(
                    (seen.seen.0, seen.zone, seen.sense),
                    (nu, rung.zone, rung.sense),
                    "{rung:?} in {chain:?}"
                );
            }
        }
    }
}

#[test]
fn one_stage_ladders_agree() {
    let mut rng = StdRng::seed_from_u64(8);
    for _ in 0..200 {
        let rate = rng.random_range(10.0..1000.0);
        for part in [0.0, rng.random_range(0.0..1.0), 1.0] {
            let nu = SeenHz(0.5 * rate * part);
            let chain = Chain::single(rate).unwrap();
            let up_to = TrueHz(rng.random_range(0.0..20_000.0));
            assert_eq!(chain.unfold(nu, up_to), unfold(nu, rate, up_to));
        }
    }
}

#[test]
fn a_fast_clock_is_a_lower_frequency() {
    let chain = Chain::new(vec![48_000.0, 8000.0]).unwrap();
    // 100 ppm at 40 kHz are 4 Hz: 39 996.0004 Hz shows at 3.9996 Hz.
    let seen = chain.see_with_clock(TrueHz(40_000.0), 1e-4);
    let expected = 40_000.0 - 40_000.0 / 1.0001;
    assert!((seen.seen.0 - expected).abs() < 1e-10, "{seen:?}");
    assert!((expected - 3.9996).abs() < 1e-4);
    assert_eq!(seen.sense, Sense::Inverted);
    assert_eq!(
        chain.see_with_clock(TrueHz(777.0), 0.0),
        chain.see(TrueHz(777.0))
    );
}

#[test]
fn a_ladder_without_end_is_refused_and_can_still_be_walked() {
    let err = unfold(SeenHz(1.0), 25.0, TrueHz(1e12)).unwrap_err();
    assert!(
        matches!(
            err,
            LadderError::TooLong {
                limit: MAX_RUNGS,
                ..
            }
        ),
        "{err}"
    );
    let chain = Chain::new(vec![1e6, 1e5, 25.0]).unwrap();
    let err = chain.unfold(SeenHz(1.0), TrueHz(1e12)).unwrap_err();
    assert!(matches!(err, LadderError::TooLong { .. }), "{err}");
    let up = Chain::new(vec![1.0, 1e9]).unwrap();
    let err = up.images(TrueHz(0.3)).unwrap_err();
    assert!(matches!(err, LadderError::TooLong { .. }), "{err}");

    let third = rungs(SeenHz(1.0), 25.0, TrueHz(1e12))
        .unwrap()
        .nth(2)
        .unwrap();
    assert_eq!((third.true_hz, third.zone), (TrueHz(26.0), 3));
    let short = rungs(SeenHz(1e-5), 3e-5, TrueHz(0.999_995)).unwrap();
    assert_eq!(short.count(), 66_666);
}

#[test]
fn normalised_frequencies() {
    assert_eq!(cycles_per_sample(SeenHz(20.0), 80.0), 0.25);
    assert_eq!(pi_radians_per_sample(SeenHz(20.0), 80.0), 0.5);
    assert_eq!(pi_radians_per_sample(SeenHz(40.0), 80.0), 1.0);
}
