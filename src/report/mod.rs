//! report

pub mod sources_table;
