//! report

pub mod ladder;
