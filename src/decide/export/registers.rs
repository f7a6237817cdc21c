//! Driver words packed into the registers of a map that the user gives.

use serde::Serialize;

use crate::plan::{FieldPlace, RegisterMap};

use super::vectors::TestVector;
use super::words::{DriverWord, ExportChannel, FIELDS};

/// Register values of every channel and vector.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct RegisterValues {
    /// Registers in the order of the map.
    pub registers: Vec<RegisterHead>,
    /// One list of values a channel, in the order of the channels; `None` without a legal word.
    pub channels: Vec<Option<Vec<u64>>>,
    /// One list of values a vector, in the order of the vectors.
    pub vectors: Vec<Vec<u64>>,
}

/// What is known of a register.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct RegisterHead {
    /// Name.
    pub name: String,
    /// Bits.
    pub width: u32,
    /// Address on the bus; `None` when the map does not say.
    pub address: Option<u64>,
}

/// A word that a map does not hold.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum MapError {
    /// A name that is no field of a word.
    #[error("field \"{found}\" is unknown; fields are {known}")]
    UnknownField {
        /// The name found.
        found: String,
        /// The names there are.
        known: String,
    },
    /// A value wider than the bits that the map gives it.
    #[error("field \"{field}\" is too narrow: {place} needs {field} = {value}, the map holds the bits {mask:#x}")]
    TooNarrow {
        /// Field.
        field: String,
        /// Channel or vector.
        place: String,
        /// The value that does not fit.
        value: u64,
        /// Bits of the value that the map holds.
        mask: u64,
    },
}

/// Returns the registers of every channel and vector.
///
/// # Errors
/// `UnknownField`, and for each field that is too narrow its largest value with the channel that needs it.
pub fn register_values(
    map: &RegisterMap,
    channels: &[ExportChannel],
    vectors: &[TestVector],
) -> Result<RegisterValues, Vec<MapError>> {
    let mut problems: Vec<MapError> = map
        .fields
        .iter()
        .filter(|field| FIELDS.iter().all(|known| known.name != field.name))
        .map(|field| MapError::UnknownField {
            found: field.name.clone(),
            known: FIELDS.iter().map(|known| known.name).collect::<Vec<_>>().join(", "),
        })
        .collect();
    let of_channels: Vec<(String, &DriverWord)> =
        channels.iter().filter_map(|channel| Some((channel.place(), channel.word.as_ref()?))).collect();
    let of_vectors: Vec<(String, &DriverWord)> = vectors
        .iter()
        .map(|vector| (format!("test vector \"{}\" of group \"{}\"", vector.name, vector.group), &vector.word))
        .collect();
    for field in FIELDS {
        let mask = held_bits(map, field.name);
        if mask == 0 {
            continue;
        }
        // The largest word is named, the first of equals; a vector only where every channel fits.
        let largest = |words: &[(String, &DriverWord)]| {
            let missed = words.iter().filter(|(_, word)| (field.value)(word) & !mask != 0);
            missed.rev().max_by_key(|(_, word)| (field.value)(word)).map(|(place, word)| MapError::TooNarrow {
                field: field.name.to_owned(),
                place: place.clone(),
                value: (field.value)(word),
                mask,
            })
        };
        problems.extend(largest(&of_channels).or_else(|| largest(&of_vectors)));
    }
    if !problems.is_empty() {
        return Err(problems);
    }
    Ok(RegisterValues {
        registers: map
            .registers
            .iter()
            .map(|register| RegisterHead {
                name: register.name.clone(),
                width: register.width,
                address: register.address,
            })
            .collect(),
        channels: channels.iter().map(|channel| channel.word.as_ref().map(|word| pack(map, word))).collect(),
        vectors: vectors.iter().map(|vector| pack(map, &vector.word)).collect(),
    })
}

/// Returns a mask of so many low bits.
const fn low_bits(count: u32) -> u64 {
    if count >= u64::BITS { u64::MAX } else { (1 << count) - 1 }
}

/// Returns the bits of a field's value that a map holds, over all its parts; 0 when the map does not name it.
fn held_bits(map: &RegisterMap, name: &str) -> u64 {
    map.fields.iter().filter(|field| field.name == name).fold(0, |mask, field| {
        // A part may reach beyond the value's 64 bits: what falls out holds nothing.
        mask | low_bits(field.width()).checked_shl(field.low).unwrap_or(0)
    })
}

/// Returns the registers of one word: the base values with every field in its place.
#[must_use]
pub fn pack(map: &RegisterMap, word: &DriverWord) -> Vec<u64> {
    let mut values: Vec<u64> = map.registers.iter().map(|register| register.base).collect();
    for place in &map.fields {
        let Some(field) = FIELDS.iter().find(|field| field.name == place.name) else { continue };
        let Some(value) = values.get_mut(place.register) else { continue };
        *value = with_field(*value, place, (field.value)(word));
    }
    values
}

fn with_field(register: u64, place: &FieldPlace, value: u64) -> u64 {
    let mask = low_bits(place.width());
    let part = value.checked_shr(place.low).unwrap_or(0) & mask;
    (register & !(mask << place.lsb)) | (part << place.lsb)
}
