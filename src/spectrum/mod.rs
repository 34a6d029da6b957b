//! spectrum

pub mod window;
