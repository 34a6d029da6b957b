//! The foldtrace command line.
fn main() {}
