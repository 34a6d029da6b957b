//! Results out: the terminal table, the suspect list as CSV, everything as JSON, the page.
//! Nothing here computes; it formats.

pub mod json;
pub mod ladder;
pub mod page;
pub mod plan_table;
pub mod prediction;
pub mod reading;
pub mod reconciled;
pub mod sources_table;
pub mod strip;
pub mod suspect_list;
pub mod table;
pub mod text;
