//! Results out: the terminal table, the suspect list as CSV, everything as JSON, the page.
//! Nothing here computes; it formats.

pub mod json;
pub mod ladder;
pub mod page;
pub mod reading;
pub mod sources_table;
pub mod strip;
pub mod suspect_list;
pub mod table;
pub mod text;
