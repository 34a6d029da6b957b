//! Integration tests: the program and the library seen from outside.

mod capture;
