//! Integration tests: the program and the library seen from outside.

mod fold;
mod frontend;
mod sources;
mod windows;
