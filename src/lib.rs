//! foldtrace traces a tone found in a sampled recording back to the physical
//! sources that could have made it, whether the tone is real where it shows or
//! has folded down from above half the sample rate.
//!
//! Data flows one way: [`capture`] → [`spectrum`] → [`tones`] → [`evidence`] →
//! [`suspects`] → [`report`]. [`fold`] and [`frontend`] hold the sampling arithmetic and the
//! analog path before the converter; [`sources`] what is known of the site.
#![forbid(unsafe_code)]
#![cfg_attr(test, allow(clippy::unwrap_used, clippy::expect_used, clippy::panic))]

pub mod candidates;
pub mod capture;
pub mod evidence;
pub mod fold;
pub mod frontend;
pub mod plan;
pub mod predict;
pub mod reconcile;
pub mod report;
pub mod scan;
pub mod sources;
pub mod spectrum;
pub mod suspects;
pub mod tones;
pub mod triage;
pub mod units;
