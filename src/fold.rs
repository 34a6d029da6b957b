//! Sampling arithmetic: where an analog line is seen, and every analog line a
//! seen tone could be. Pure functions; nothing here reads a file.
