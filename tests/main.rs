//! Integration tests: the program and the library seen from outside.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod capture;
mod cli;
mod evidence;
mod fold;
mod frontend;
mod mended;
mod page;
mod planning;
mod sample_data;
mod scan;
mod sources;
mod spectrum;
mod suspects;
mod tones;
mod windows;
