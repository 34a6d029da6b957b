//! How a recording will be analysed, as a value that can be printed and tested
//! without reading a sample.

/// Most samples per channel, and over all channels, that are transformed whole.
/// 2²¹ samples cost about 40 MB while they are in work.
const WHOLE_MAX: u64 = 1 << 21;
const WHOLE_MAX_ALL_CHANNELS: u64 = 1 << 22;

/// Segment of the averaged periodogram of longer recordings. Long enough that
/// 48 kHz gives 0.18 Hz, short enough to stay in a core's cache.
const SEGMENT: usize = 1 << 18;

/// The way a recording is analysed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "snake_case", tag = "way")]
pub enum Plan {
    /// One transform of everything.
    Whole {
        /// Samples per channel.
        samples: usize,
        /// Transform length, a little above `samples`.
        grid: usize,
    },
    /// Averaged segments to find, a second pass to measure.
    Segments {
        /// Samples per channel.
        samples: u64,
        /// Samples per segment; segments overlap by half.
        segment: usize,
    },
}

impl Plan {
    /// Plans for `frames` samples in each of `channels` channels.
    pub fn new(frames: u64, channels: usize) -> Plan {
        let all = frames.saturating_mul(channels as u64);
        if frames <= WHOLE_MAX && all <= WHOLE_MAX_ALL_CHANNELS {
            let samples = frames as usize;
            Plan::Whole {
                samples,
                grid: super::fft::next_fast_len(samples),
            }
        } else {
            // Many channels of a short recording: keep at least 8 segments.
            let mut segment = SEGMENT;
            while segment > 4096 && (segment as u64) * 8 > frames {
                segment /= 2;
            }
            Plan::Segments {
                samples: frames,
                segment,
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn short_whole_long_in_segments() {
        assert_eq!(
            Plan::new(40_009, 1),
            Plan::Whole {
                samples: 40_009,
                grid: 40_040
            }
        );
        assert!(matches!(
            Plan::new(172_800_000, 1),
            Plan::Segments {
                segment: SEGMENT,
                ..
            }
        ));
        assert!(matches!(
            Plan::new(1_000_000, 64),
            Plan::Segments {
                segment: 65_536,
                ..
            }
        ));
    }
}
