//! The modulator section.

use toml::Spanned;
use toml::de::DeValue;

use crate::base::{Dimension, Frequency};
use crate::modulator::{Dither, ModulatorConfig, ModulatorError, ModulatorSettings, Modulus, ModulusRule, Structure};

use super::checked::ModulatorPlan;
use super::keys::Sign;
use super::reader::{Located, Reader, Section, describe, did_you_mean};

/// Order when the plan gives none.
const DEFAULT_ORDER: u8 = 3;
/// Modulus when the plan gives none.
const DEFAULT_MODULUS: u64 = 1 << 24;

/// Reads `[modulator]`.
pub fn modulator(reader: &mut Reader, section: &Section) -> Option<ModulatorPlan> {
    let structure = match reader.word(section, "structure").map(|found| found.value) {
        Some("prime-mash") => Structure::PrimeMash,
        Some("output-fed") => Structure::OutputFed,
        Some("error-feedback") => Structure::ErrorFeedback,
        Some("integer") => Structure::Integer,
        _ => Structure::Mash,
    };
    let order = reader.whole(section, "order");
    let order_number = order.as_ref().and_then(|found| u8::try_from(found.value).ok());
    let modulus = modulus_rule(reader, section);
    let seeds = reader.wholes(section, "seeds");
    let dither = dither(reader, section);
    let noise_transfer = error_filter(reader, section);
    let runs_at_zero = reader.flag(section, "runs_at_zero").unwrap_or(false);
    let is_integer = structure == Structure::Integer;
    let settings = ModulatorSettings {
        structure,
        order: order_number.unwrap_or(if is_integer { 0 } else { DEFAULT_ORDER }),
        seeds: match &seeds {
            Some(found) => found.value.clone(),
            None if is_integer => Vec::new(),
            None => vec![1],
        },
        dither: dither.as_ref().map_or(Dither::None, |found| found.value),
        noise_transfer: noise_transfer.as_ref().map(|found| found.value.clone()),
        runs_at_zero,
    };
    // An order that could not be read is noted already; by the default one the rest would be misjudged.
    if order.is_none() && section.value("order").is_some() {
        return None;
    }
    let is_sound = check_settings(reader, section, &settings);
    let modulus = modulus?;
    if !is_sound {
        return None;
    }
    if let Err(error) = check_modulus(&settings, &modulus.value) {
        report(reader, section, &error);
        return None;
    }
    Some(ModulatorPlan { settings, modulus: modulus.value })
}

/// Notes every complaint of the engine: it gives one at a time, so what it names is set aside and the rest asked again.
fn check_settings(reader: &mut Reader, section: &Section, settings: &ModulatorSettings) -> bool {
    let mut rest = settings.clone();
    let mut is_sound = true;
    // One turn for each field that can be set aside.
    for _ in 0..4 {
        let Err(error) = rest.check() else { break };
        report(reader, section, &error);
        is_sound = false;
        match key_named_by(&error) {
            // Without an order the others cannot be judged.
            "order" => break,
            "seeds" => rest.seeds.clear(),
            "dither" => rest.dither = Dither::None,
            _ => rest.noise_transfer = None,
        }
    }
    is_sound
}

/// Notes a complaint of the engine at the key that it is about.
fn report(reader: &mut Reader, section: &Section, error: &ModulatorError) {
    let name = key_named_by(error);
    let span = section.value(name).map_or_else(|| section.head(), Spanned::span);
    reader.problem(&section.key(name), &span, error.to_string());
}

/// Returns the key that a complaint of the engine is about.
fn key_named_by(error: &ModulatorError) -> &'static str {
    match error {
        ModulatorError::OrderOutOfRange { .. } => "order",
        ModulatorError::TooManySeeds { .. } | ModulatorError::SeedOutOfRange { .. } => "seeds",
        ModulatorError::NoDitherInput { .. }
        | ModulatorError::DitherStageOutOfRange { .. }
        | ModulatorError::UnknownRegister { .. }
        | ModulatorError::RegisterSeedOutOfRange { .. }
        | ModulatorError::DitherWeightOutOfRange { .. } => "dither",
        ModulatorError::NoErrorFilter { .. }
        | ModulatorError::CoefficientCount { .. }
        | ModulatorError::CoefficientOutOfRange { .. } => "ntf",
        _ => "modulus",
    }
}

/// Checks that the structure works with the modulus, and that the seeds fit a fixed one.
fn check_modulus(settings: &ModulatorSettings, rule: &ModulusRule) -> Result<(), ModulatorError> {
    match rule.working(settings.structure)? {
        ModulusRule::Fixed(modulus) => ModulatorConfig::new(settings, modulus, 0, true).map(|_| ()),
        ModulusRule::Largest(_) | ModulusRule::Step(_) => Ok(()),
    }
}

/// A whole number, `"2^b"`, `{ largest = … }` or `{ step = … }`.
fn modulus_rule(reader: &mut Reader, section: &Section) -> Option<Located<ModulusRule>> {
    let Some(value) = reader.plain(section, "modulus") else {
        let modulus = Modulus::new(DEFAULT_MODULUS).ok()?;
        return section
            .value("modulus")
            .is_none()
            .then(|| Located { value: ModulusRule::Fixed(modulus), span: section.head() });
    };
    let path = section.key("modulus");
    let span = value.span();
    let fixed = |reader: &mut Reader, number: u64| match Modulus::new(number) {
        Ok(modulus) if number >= 2 => Some(modulus),
        _ => {
            reader.problem(&path, &span, format!("found modulus {number}, allowed are 2 to 2^48"));
            None
        }
    };
    let rule = match value.get_ref() {
        DeValue::Integer(_) => {
            let number = reader.whole_value(&path, value, 2, Modulus::LARGEST)?.value;
            ModulusRule::Fixed(fixed(reader, number)?)
        }
        DeValue::String(text) => {
            let bits = text.trim().strip_prefix("2^").and_then(|bits| bits.trim().parse::<u32>().ok());
            match bits {
                Some(bits @ 1..=48) => ModulusRule::Fixed(fixed(reader, 1 << bits)?),
                _ => {
                    let text = format!(
                        "found \"{text}\", expected a whole number, \"2^b\" with b from 1 to 48, {{ largest = … }} or {{ step = … }}"
                    );
                    reader.problem(&path, &span, text);
                    return None;
                }
            }
        }
        DeValue::Table(table) => {
            let entries: Vec<_> = table.iter().collect();
            let [(name, inner)] = entries.as_slice() else {
                reader.problem(&path, &span, "expected exactly one of largest and step");
                return None;
            };
            match name.get_ref().as_ref() {
                "largest" => {
                    let number = reader.whole_value(&format!("{path}.largest"), inner, 2, Modulus::LARGEST)?.value;
                    ModulusRule::Largest(fixed(reader, number)?)
                }
                "step" => {
                    let step =
                        reader.quantity_value(&format!("{path}.step"), inner, Dimension::Frequency, Sign::Positive)?;
                    ModulusRule::Step(Frequency::from_hz(step.value))
                }
                other => {
                    let hint = did_you_mean(other, &["largest", "step"]);
                    reader.problem_with_hint(
                        &format!("{path}.{other}"),
                        &name.span(),
                        "unknown key; known keys here: largest, step",
                        hint,
                    );
                    return None;
                }
            }
        }
        other => {
            let text = format!(
                "found {}, expected a whole number, \"2^b\", {{ largest = … }} or {{ step = … }}",
                describe(other)
            );
            reader.problem(&path, &span, text);
            return None;
        }
    };
    Some(Located { value: rule, span })
}

fn dither(reader: &mut Reader, section: &Section) -> Option<Located<Dither>> {
    let value = reader.plain(section, "dither")?;
    let found = dither_value(reader, &section.key("dither"), value)?;
    Some(Located { value: found, span: value.span() })
}

/// `"none"` or a register.
pub fn dither_value(reader: &mut Reader, path: &str, value: &Spanned<DeValue>) -> Option<Dither> {
    const KNOWN: [&str; 4] = ["stage", "register", "seed", "weight"];
    if value.get_ref().as_str() == Some("none") {
        return Some(Dither::None);
    }
    let Some(table) = value.get_ref().as_table() else {
        let text = format!(
            "found {}, expected \"none\" or {{ stage = …, register = …, seed = …, weight = … }}",
            describe(value.get_ref())
        );
        reader.problem(path, &value.span(), text);
        return None;
    };
    for name in table.keys() {
        let typed = name.get_ref().as_ref();
        if !KNOWN.contains(&typed) {
            let text = format!("unknown key; known keys here: {}", KNOWN.join(", "));
            reader.problem_with_hint(&format!("{path}.{typed}"), &name.span(), text, did_you_mean(typed, &KNOWN));
        }
    }
    let mut whole = |name: &str, least, most, default: Option<u64>| {
        let key = format!("{path}.{name}");
        match table.get(name) {
            Some(inner) => reader.whole_value(&key, inner, least, most).map(|found| found.value),
            None => {
                match default {
                    Some(number) => reader.default(key, &number.to_string()),
                    None => reader.problem(&key, &value.span(), "missing"),
                }
                default
            }
        }
    };
    let stage = whole("stage", 1, 5, None);
    let register = whole("register", 2, 31, None);
    let seed = whole("seed", 1, (1 << 31) - 1, Some(1));
    let weight = whole("weight", 1, 1 << 48, Some(1));
    Some(Dither::Register {
        stage: u8::try_from(stage?).ok()?,
        register: u8::try_from(register?).ok()?,
        seed: seed?,
        weight: weight?,
    })
}

fn error_filter(reader: &mut Reader, section: &Section) -> Option<Located<Vec<i64>>> {
    section.value("ntf")?;
    let value = reader.plain(section, "ntf")?;
    let path = section.key("ntf");
    let items = reader.items(&path, value)?;
    let mut coefficients = Vec::with_capacity(items.len());
    for item in items {
        let number = item
            .get_ref()
            .as_integer()
            .and_then(|digits| i64::from_str_radix(digits.as_str(), digits.radix()).ok())
            .filter(|number| number.abs() <= 1 << 15);
        match number {
            Some(number) => coefficients.push(number),
            None => {
                let text = format!("found {}, expected a whole number from -32768 to 32768", describe(item.get_ref()));
                reader.problem(&path, &item.span(), text);
                return None;
            }
        }
    }
    Some(Located { value: coefficients, span: value.span() })
}
