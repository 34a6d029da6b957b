//! What tells one scan from another.

/// What a scan is, as the journal's first line says it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Identity {
    /// Of the options that change results.
    pub options: u64,
    /// Of the sources and the recorder.
    pub site: u64,
    /// Of the names of all recordings.
    pub names: u64,
    /// How many recordings.
    pub recordings: usize,
}

impl Identity {
    /// As it is written, with its line end.
    pub fn line(&self) -> String {
        format!(
            "scan 1 {} options {:016x} site {:016x} names {:016x} of {}\n",
            env!("CARGO_PKG_VERSION"),
            self.options,
            self.site,
            self.names,
            self.recordings
        )
    }

    /// What differs from a journal's first line, in words.
    pub fn differs(&self, line: &str) -> Option<&'static str> {
        let mine = self.line();
        let pairs = mine.split_whitespace().zip(line.split_whitespace());
        let at = pairs.clone().position(|(a, b)| a != b);
        match at {
            None if mine.trim() == line.trim() => None,
            Some(4) => Some("had other options (--top, --rate, --channel)"),
            Some(6) => Some("had another site file, or the site file has changed"),
            Some(8 | 10) => Some("had other recordings"),
            _ => Some("was made by another version of foldtrace"),
        }
    }
}

/// 64-bit FNV-1a (Fowler, Noll, Vo): for accidents, not for adversaries.
#[derive(Debug, Clone, Copy)]
pub struct Checksum(u64);

impl Checksum {
    /// Of nothing.
    pub fn new() -> Self {
        Checksum(0xcbf2_9ce4_8422_2325)
    }

    /// With more bytes.
    pub fn add(&mut self, bytes: &[u8]) {
        for &b in bytes {
            self.0 = (self.0 ^ u64::from(b)).wrapping_mul(0x0000_0100_0000_01b3);
        }
    }

    /// The value.
    pub fn value(self) -> u64 {
        self.0
    }
}

impl Default for Checksum {
    fn default() -> Self {
        Self::new()
    }
}
