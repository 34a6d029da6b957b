//! Results out: the terminal table, the suspect list as CSV, everything as JSON.
//! Nothing here computes; it formats.

pub mod json;
pub mod ladder;
pub mod plan_table;
pub mod prediction;
pub mod reconciled;
pub mod sources_table;
pub mod suspect_list;
pub mod table;
pub mod text;
