//! Evidence from time, against outside values and on files made here.

mod gathered;
mod lomb_scargle;
mod stamped;
