//! One modulator run by itself: length, statistics, lines; captured runs, and what made them.

mod capture;
mod facts;
mod recognise;
mod seeds;

pub use capture::{Capture, CaptureTone, captured_tones};
pub use facts::{DitherFacts, SequenceFacts, SequenceLine, sequence_facts};
pub use recognise::{Recognised, Recognition, Search, recognise};
pub use seeds::{SeedTried, best_seeds};
