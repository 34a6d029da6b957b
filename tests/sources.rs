//! Site files: what they expand to, and what is said when they are wrong.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use foldtrace::frontend::Family;
use foldtrace::sources::{
    Kind, Line, MAX_LINES_PER_SOURCE, Problem, Site, SiteError, Source, Steadiness,
};
use rand::{RngExt, SeedableRng};
use std::collections::HashSet;
use std::io::Write;

fn site(text: &str) -> Site {
    Site::from_toml(text).unwrap_or_else(|error| panic!("{error}\n{text}"))
}

fn source<'s>(site: &'s Site, name: &str) -> &'s Source {
    let mut all = site.catalogue.sources.iter();
    all.find(|source| source.name == name).unwrap()
}

fn line<'s>(site: &'s Site, name: &str, label: &str) -> &'s Line {
    let mut all = source(site, name).lines.iter();
    all.find(|line| line.label == label)
        .unwrap_or_else(|| panic!("{name} has no line {label}"))
}

fn hz(site: &Site, name: &str, label: &str) -> f64 {
    site.catalogue.nominal_hz(line(site, name, label))
}

fn u95(site: &Site, name: &str, label: &str) -> f64 {
    1.96 * site.catalogue.prior_sd_hz(line(site, name, label))
}

#[track_caller]
fn near(got: f64, expected: f64, within: f64) {
    assert!(
        (got - expected).abs() <= within,
        "{got}, expected {expected} ± {within}"
    );
}

const PLANT: &str = r#"
[recorder]
clock_ppm = 100
bandwidth_hz = 400000
antialias = { family = "butterworth", order = 4, corner_hz = 2267.6 }
aperture_s = 0.0
stages = [48000, 8000]
full_scale = "50 m/s^2"

[[source]]
name = "supply mains"
kind = "mains"
hz = 50.0
tolerance = "1 %"
orders = 80

[[source]]
name = "idler gear"          # listed before what it rides on
kind = "gear"
teeth = 31
on = "pump motor"
ratio = 0.5

[[source]]
name = "pump motor"
kind = "motor"
fed_by = "pump drive"
poles = 4
rpm = 1450
rotor_bars = 28

[[source]]
name = "pump drive"
kind = "drive"
carrier_hz = 4000
carrier_tolerance = "2 %"
output_hz = 42.0
output_tolerance = "1 Hz"
orders = 3

[[source]]
name = "fan shaft"
kind = "shaft"
rpm = 1740
tolerance = "1 %"
orders = 4
vanes = 7

[[source]]
name = "fan bearing"
kind = "bearing"
on = "fan shaft"
balls = 9
ball_mm = 7.94
pitch_mm = 39.04
angle_deg = 0

[[source]]
name = "gauge converter"
kind = "clock"
hz = 62500
tolerance = "3 %"
orders = 3
sideband_hz = 130
sidebands = 2

[[source]]
name = "whistle"
kind = "tone"
hz = 3150
"#;

#[test]
fn a_whole_site_file_parses() {
    let site = site(PLANT);
    assert_eq!(site.recorder.clock_ppm, Some(100.0));
    assert_eq!(site.recorder.stages_hz, [48000.0, 8000.0]);
    assert_eq!(site.recorder.full_scale, Some((50.0, "m/s^2".to_owned())));
    assert_eq!(site.recorder.front_end.aperture_s, Some(0.0));
    assert_eq!(site.recorder.front_end.bandwidth_hz, Some(400_000.0));
    let filter = site.recorder.front_end.antialias.unwrap();
    assert_eq!(
        (filter.family, filter.order, filter.corner_hz),
        (Family::Butterworth, 4, 2267.6)
    );
    let names: Vec<_> = site
        .catalogue
        .sources
        .iter()
        .map(|s| (s.name.as_str(), s.kind))
        .collect();
    assert_eq!(
        names,
        [
            ("supply mains", Kind::Mains),
            ("idler gear", Kind::Gear),
            ("pump motor", Kind::Motor),
            ("pump drive", Kind::Drive),
            ("fan shaft", Kind::Shaft),
            ("fan bearing", Kind::Bearing),
            ("gauge converter", Kind::Clock),
            ("whistle", Kind::Tone),
        ]
    );
}

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
    // Undescribed load: from synchronous speed down to twice the slip.
    let spread = u95(&m, "m", "1x");
    assert!((0.83..1.0).contains(&spread), "{spread}");
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

/// (what is wrong, where, in which key, and a word of the message)
const WRONG: &[(&str, usize, &str, &str)] = &[
    (
        "[[source]]\nkind = \"mains\"\nhz = 50\n",
        1,
        "name",
        "missing",
    ),
    (
        "\n\n[[source]]\nname = \"a\"\nhz = 50\n",
        3,
        "kind",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mians\"\nhz = 50\n",
        3,
        "kind",
        "did you mean `mains`?",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"laser\"\nhz = 50\n",
        3,
        "kind",
        "mains, shaft, clock, drive, motor, gear, bearing, tone",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\n",
        1,
        "hz",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = -50\n",
        4,
        "hz",
        "must be positive, got -50",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 0\n",
        4,
        "hz",
        "must be positive",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = nan\n",
        4,
        "hz",
        "finite",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = -inf\n",
        4,
        "hz",
        "finite",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 1e300\n",
        4,
        "hz",
        "from",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = \"50\"\n",
        4,
        "hz",
        "must be a number",
    ),
    (
        "[[source]]\nname = 5\nkind = \"mains\"\nhz = 50\n",
        2,
        "name",
        "text",
    ),
    (
        "[[source]]\nname = \" \"\nkind = \"mains\"\nhz = 50\n",
        2,
        "name",
        "printable",
    ),
    (
        "[[source]]\nname = \"a\\u001b[31m\"\nkind = \"mains\"\nhz = 50\n",
        2,
        "name",
        "printable",
    ),
    (
        "[[source]]\nname = \"unlisted\"\nkind = \"mains\"\nhz = 50\n",
        2,
        "name",
        "another name",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norder = 4\n",
        5,
        "order",
        "did you mean `orders`?",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"tone\"\nhz = 50\norders = 4\n",
        5,
        "orders",
        "not known",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = 4.5\n",
        5,
        "orders",
        "whole number",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = 0\n",
        5,
        "orders",
        "positive",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = 99999999999\n",
        5,
        "orders",
        "10000",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = \"1 furlong\"\n",
        5,
        "tolerance",
        "unit",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = 1\n",
        5,
        "tolerance",
        "text with a unit",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = \"0 %\"\n",
        5,
        "tolerance",
        "positive",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = \"60 Hz\"\n",
        5,
        "tolerance",
        "below the frequency",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\n[[source]]\nname = \"a\"\nkind = \"tone\"\nhz = 5\n",
        6,
        "name",
        "line 1",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"shaft\"\n",
        1,
        "rpm",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"shaft\"\nhz = 25\nrpm = 1500\n",
        5,
        "rpm",
        "`hz`",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"clock\"\nhz = 25\nsidebands = 3\n",
        5,
        "sideband_hz",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"clock\"\nhz = 25\norders = 5000\nsideband_hz = 1\nsidebands = 2\n",
        7,
        "sidebands",
        "at most 0",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"drive\"\ncarrier_hz = 4000\n",
        1,
        "output_hz",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"drive\"\ncarrier_hz = 4000\noutput_hz = 42\norders = 9000\n",
        6,
        "orders",
        "from 1 to 1538",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 3\nrpm = 1450\n",
        5,
        "poles",
        "even",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\n",
        1,
        "rpm",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\npoles = 4\nrpm = 1450\n",
        1,
        "mains_hz",
        "missing",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 2\nrpm = 1450\n",
        6,
        "rpm",
        "synchronous speed 3000 rpm",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\nrpm = 1450\nslip = \"2..5 %\"\n",
        7,
        "slip",
        "`rpm`",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\nslip = [2, 5]\n",
        6,
        "slip",
        "slip",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"b\"\npoles = 4\nrpm = 1450\n",
        4,
        "fed_by",
        "no source",
    ),
    (
        "[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"pmup\"\npoles = 4\nrpm = 1450\n[[source]]\nname = \"pump\"\nkind = \"tone\"\nhz = 5\n",
        4,
        "fed_by",
        "did you mean `pump`?",
    ),
    (
        "[[source]]\nname = \"b\"\nkind = \"tone\"\nhz = 5\n[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"b\"\npoles = 4\nrpm = 1450\n",
        8,
        "fed_by",
        "of kind tone",
    ),
    (
        "[[source]]\nname = \"b\"\nkind = \"drive\"\ncarrier_hz = 4000\noutput_hz = 42\n[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"b\"\npoles = 12\nrpm = 1450\n",
        11,
        "rpm",
        "synchronous speed 420 rpm",
    ),
    (
        "[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\n",
        1,
        "on",
        "missing",
    ),
    (
        "[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"g\"\n",
        5,
        "on",
        "ride on itself",
    ),
    (
        "[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"h\"\n[[source]]\nname = \"h\"\nkind = \"gear\"\nteeth = 20\non = \"g\"\n",
        5,
        "on",
        "ride on itself",
    ),
    (
        "[[source]]\nname = \"m\"\nkind = \"mains\"\nhz = 50\n[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"m\"\n",
        9,
        "on",
        "of kind mains",
    ),
    (
        "[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"m\"\nratio = -1\n",
        6,
        "ratio",
        "positive",
    ),
    (
        "[[source]]\nname = \"b\"\nkind = \"bearing\"\non = \"s\"\nballs = 9\nball_mm = 40\npitch_mm = 39\n",
        6,
        "ball_mm",
        "fit",
    ),
    (
        "[[source]]\nname = \"b\"\nkind = \"bearing\"\non = \"s\"\nballs = 9\nball_mm = 8\npitch_mm = 39\nangle_deg = 90\n",
        8,
        "angle_deg",
        "90",
    ),
    ("[recorder]\nclock_ppm = 0\n", 2, "clock_ppm", "positive"),
    ("[recorder]\nclock = 100\n", 2, "clock", "clock_ppm"),
    ("[recorder]\nfull_scale = \"50\"\n", 2, "full_scale", "unit"),
    ("[recorder]\nstages = []\n", 2, "stages", "rates"),
    (
        "[recorder]\nstages = [48000, -8000]\n",
        2,
        "stages",
        "positive",
    ),
    ("[recorder]\naperture_s = -1\n", 2, "aperture_s", "from 0"),
    (
        "[recorder]\nantialias = { family = \"buterworth\", order = 4, corner_hz = 1 }\n",
        2,
        "family",
        "did you mean `butterworth`?",
    ),
    (
        "[recorder]\nantialias = { family = \"elliptic\", order = 4, corner_hz = 1, ripple_db = 1 }\n",
        2,
        "stop_db",
        "missing",
    ),
    (
        "[recorder]\nantialias = { family = \"bessel\", order = 40, corner_hz = 1 }\n",
        2,
        "order",
        "from 1 to 20",
    ),
    (
        "[recorder]\n[recorder.antialias]\nfamily = \"bessel\"\norder = 4\ncorner_hz = 1\nripple_db = 1\n",
        6,
        "ripple_db",
        "not known",
    ),
    ("[[recorder]]\nclock_ppm = 1\n", 1, "recorder", "one table"),
    ("[source]\nname = \"a\"\n", 1, "source", "double brackets"),
    (
        "[[sources]]\nname = \"a\"\n",
        1,
        "sources",
        "did you mean `source`?",
    ),
];

#[test]
fn each_mistake_is_told_with_its_line_and_key() {
    for &(text, line, key, word) in WRONG {
        let error = Site::from_toml(text).expect_err(text);
        let said = error.to_string();
        assert_eq!(error.line(), Some(line), "{text}\n{said}");
        assert_eq!(error.key_name(), Some(key), "{text}\n{said}");
        assert!(said.contains(word), "{text}\n{said}");
        assert!(
            said.starts_with(&format!("line {line}: key `{key}`: ")),
            "{said}"
        );
        assert!(!said.chars().any(char::is_control), "{said:?}");
    }
}

#[test]
fn what_is_not_toml_is_told_with_its_line() {
    for (text, line) in [
        ("[[source]]\nname = \"a\nkind = 1\n", 2),
        ("[[source]]\nname = \"a\"\nname = \"b\"\n", 3),
        ("[[source]]\r\nname = \"a\"\r\n]\r\n", 3),
        ("[recorder]\nclock_ppm = 12_\n", 2),
    ] {
        let error = Site::from_toml(text).expect_err(text);
        assert!(matches!(error, SiteError::Syntax { .. }), "{error}");
        assert_eq!(error.line(), Some(line), "{text}\n{error}");
        assert!(!error.to_string().chars().any(char::is_control), "{error}");
    }
    assert!(matches!(
        Site::from_toml("# nothing\n"),
        Err(SiteError::Empty)
    ));
    let deep = format!("a = {}", "[".repeat(100_000));
    assert!(Site::from_toml(&deep).is_err());
}

#[test]
fn a_site_file_of_a_recorder_only_keeps_the_builtin_sources() {
    let site = site("[recorder]\nclock_ppm = 20\n");
    assert_eq!(site.catalogue, Site::builtin().catalogue);
    assert_eq!(site.recorder.clock_ppm, Some(20.0));
}

#[test]
fn the_most_lines_a_source_may_have_are_taken() {
    let text = |orders| {
        format!("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = {orders}\n")
    };
    let most = site(&text(MAX_LINES_PER_SOURCE));
    assert_eq!(source(&most, "a").lines.len(), 10_000);
    assert!(Site::from_toml(&text(MAX_LINES_PER_SOURCE + 1)).is_err());
    let many: String = (0..21)
        .map(|i| text(MAX_LINES_PER_SOURCE).replace("\"a\"", &format!("\"a{i}\"")))
        .collect();
    let error = Site::from_toml(&many).unwrap_err();
    assert_eq!(
        (error.line(), error.key_name()),
        (Some(101), Some("source"))
    );
}

#[test]
fn plain_lists_with_each_separator() {
    for separator in [",", ";", "\t"] {
        let text = [
            "name,hz,tolerance,orders",
            "# what was found on the bench",
            "",
            "gauge oscillator,62500,3 %,5",
            "whistle,3150,,",
            "\"bell, small\",1200.5,2 Hz,1",
        ]
        .join("\n");
        // The quoted comma stays a comma.
        let text = text
            .replace(',', separator)
            .replace(&format!("bell{separator}"), "bell,");
        let site = Site::from_list(&text).unwrap_or_else(|error| panic!("{error}\n{text}"));
        let kinds: Vec<_> = site
            .catalogue
            .sources
            .iter()
            .map(|s| (s.kind, s.lines.len()))
            .collect();
        assert_eq!(kinds, [(Kind::Clock, 5), (Kind::Tone, 1), (Kind::Tone, 1)]);
        assert_eq!(site.catalogue.sources[2].name, "bell, small");
        assert!(
            site.catalogue
                .latents
                .iter()
                .all(|l| l.steadiness == Steadiness::Free)
        );
        near(u95(&site, "gauge oscillator", "5x"), 5.0 * 1875.0, 1.0);
        near(u95(&site, "whistle", "1x"), 31.5, 0.01);
        near(u95(&site, "bell, small", "1x"), 2.0, 0.001);
    }
    // Any order of columns, and only the two that are needed.
    let short = Site::from_list("Hz,Name\n50,hum\n").unwrap();
    assert_eq!(hz(&short, "hum", "1x"), 50.0);
}

#[test]
fn each_mistake_in_a_list_is_told_with_its_line_and_column() {
    for (text, line, key) in [
        ("name,hz\na,fifty\n", 2, "hz"),
        ("name,hz\n\n# note\na,-50\n", 4, "hz"),
        ("name,hz\r\na,1\r\nb,nan\r\n", 3, "hz"),
        ("name,hz\n,50\n", 2, "name"),
        ("name,hz\na,\n", 2, "hz"),
        ("name,hz\na\n", 2, "hz"),
        ("name,hz,tolerance\na,50,1\n", 2, "tolerance"),
        ("name,hz,tolerance\na,50,-1 %\n", 2, "tolerance"),
        ("name,hz,orders\na,50,0\n", 2, "orders"),
        ("name,hz,orders\na,50,1.5\n", 2, "orders"),
        ("name,hz,orders\na,50,20000\n", 2, "orders"),
        ("name,hz\na,50\nb,60\na,70\n", 4, "name"),
        ("name,hz,colour\na,50,red\n", 1, "colour"),
        ("name,hz,hz\na,50,50\n", 1, "hz"),
        ("name;hz\na;50,5\n", 2, "hz"),
    ] {
        let error = Site::from_list(text).expect_err(text);
        assert_eq!(error.line(), Some(line), "{text}\n{error}");
        assert_eq!(error.key_name(), Some(key), "{text}\n{error}");
    }
    let error = Site::from_list("name,hz\na,50,1 %\n").unwrap_err();
    assert_eq!(error.line(), Some(2), "{error}");
    assert!(matches!(
        Site::from_list("name,hz\n"),
        Err(SiteError::Empty)
    ));
}

#[test]
fn files_are_told_apart_by_content_and_name() {
    let folder = tempfile::tempdir().unwrap();
    let load = |name: &str, bytes: &[u8]| {
        let path = folder.path().join(name);
        std::fs::File::create(&path)
            .unwrap()
            .write_all(bytes)
            .unwrap();
        Site::load(&path)
    };
    assert_eq!(load("a.toml", PLANT.as_bytes()).unwrap(), site(PLANT));
    assert_eq!(load("noname", PLANT.as_bytes()).unwrap(), site(PLANT));
    let list = b"\xef\xbb\xbf# bench\nname;hz\nhum;50\n";
    assert_eq!(load("b.txt", list).unwrap().catalogue.sources.len(), 1);
    assert_eq!(load("b.toml", list).unwrap().catalogue.sources.len(), 1);
    let marked = format!("\u{feff}{PLANT}");
    assert_eq!(load("c.toml", marked.as_bytes()).unwrap(), site(PLANT));
    // A list by its name, whatever its heading.
    let error = load("d.csv", b"label,hz\nhum,50\n").unwrap_err();
    assert_eq!(error.key_name(), Some("label"));
    let error = load("e.toml", b"[recorder]\nfull_scale = \"\xff V\"\n").unwrap_err();
    assert!(matches!(error, SiteError::NotUtf8 { line: 2 }), "{error}");
    assert!(matches!(
        Site::load(&folder.path().join("none")),
        Err(SiteError::Read { .. })
    ));
    assert!(matches!(
        Site::load(folder.path()),
        Err(SiteError::Read { .. })
    ));
}

/// Every prefix of a good file, and the file with any one byte changed, gives a
/// site or one line of error.
#[test]
fn damaged_files_never_panic() {
    let list = "name;hz;tolerance;orders\n\"a;b\";50;1 %;3\nc;60;;\n";
    let mut rng = rand::rngs::StdRng::seed_from_u64(29);
    let mut refused = 0;
    let mut check = |text: &str| {
        for result in [Site::from_toml(text), Site::from_list(text)] {
            if let Err(error) = result {
                refused += 1;
                let said = error.to_string();
                assert!(
                    !said.is_empty() && !said.chars().any(char::is_control),
                    "{said:?}"
                );
            }
        }
    };
    for text in [PLANT, list] {
        for end in (0..=text.len()).filter(|&end| text.is_char_boundary(end)) {
            check(&text[..end]);
        }
        for _ in 0..2000 {
            let mut bytes = text.as_bytes().to_vec();
            let at = rng.random_range(0..bytes.len());
            bytes[at] = rng.random_range(0..128);
            check(&String::from_utf8(bytes).unwrap());
        }
    }
    assert!(refused > 1000);
}

#[test]
fn problems_say_what_would_help() {
    let error =
        Site::from_toml("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = -50\n").unwrap_err();
    assert_eq!(
        error.to_string(),
        "line 4: key `hz`: must be positive, got -50"
    );
    let SiteError::Key { problem, .. } = error else {
        panic!("not a key");
    };
    assert_eq!(problem, Problem::NotPositive { got: -50.0 });
}
