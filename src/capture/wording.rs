//! Numbers in notes and messages.

/// "1 row", "2 rows".
pub(super) fn count(n: u64, one: &str, many: &str) -> String {
    format!("{n} {}", if n == 1 { one } else { many })
}

/// Hertz to nine significant digits, which is finer than any clock is known,
/// without trailing zeros.
pub(super) fn nine_digits(hz: f64) -> String {
    let rounded: f64 = format!("{hz:.8e}").parse().unwrap_or(hz);
    rounded.to_string()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn one_and_many() {
        assert_eq!(count(0, "row", "rows"), "0 rows");
        assert_eq!(count(1, "row", "rows"), "1 row");
        assert_eq!(count(21, "row", "rows"), "21 rows");
    }

    #[test]
    fn digits_of_a_rate() {
        assert_eq!(nine_digits(2000.0), "2000");
        assert_eq!(nine_digits(8000.25), "8000.25");
        assert_eq!(nine_digits(1_000.000_000_04), "1000");
        assert_eq!(nine_digits(1.0 / 3e7), "0.0000000333333333");
    }
}
