//! Placeholder: filled with the stage it checks.
