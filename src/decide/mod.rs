//! What follows from the stages before: which cause, which choice, which cure.

pub mod calibrate;
pub mod compare;
pub mod diff;
pub mod dossier;
pub mod export;
pub mod identify;
pub mod measure_list;
pub mod remedy;
