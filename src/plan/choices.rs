//! Title block, alternatives and analysis.

use crate::base::Frequency;
use crate::modulator::{Dither, ModulatorError, ModulatorSettings, Modulus, ModulusRule};

use super::checked::{Alternatives, Analysis, Identity, ModulatorPlan, Reference};
use super::modulation::dither_value;
use super::reader::{Reader, Section, describe};
use super::spurs::DEFAULT_SPAN_HZ;

/// Record length when the plan gives none.
const DEFAULT_RECORD: u64 = 131_072;
/// Tone floor when the plan gives none \[dBc\].
const DEFAULT_TONE_FLOOR_DBC: f64 = -120.0;

/// Reads `[plan]`.
pub fn identity(reader: &mut Reader, section: &Section, stem: &str) -> Identity {
    let mut text = |name| reader.text(section, name).map(|found| found.value);
    Identity {
        title: text("title").unwrap_or_else(|| stem.to_owned()),
        revision: text("revision"),
        prepared_by: text("prepared_by"),
        checked_by: text("checked_by"),
        approved_by: text("approved_by"),
        date: text("date"),
        notes: text("notes"),
    }
}

/// Reads `[analysis]`.
pub fn analysis(reader: &mut Reader, section: &Section, pfd_hz: Option<f64>) -> Analysis {
    let record = reader.whole(section, "record").map_or(DEFAULT_RECORD, |found| found.value);
    let default_span = DEFAULT_SPAN_HZ.min(pfd_hz.map_or(f64::INFINITY, |pfd| pfd / 2.0));
    let span_hz = reader.real(section, "span").unwrap_or(default_span);
    let tone_floor_dbc = reader.real(section, "tone_floor").unwrap_or(DEFAULT_TONE_FLOOR_DBC);
    let level_uncertainty_db = reader.real(section, "level_uncertainty").unwrap_or(0.0);
    Analysis { record, span_hz, tone_floor_dbc, level_uncertainty_db }
}

/// Reads `[alternatives]`; what is absent is the plan's own value.
pub fn alternatives(reader: &mut Reader, section: &Section, own: Option<(&Reference, &ModulatorPlan)>) -> Alternatives {
    let frequencies = |found: Option<super::reader::Located<Vec<crate::base::Exact>>>| {
        found.map(|found| found.value.into_iter().map(Frequency::from_hz).collect::<Vec<_>>())
    };
    let references = frequencies(reader.quantities(section, "references"));
    let dividers = reader.wholes(section, "dividers").map(|found| found.value);
    let doubler = flags(reader, section);
    let settings = own.map(|(_, modulator)| &modulator.settings);
    let orders = orders(reader, section, settings);
    let dithers = dithers(reader, section, settings, orders.as_deref());
    let injections = frequencies(reader.quantities(section, "injections")).unwrap_or_default();
    let output_dividers = reader.wholes(section, "output_dividers").map(|found| found.value).unwrap_or_default();
    let seeds = reader.wholes(section, "seeds").map(|found| found.value).unwrap_or_default();
    let moduli = moduli(reader, section, settings);
    let offset_currents_a = reader
        .quantities(section, "offset_currents")
        .map(|found| found.value.iter().map(crate::base::Exact::to_f64).collect())
        .unwrap_or_default();
    let nudge = reader.frequency(section, "nudge").map_or(Frequency::from_whole_hz(0), |found| found.value);
    let reference = own.map(|(reference, _)| reference);
    let modulator = own.map(|(_, modulator)| modulator);
    Alternatives {
        references: references.unwrap_or_else(|| reference.map(|own| own.frequency).into_iter().collect()),
        dividers: dividers.unwrap_or_else(|| reference.map(|own| own.divider).into_iter().collect()),
        doubler: doubler.unwrap_or_else(|| reference.map(|own| own.doubler).into_iter().collect()),
        orders: orders.unwrap_or_else(|| modulator.map(|own| own.settings.order).into_iter().collect()),
        dithers: dithers.unwrap_or_else(|| modulator.map(|own| own.settings.dither).into_iter().collect()),
        injections,
        output_dividers,
        seeds,
        moduli,
        offset_currents_a,
        nudge,
    }
}

/// Fixed moduli that the plan's structure works with.
fn moduli(reader: &mut Reader, section: &Section, own: Option<&ModulatorSettings>) -> Vec<Modulus> {
    let Some(found) = reader.wholes(section, "moduli") else { return Vec::new() };
    let mut moduli = Vec::new();
    for number in found.value {
        let checked = Modulus::new(number).and_then(|modulus| match own {
            Some(own) => ModulusRule::Fixed(modulus).working(own.structure).map(|_| modulus),
            None => Ok(modulus),
        });
        match checked {
            Ok(modulus) => moduli.push(modulus),
            Err(error) => reader.problem(&section.key("moduli"), &found.span, error.to_string()),
        }
    }
    moduli
}

/// Orders that the plan's structure has.
fn orders(reader: &mut Reader, section: &Section, own: Option<&ModulatorSettings>) -> Option<Vec<u8>> {
    let found = reader.wholes(section, "orders")?;
    let orders: Vec<u8> = found.value.into_iter().filter_map(|order| u8::try_from(order).ok()).collect();
    for order in &orders {
        let trial = own.map(|own| ModulatorSettings { order: *order, dither: Dither::None, ..plain(own) });
        if let Some(Err(error)) = trial.map(|trial| trial.check()) {
            reader.problem(&section.key("orders"), &found.span, error.to_string());
        }
    }
    Some(orders)
}

/// Dithers that fit the plan's structure at the highest order a remedy may use.
fn dithers(
    reader: &mut Reader,
    section: &Section,
    own: Option<&ModulatorSettings>,
    orders: Option<&[u8]>,
) -> Option<Vec<Dither>> {
    let value = reader.plain(section, "dithers")?;
    let path = section.key("dithers");
    let mut dithers = Vec::new();
    for item in reader.items(&path, value)? {
        let dither = dither_value(reader, &path, item)?;
        let order = own.map(|own| orders.and_then(|orders| orders.iter().max().copied()).unwrap_or(0).max(own.order));
        let trial = own.zip(order).map(|(own, order)| ModulatorSettings { order, dither, ..plain(own) });
        if let Some(Err(error)) = trial.map(|trial| trial.check())
            && !matches!(error, ModulatorError::OrderOutOfRange { .. })
        {
            reader.problem(&path, &item.span(), error.to_string());
        }
        dithers.push(dither);
    }
    Some(dithers)
}

/// Returns the plan's structure without what depends on its order.
fn plain(own: &ModulatorSettings) -> ModulatorSettings {
    ModulatorSettings { seeds: Vec::new(), noise_transfer: None, ..own.clone() }
}

fn flags(reader: &mut Reader, section: &Section) -> Option<Vec<bool>> {
    let value = reader.plain(section, "doubler")?;
    let path = section.key("doubler");
    let mut flags = Vec::new();
    for item in reader.items(&path, value)? {
        match item.get_ref().as_bool() {
            Some(flag) => flags.push(flag),
            None => {
                let text = format!("found {}, expected true or false", describe(item.get_ref()));
                reader.problem(&path, &item.span(), text);
                return None;
            }
        }
    }
    Some(flags)
}
