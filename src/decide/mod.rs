//! What follows from the stages before: which cause, which choice, which cure.

pub mod compare;
pub mod identify;
pub mod remedy;
