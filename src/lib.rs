//! Thornmap maps the spurious tones of a fractional-N channel plan.
//!
//! The stages below form one line; a stage uses only those before it
//! (`tests/suite/tree.rs` checks this):
//! `base < modulator < spectrum < loop_model < tones < plan < assess < survey < decide < report < explore < cli`.

pub mod assess;
pub mod base;
pub mod cli;
pub mod decide;
pub mod loop_model;
pub mod modulator;
pub mod plan;
pub mod report;
pub mod spectrum;
pub mod survey;
pub mod tones;
