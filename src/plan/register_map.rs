//! The user's own register map: which bits of which register hold which integer of a word. None is built in.

use std::collections::BTreeMap;
use std::path::Path;

use serde::Deserialize;
use thiserror::Error;
use toml::Spanned;

use super::file::read_text;
use super::problem::{PlanFailure, line_and_column};

/// A checked register map: no bit is used twice, every field lies inside its register.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RegisterMap {
    /// Registers in file order.
    pub registers: Vec<MapRegister>,
    /// Fields in file order.
    pub fields: Vec<FieldPlace>,
}

/// One register.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct MapRegister {
    /// Name.
    pub name: String,
    /// Bits, 1 … 64.
    pub width: u32,
    /// Address on the bus; `None` when not given.
    pub address: Option<u64>,
    /// Value of the bits that no field holds; bits under a field are replaced.
    pub base: u64,
}

/// Where an integer of a word, or a part of it, stands.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct FieldPlace {
    /// Name of the integer.
    pub name: String,
    /// Register, as a place in the map's list.
    pub register: usize,
    /// Highest bit in the register.
    pub msb: u32,
    /// Lowest bit in the register.
    pub lsb: u32,
    /// Bit of the integer that stands at `lsb`; 0 unless the integer is split over several fields.
    pub low: u32,
}

impl FieldPlace {
    /// Returns the number of bits.
    #[must_use]
    pub const fn width(&self) -> u32 {
        self.msb - self.lsb + 1
    }
}

/// Why a register map cannot be used.
#[derive(Debug, Clone, Error)]
pub enum RegisterMapError {
    /// The file cannot be opened or read.
    #[error("{0}")]
    Io(PlanFailure),
    /// The content cannot be used.
    #[error("{}", problems.join("\n"))]
    Content {
        /// Every problem, each with its line.
        problems: Vec<String>,
    },
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Document {
    #[serde(default)]
    register: Vec<Spanned<RegisterEntry>>,
    #[serde(default)]
    field: Vec<Spanned<FieldEntry>>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RegisterEntry {
    name: String,
    width: u32,
    address: Option<u64>,
    #[serde(default)]
    base: u64,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct FieldEntry {
    name: String,
    register: String,
    msb: u32,
    lsb: u32,
    #[serde(default)]
    low: u32,
}

/// Returns the register map of a file.
///
/// # Errors
/// `Io` when the path cannot be opened or read, `Content` with every problem otherwise.
pub fn read_register_map(path: &Path) -> Result<RegisterMap, RegisterMapError> {
    let text = read_text(path).map_err(|failure| match failure {
        PlanFailure::Io { .. } => RegisterMapError::Io(failure),
        content @ PlanFailure::Content { .. } => RegisterMapError::Content { problems: vec![content.to_string()] },
    })?;
    parse_register_map(&text).map_err(|problems| RegisterMapError::Content { problems: named(path, problems) })
}

fn named(path: &Path, problems: Vec<String>) -> Vec<String> {
    problems.into_iter().map(|problem| format!("{}:{problem}", path.display())).collect()
}

/// Returns the register map of a text.
///
/// # Errors
/// Every problem, each with its line: TOML and unknown keys, registers of no width or given twice, fields outside their
/// register or on bits of another field. Whether a word fits is found when words are packed.
///
/// # Examples
/// ```
/// let map = thornmap::plan::parse_register_map(
///     "[[register]]\nname = \"A\"\nwidth = 32\nbase = 0x8000_0000\n\
///      [[field]]\nname = \"k\"\nregister = \"A\"\nmsb = 23\nlsb = 0\n",
/// )
/// .unwrap();
/// assert_eq!(map.fields[0].width(), 24);
/// ```
pub fn parse_register_map(text: &str) -> Result<RegisterMap, Vec<String>> {
    let document: Document = toml::from_str(text).map_err(|error| {
        let (line, column) = line_and_column(text, error.span().map_or(0, |span| span.start));
        vec![format!("{line}:{column}: {}", error.message().trim())]
    })?;
    let mut problems = Vec::new();
    let mut problem = |at: usize, what: String| problems.push(format!("{}: {what}", line_and_column(text, at).0));
    if document.register.is_empty() {
        problem(0, "no [[register]]; a map needs at least one".to_owned());
    }
    if document.field.is_empty() {
        problem(0, "no [[field]]; a map needs at least one".to_owned());
    }
    let registers = registers(&document, &mut problem);
    let fields = fields(&document, &registers, &mut problem);
    if problems.is_empty() { Ok(RegisterMap { registers, fields }) } else { Err(problems) }
}

fn registers(document: &Document, problem: &mut dyn FnMut(usize, String)) -> Vec<MapRegister> {
    let mut registers: Vec<MapRegister> = Vec::new();
    for entry in &document.register {
        let (at, register) = (entry.span().start, entry.get_ref());
        let name = &register.name;
        if !(1..=64).contains(&register.width) {
            problem(at, format!("register \"{name}\": width {} is outside 1 to 64", register.width));
        } else if register.width < 64 && register.base >> register.width != 0 {
            problem(
                at,
                format!("register \"{name}\": base {:#x} is wider than {} bits", register.base, register.width),
            );
        }
        if registers.iter().any(|known| known.name == *name) {
            problem(at, format!("register \"{name}\" is given twice"));
        }
        registers.push(MapRegister {
            name: name.clone(),
            width: register.width,
            address: register.address,
            base: register.base,
        });
    }
    registers
}

fn fields(document: &Document, registers: &[MapRegister], problem: &mut dyn FnMut(usize, String)) -> Vec<FieldPlace> {
    let mut fields = Vec::new();
    let mut owners: BTreeMap<(usize, u32), String> = BTreeMap::new();
    for entry in &document.field {
        let (at, field) = (entry.span().start, entry.get_ref());
        let name = &field.name;
        let Some(register) = registers.iter().position(|register| register.name == field.register) else {
            let known: Vec<_> = registers.iter().map(|register| format!("\"{}\"", register.name)).collect();
            problem(
                at,
                format!("field \"{name}\": no register \"{}\"; there are {}", field.register, known.join(", ")),
            );
            continue;
        };
        let width = registers[register].width;
        if field.lsb > field.msb || field.msb >= width {
            problem(
                at,
                format!(
                    "field \"{name}\": bits {} to {} do not lie in the {width} bits of register \"{}\"",
                    field.msb, field.lsb, field.register
                ),
            );
            continue;
        }
        if field.low >= u64::BITS {
            problem(at, format!("field \"{name}\": low {} is outside 0 to 63", field.low));
            continue;
        }
        let taken = (field.lsb..=field.msb).find_map(|bit| Some((bit, owners.get(&(register, bit))?.clone())));
        if let Some((bit, owner)) = taken {
            problem(at, format!("field \"{name}\" overlaps field \"{owner}\" in bit {bit} of \"{}\"", field.register));
        }
        owners.extend((field.lsb..=field.msb).map(|bit| ((register, bit), name.clone())));
        fields.push(FieldPlace { name: name.clone(), register, msb: field.msb, lsb: field.lsb, low: field.low });
    }
    fields
}
