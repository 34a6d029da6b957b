//! Values on the command line, checked as they are parsed.

use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};

/// Which channels to use.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Channel {
    /// All, tones merged across them.
    All,
    /// One, counted from 1.
    One(NonZeroUsize),
}

/// `all`, or a number from 1.
pub fn channel(text: &str) -> Result<Channel, String> {
    if text == "all" {
        return Ok(Channel::All);
    }
    text.parse()
        .map(Channel::One)
        .map_err(|_| "give a channel number from 1, or `all`".to_owned())
}

/// Beyond any signal there is; keeps zones within what a number can count.
const HIGHEST_HZ: f64 = 1e12;
/// One sample in twelve days.
const LOWEST_RATE_HZ: f64 = 1e-6;

fn finite(text: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(v) if v.is_finite() && v <= HIGHEST_HZ => Ok(v),
        Ok(v) if v.is_finite() => Err(format!("must be at most {HIGHEST_HZ:e} Hz")),
        _ => Err("give a number in Hz, such as 8000 or 0.5".into()),
    }
}

/// A frequency above 0, Hz.
pub fn positive(text: &str) -> Result<f64, String> {
    match finite(text)? {
        v if v >= LOWEST_RATE_HZ => Ok(v),
        v if v > 0.0 => Err(format!("must be at least {LOWEST_RATE_HZ:e} Hz")),
        _ => Err("must be above 0".into()),
    }
}

/// A count from 1.
pub fn how_many(text: &str) -> Result<NonZeroUsize, String> {
    text.parse()
        .map_err(|_| "give a whole number from 1".to_owned())
}

/// A frequency from 0, Hz.
pub fn not_negative(text: &str) -> Result<f64, String> {
    match finite(text)? {
        v if v >= 0.0 => Ok(v),
        _ => Err("must not be below 0".into()),
    }
}

/// What a picture is written as.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum DrawingKind {
    /// Pixels.
    Png,
    /// Lines and letters.
    Svg,
}

/// A picture to write.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Drawing {
    /// Where.
    pub path: PathBuf,
    /// By the ending of the name.
    pub kind: DrawingKind,
}

/// A file name that ends in `.png` or `.svg`.
pub fn drawing(text: &str) -> Result<Drawing, String> {
    let path = Path::new(text);
    let ending = path.extension().map(|e| e.to_ascii_lowercase());
    let kind = match ending.as_ref().and_then(|e| e.to_str()) {
        Some("png") => DrawingKind::Png,
        Some("svg") => DrawingKind::Svg,
        _ => return Err("give a name that ends in .png or .svg".into()),
    };
    Ok(Drawing {
        path: path.to_owned(),
        kind,
    })
}
