//! Evidence from time.

pub mod lomb_scargle;
mod stamp_line;
pub mod timestamps;
