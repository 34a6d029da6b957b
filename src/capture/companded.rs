//! Logarithmic 8-bit samples after ITU-T G.711.
//!
//! Each code is a sign, a segment of three bits and a place of four bits within
//! it; from segment to segment the steps double. Values are those of the
//! recommendation's uniform codes (13 bits for A-law, 14 for mu-law), moved up
//! to 16 bits, in which full scale is 2^15 as for linear samples.

/// Decodes one A-law sample to 16 bits.
pub(super) fn a_law(code: u8) -> i16 {
    // Every second bit is sent inverted.
    let code = code ^ 0x55;
    let (segment, place) = take_apart(code);
    // In the middle of its interval.
    let middle = (place << 4) + 8;
    let magnitude = match segment {
        0 => middle,
        _ => (middle + 0x100) << (segment - 1),
    };
    if code & SIGN == 0 {
        -magnitude
    } else {
        magnitude
    }
}

/// Decodes one mu-law sample to 16 bits.
pub(super) fn mu_law(code: u8) -> i16 {
    // All bits are sent inverted.
    let code = !code;
    let (segment, place) = take_apart(code);
    // 33 of 14 bits, which the coder adds so that segments start at powers of 2.
    const BIAS: i16 = 33 << 2;
    let magnitude = (((place << 3) + BIAS) << segment) - BIAS;
    if code & SIGN == 0 {
        magnitude
    } else {
        -magnitude
    }
}

const SIGN: u8 = 0x80;

fn take_apart(code: u8) -> (u8, i16) {
    (code >> 4 & 7, i16::from(code & 0xF))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Values between the decision values of the recommendation's tables, built
    /// up step by step: so many steps of each length, from 0 on.
    fn values(runs: &[(usize, i16)]) -> Vec<i16> {
        let mut at = 0;
        let steps = runs.iter().flat_map(|&(n, step)| vec![step; n]);
        steps
            .map(|step| {
                at += step;
                at - step / 2
            })
            .collect()
    }

    #[test]
    fn codes_are_those_of_the_tables() {
        let doubling = |first: i16| (0..).map(move |n| (16, first << n));
        // G.711, tables 1a and 2a: 64 = 2^6 starts the second segment, 4096 ends
        // the last one; for mu-law 31 and 8159. The first interval of mu-law is
        // one wide, and its value is 0.
        let a: Vec<_> = [(32, 2)].into_iter().chain(doubling(4).take(6)).collect();
        let mu: Vec<_> = [(1, 1), (15, 2)]
            .into_iter()
            .chain(doubling(4).take(7))
            .collect();
        let end =
            |runs: &[(usize, i16)]| runs.iter().map(|&(n, step)| n as i16 * step).sum::<i16>();
        assert_eq!((end(&a), end(&mu)), (4096, 8159));
        let a = values(&a);
        let mu: Vec<i16> = [0]
            .into_iter()
            .chain(values(&mu).into_iter().skip(1))
            .collect();
        assert_eq!((a[0], a[127], mu[1], mu[127]), (1, 4032, 2, 8031));
        for n in 0..128u8 {
            let (a, mu) = (a[usize::from(n)] << 3, mu[usize::from(n)] << 2);
            assert_eq!(a_law((n | 0x80) ^ 0x55), a, "{n}");
            assert_eq!(a_law(n ^ 0x55), -a, "{n}");
            assert_eq!(mu_law(0xFF - n), mu, "{n}");
            assert_eq!(mu_law(0x7F - n), -mu, "{n}");
        }
    }
}
