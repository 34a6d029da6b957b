//! Each kind against its formulas and published values.

use super::{PLANT, hz, line, near, site, source, u95};
use foldtrace::sources::{Site, Steadiness};
use rand::{RngExt, SeedableRng};
use std::collections::HashSet;

#[test]
fn every_line_is_named_once_weighed_and_rests_on_a_latent() {
    for site in [site(PLANT), Site::builtin()] {
        for source in &site.catalogue.sources {
            let labels: HashSet<_> = source.lines.iter().map(|l| &l.label).collect();
            assert_eq!(labels.len(), source.lines.len(), "{}", source.name);
            let strongest = source.lines.iter().map(|l| l.weight).fold(0.0, f64::max);
            assert!(strongest > 0.7, "{}: {strongest}", source.name);
            for line in &source.lines {
                assert!(
                    line.weight > 0.0 && line.weight <= 1.0,
                    "{} {}",
                    source.name,
                    line.label
                );
                assert!(!line.terms.is_empty());
                let latents = site.catalogue.latents.len();
                assert!(line.terms.iter().all(|&(id, a)| id.0 < latents && a != 0.0));
                assert!(site.catalogue.prior_sd_hz(line) > 0.0);
            }
        }
    }
}

/// EN 50160: 50 Hz ± 1 % (from memory), and ± grows with the multiple.
#[test]
fn mains_multiples_carry_their_tolerance() {
    let plain = site("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\n");
    near(u95(&plain, "a", "1x"), 0.5, 1e-4);
    let plant = site(PLANT);
    assert_eq!(source(&plant, "supply mains").lines.len(), 80);
    assert_eq!(hz(&plant, "supply mains", "80x"), 4000.0);
    near(u95(&plant, "supply mains", "80x"), 40.0, 1e-2);
    let weight = |label| line(&plant, "supply mains", label).weight;
    assert!(weight("11x") > weight("12x") && weight("5x") > weight("7x"));
}

#[test]
fn shaft_vanes_reach_beyond_the_orders() {
    let plant = site(PLANT);
    let labels: Vec<_> = source(&plant, "fan shaft")
        .lines
        .iter()
        .map(|l| l.label.as_str())
        .collect();
    assert_eq!(labels, ["1x", "2x", "3x", "4x", "7x", "14x", "21x", "28x"]);
    // 1740 rpm is 29 Hz; seven vanes pass at 203 Hz.
    assert_eq!(hz(&plant, "fan shaft", "7x"), 203.0);
    assert!(line(&plant, "fan shaft", "7x").weight > line(&plant, "fan shaft", "4x").weight);
    // A vane multiple that is also an order is one line.
    let few = site("[[source]]\nname = \"a\"\nkind = \"shaft\"\nhz = 29\norders = 8\nvanes = 4\n");
    assert_eq!(source(&few, "a").lines.len(), 10);
}

#[test]
fn clock_sidebands_and_crystals() {
    let plant = site(PLANT);
    assert_eq!(source(&plant, "gauge converter").lines.len(), 3 * 5);
    assert_eq!(hz(&plant, "gauge converter", "3x+1s"), 187_630.0);
    assert_eq!(hz(&plant, "gauge converter", "2x-2s"), 124_740.0);
    let steadiness = |tolerance: &str| {
        let text = format!("[[source]]\nname = \"a\"\nkind = \"clock\"\nhz = 62500\n{tolerance}");
        site(&text).catalogue.latents[0].steadiness
    };
    assert_eq!(steadiness(""), Steadiness::Quartz);
    assert_eq!(steadiness("tolerance = \"1000 ppm\""), Steadiness::Quartz);
    assert_eq!(steadiness("tolerance = \"0.1 %\""), Steadiness::Quartz);
    assert_eq!(steadiness("tolerance = \"62.6 Hz\""), Steadiness::Free);
}

/// Holmes & Lipo 2003 (from memory): m + n odd, so that no even sideband stands by
/// an even multiple of the carrier and no odd one by an odd multiple.
#[test]
fn drive_sidebands_have_odd_m_plus_n() {
    let plant = site(PLANT);
    let labels: HashSet<_> = source(&plant, "pump drive")
        .lines
        .iter()
        .map(|l| l.label.as_str())
        .collect();
    for (label, there) in [
        ("1o", true),
        ("1c", true),
        ("2c", false),
        ("1c+2o", true),
        ("1c+1o", false),
        ("2c-1o", true),
        ("2c-4o", false),
        ("2c-5o", true),
        ("3c-6o", true),
        ("3c-8o", false),
        ("4c-1o", false),
    ] {
        assert_eq!(labels.contains(label), there, "{label}");
    }
    assert_eq!(labels.len(), 1 + 7 + 6 + 7);
    assert_eq!(hz(&plant, "pump drive", "2c-5o"), 8000.0 - 210.0);
    // Both latents count: 2 × 80 Hz and 5 × 1 Hz, added in squares.
    near(
        u95(&plant, "pump drive", "2c-5o"),
        160.0_f64.hypot(5.0),
        0.01,
    );
}

/// Synchronous speed 120 f/p: 4 poles at 50 Hz turn at 1500 rpm, 2 poles at 60 Hz
/// at 3600 rpm (common practice).
#[test]
fn synchronous_speeds() {
    use foldtrace::sources::motor::synchronous_hz;
    assert_eq!(60.0 * synchronous_hz(50.0, 4), 1500.0);
    assert_eq!(60.0 * synchronous_hz(60.0, 2), 3600.0);
    near(60.0 * synchronous_hz(50.0, 6), 1000.0, 1e-9);
}

const MOTOR: &str = "[[source]]\nname = \"m\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\n";

/// A 4-pole motor at 1450 rpm on 50 Hz: slip speed 50 rpm = 0.8333 Hz, so pole pass
/// is 4 × 0.8333 = 3.333 Hz (common practice).
#[test]
fn motor_lines_from_the_nameplate() {
    let m = site(&format!("{MOTOR}rpm = 1450\nrotor_bars = 28\n"));
    near(hz(&m, "m", "1x"), 1450.0 / 60.0, 1e-9);
    near(hz(&m, "m", "2f"), 100.0, 1e-9);
    near(hz(&m, "m", "1x+1p") - hz(&m, "m", "1x"), 10.0 / 3.0, 1e-9);
    near(hz(&m, "m", "2x-2p"), 2.0 * 1450.0 / 60.0 - 20.0 / 3.0, 1e-9);
    // The current's lower sideband stands at f(1 − 2·slip), slip 1/30.
    near(hz(&m, "m", "1f-1p"), 50.0 * (1.0 - 2.0 / 30.0), 1e-9);
    near(hz(&m, "m", "1b+2f"), 28.0 * 1450.0 / 60.0 + 100.0, 1e-9);
    near(hz(&m, "m", "2b-1f"), 56.0 * 1450.0 / 60.0 - 50.0, 1e-9);
    // Undescribed load: from synchronous speed down to twice the slip, 50 rpm either
    // way, and with it the supply's ± 1 %.
    near(u95(&m, "m", "1x"), (50.0_f64 / 60.0).hypot(0.25), 1e-4);
    // Without bars there are no bar lines.
    let plain = site(&format!("{MOTOR}rpm = 1450\ntolerance = \"1 %\"\n"));
    assert!(
        source(&plain, "m")
            .lines
            .iter()
            .all(|l| !l.label.contains('b'))
    );
    near(u95(&plain, "m", "1x"), 1450.0 / 60.0 * 0.01, 1e-4);
}

#[test]
fn motor_speed_from_a_slip_range() {
    for slip in ["\"2..5 %\"", "[0.02, 0.05]"] {
        let m = site(&format!(
            "{MOTOR}slip = {slip}\nmains_tolerance = \"1 ppm\"\n"
        ));
        near(hz(&m, "m", "1x"), 25.0 * (1.0 - 0.035), 1e-9);
        near(u95(&m, "m", "1x"), 25.0 * 0.015, 1e-4);
    }
}

/// At a given torque the slip in hertz stays: 1450 rpm is 1.667 Hz below 50 Hz on
/// the stator's scale, and so is the speed on a 42 Hz output.
#[test]
fn a_motor_on_a_drive_shares_its_output() {
    let plant = site(PLANT);
    near(
        hz(&plant, "pump motor", "1x"),
        (42.0 - 5.0 / 3.0) / 2.0,
        1e-9,
    );
    assert_eq!(hz(&plant, "pump motor", "2f"), 84.0);
    let output = line(&plant, "pump drive", "1o").terms[0].0;
    assert_eq!(line(&plant, "pump motor", "2f").terms, [(output, 2.0)]);
    // The gear rides on the motor's shaft at half speed: mesh 31/2 of it.
    let shaft = line(&plant, "pump motor", "1x").terms[0].0;
    assert_eq!(line(&plant, "idler gear", "1g").terms, [(shaft, 15.5)]);
    assert_eq!(
        line(&plant, "idler gear", "2g-3x").terms,
        [(shaft, 31.0 - 1.5)]
    );
}

/// A drive that runs near 50 Hz does not change what the nameplate is stated for.
#[test]
fn a_nameplate_keeps_its_own_frequency() {
    let on_drive = |output: f64, more: &str| {
        let s = site(&format!(
            "[[source]]\nname = \"d\"\nkind = \"drive\"\ncarrier_hz = 4000\noutput_hz = {output:?}\n\
             [[source]]\nname = \"m\"\nkind = \"motor\"\nfed_by = \"d\"\npoles = 4\n{more}"
        ));
        hz(&s, "m", "1x")
    };
    near(
        on_drive(48.5, "rpm = 1450\n"),
        (48.5 - 5.0 / 3.0) / 2.0,
        1e-9,
    );
    near(on_drive(48.5, "rpm = 1740\n"), (48.5 - 2.0) / 2.0, 1e-9);
    // Neither 50 nor 60 Hz fits: the output's own, or the one that is given.
    near(on_drive(87.0, "rpm = 2550\n"), 42.5, 1e-9);
    near(
        on_drive(70.0, "rpm = 2550\nmains_hz = 87\n"),
        (70.0 - 2.0) / 2.0,
        1e-9,
    );
}

#[test]
fn a_gear_may_ride_on_a_gear() {
    let s = site(
        "[[source]]\nname = \"a\"\nkind = \"shaft\"\nrpm = 1500\n\
         [[source]]\nname = \"b\"\nkind = \"gear\"\non = \"a\"\nteeth = 20\nratio = 0.4\n\
         [[source]]\nname = \"c\"\nkind = \"gear\"\non = \"b\"\nteeth = 30\n",
    );
    near(hz(&s, "b", "1g"), 25.0 * 0.4 * 20.0, 1e-9);
    near(hz(&s, "c", "1g"), 25.0 * 0.4 * 30.0, 1e-9);
    assert_eq!(source(&s, "c").lines.len(), 4 * 7);
}

/// The orders widely published for this geometry (9 balls of 7.94 mm on 39.04 mm,
/// no contact angle; from memory): inner 5.415, outer 3.585, cage 0.3983 and, for
/// a flaw on a ball striking twice a spin, 4.7135.
#[test]
fn bearing_defect_frequencies_of_a_known_bearing() {
    let plant = site(PLANT);
    for (label, orders) in [
        ("1bpfi", 5.415),
        ("1bpfo", 3.585),
        ("1ftf", 0.3983),
        ("2bsf", 4.7135),
    ] {
        near(hz(&plant, "fan bearing", label) / 29.0, orders, 6e-4);
    }
}

#[test]
fn bearing_identities() {
    let mut rng = rand::rngs::StdRng::seed_from_u64(17);
    for case in 0..200 {
        let balls: u32 = rng.random_range(4..20);
        let pitch: f64 = rng.random_range(20.0..200.0);
        let ball = pitch * rng.random_range(0.05..0.9) * 3.0 / f64::from(balls);
        let angle: f64 = rng.random_range(0.0..45.0);
        let s = site(&format!(
            "[[source]]\nname = \"s\"\nkind = \"shaft\"\nhz = 10\n[[source]]\nname = \"b\"\nkind = \"bearing\"\n\
             on = \"s\"\nballs = {balls}\nball_mm = {ball:.6}\npitch_mm = {pitch:.6}\nangle_deg = {angle:.6}\n"
        ));
        let at = |label| hz(&s, "b", label);
        let n = f64::from(balls);
        let close = |a: f64, b: f64| (a - b).abs() < 1e-9 * b.abs();
        assert!(close(at("1bpfo") + at("1bpfi"), n * 10.0), "case {case}");
        assert!(close(at("1ftf") * n, at("1bpfo")), "case {case}");
        assert!(close(at("2bpfi+1x") - at("2bpfi-1x"), 20.0), "case {case}");
        assert!(line(&s, "b", "1bpfo").extra_rel_sd > 0.0);
    }
}
