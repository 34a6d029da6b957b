//! The generalised periodogram against astropy's (scripts/lomb_scargle_values.py).

use foldtrace::evidence::lomb_scargle::periodogram;

#[test]
fn powers_agree_with_astropy() {
    let text = include_str!("../reference/lomb_scargle.csv");
    let (mut times, mut values, mut powers) = (Vec::new(), Vec::new(), Vec::new());
    for line in text.lines().skip(1) {
        let cells: Vec<&str> = line.split(',').collect();
        let (x, y): (f64, f64) = (cells[1].parse().unwrap(), cells[2].parse().unwrap());
        if cells[0] == "sample" {
            times.push(x);
            values.push(y);
        } else {
            powers.push((x, y));
        }
    }
    assert_eq!((times.len(), powers.len()), (300, 12));
    for &(hz, expected) in &powers {
        let power = periodogram(&times, &values, hz);
        // Both in doubles: 300 terms, phases of up to 1000 turns.
        assert!(
            (power - expected).abs() < 1e-9,
            "{hz} Hz: {power} against {expected}"
        );
    }
    // The tone is at 237.4 Hz, and no other rung of its ladder comes near.
    let top = powers.iter().max_by(|a, b| a.1.total_cmp(&b.1)).unwrap();
    assert_eq!(top.0, 237.4);
}
