//! report

pub mod sources_table;
pub mod ladder;
