//! report

pub mod ladder;
pub mod sources_table;
