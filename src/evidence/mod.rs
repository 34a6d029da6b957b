//! Evidence from time.

pub mod baseband;
pub mod lomb_scargle;
pub mod phase;
mod stamp_line;
pub mod timestamps;
