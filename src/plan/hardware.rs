//! Reference, oscillator, dividers, detector and loop filter.

use num_complex::Complex64;

use crate::base::Frequency;
use crate::loop_model::{ChargeTable, FilterComponents, FilterDesign, NoisePoints, OscillatorNoise, ResponseTable};

use super::checked::{Detector, Divider, Gain, LoopEdge, LoopPlan, MismatchPoints, Oscillator, Reference};
use super::reader::{Curve, Located, Reader, Section};
use super::tables::{Load, read_numbers};

/// Noise points that the reader has found to rise; the engine checks them once more.
fn noise_points(reader: &mut Reader, section: &Section, name: &'static str) -> Option<NoisePoints> {
    let found = reader.pairs(section, name)?;
    match NoisePoints::new(found.value) {
        Ok(points) => Some(points),
        Err(error) => {
            reader.problem(&section.key(name), &found.span, error.to_string());
            None
        }
    }
}

/// Reads `[reference]`.
pub fn reference(reader: &mut Reader, section: &Section) -> Option<Reference> {
    let frequency = reader.frequency(section, "frequency");
    let doubler = reader.flag(section, "doubler").unwrap_or(false);
    let divider = reader.whole(section, "divider").map_or(1, |found| found.value);
    let tolerance = reader.real(section, "tolerance");
    let noise = noise_points(reader, section, "noise");
    Some(Reference { frequency: frequency?.value, doubler, divider, tolerance, noise })
}

/// Reads `[oscillator]`.
pub fn oscillator(reader: &mut Reader, section: &Section) -> Option<Oscillator> {
    let range = reader.range(section, "range");
    let gain = reader.quantity_or_pairs(section, "gain");
    let tuning = reader.pairs(section, "tuning");
    if let Some(found) = &tuning
        && (found.value.len() < 2 || found.value.windows(2).any(|pair| pair[0].1 >= pair[1].1))
    {
        let text = "a tuning curve needs at least two points, with frequencies that rise strictly";
        reader.problem(&section.key("tuning"), &found.span, text);
    }
    let tuning_range = reader.range(section, "tuning_range");
    if let Some(found) = &tuning_range
        && tuning.is_none()
    {
        reader.problem(&section.key("tuning_range"), &found.span, "a tuning range needs oscillator.tuning");
    }
    let leeson = reader.table(section, "leeson", "oscillator.leeson");
    let noise = match leeson {
        Some(model) => {
            if let Some(points) = section.value("noise") {
                reader.problem(&section.key("noise"), &points.span(), "give noise points or leeson, not both");
            }
            leeson_noise(reader, &model)
        }
        None => noise_points(reader, section, "noise").map(OscillatorNoise::Points),
    };
    let (low, high) = range?.value;
    Some(Oscillator {
        range: (Frequency::from_hz(low), Frequency::from_hz(high)),
        gain: match gain?.value {
            Curve::Constant(value) => Gain::Constant(value),
            Curve::Points(points) => Gain::Table(points),
        },
        noise,
        tuning: tuning.map(|found| found.value),
        tuning_range_v: tuning_range.map(|found| (found.value.0.to_f64(), found.value.1.to_f64())),
    })
}

fn leeson_noise(reader: &mut Reader, section: &Section) -> Option<OscillatorNoise> {
    let noise_factor = reader.number(section, "noise_factor");
    let power = reader.real(section, "power");
    let loaded_q = reader.number(section, "loaded_q");
    let corner_hz = reader.real(section, "corner").unwrap_or(0.0);
    let temperature_k = reader.real(section, "temperature").unwrap_or(290.0);
    for (name, found, least) in [("noise_factor", &noise_factor, 1.0), ("loaded_q", &loaded_q, f64::MIN_POSITIVE)] {
        if let Some(found) = found.as_ref().filter(|found| found.value < least) {
            let allowed = if least == 1.0 { "at least 1" } else { "above zero" };
            reader.problem(&section.key(name), &found.span, format!("found {}, must be {allowed}", found.value));
            return None;
        }
    }
    Some(OscillatorNoise::Leeson {
        noise_factor: noise_factor?.value,
        power_w: power?,
        loaded_q: loaded_q?.value,
        corner_hz,
        temperature_k,
    })
}

/// Reads `[divider]`.
pub fn divider(reader: &mut Reader, section: &Section) -> Divider {
    let minimum = reader.whole(section, "minimum");
    let maximum = reader.whole(section, "maximum");
    let output = reader.wholes(section, "output").map_or_else(|| vec![1], |found| found.value);
    let floor_dbc_per_hz = reader.real(section, "floor");
    let least = minimum.as_ref().map_or(1, |found| found.value);
    if let Some(found) = &maximum
        && found.value < least
    {
        let text = format!("found {}, must not be below divider.minimum, {least}", found.value);
        reader.problem(&section.key("maximum"), &found.span, text);
    }
    Divider { minimum: least, maximum: maximum.map(|found| found.value), output, floor_dbc_per_hz }
}

/// Reads `[detector]`.
pub fn detector(reader: &mut Reader, section: &Section, load: Load, pfd_hz: Option<f64>) -> Option<Detector> {
    let current = reader.real(section, "current");
    let mismatch = reader.quantity_or_pairs(section, "mismatch");
    if let Some(found) = &mismatch {
        check_mismatch(reader, section, found);
    }
    let table = section.value("table").and_then(|_| charge_table(reader, section, load));
    let offset_current_a = offset_current(reader, section, current, pfd_hz);
    let leakage_a = reader.real(section, "leakage");
    let dead_zone_s = reader.real(section, "dead_zone").unwrap_or(0.0);
    let quadratic_per_cycle = reader.number(section, "quadratic").map_or(0.0, |found| found.value);
    let cubic_per_cycle2 = reader.number(section, "cubic").map_or(0.0, |found| found.value);
    let reset_delay_s = reader.real(section, "reset_delay");
    let offset_noise = reader.real(section, "offset_noise");
    let pump_noise = reader.real(section, "pump_noise");
    let floor_dbc_per_hz = reader.real(section, "floor");
    let flicker_dbc_per_hz = reader.real(section, "flicker");
    let maximum_frequency = reader.frequency(section, "maximum_frequency").map(|found| found.value);
    Some(Detector {
        current_a: current?,
        mismatch: mismatch.map(|found| match found.value {
            Curve::Constant(value) => MismatchPoints::Constant(value),
            Curve::Points(points) => MismatchPoints::Table(points),
        }),
        offset_current_a,
        leakage_a,
        dead_zone_s,
        quadratic_per_cycle,
        cubic_per_cycle2,
        table,
        reset_delay_s,
        offset_noise_a_per_rthz: offset_noise,
        pump_noise_a_per_rthz: pump_noise,
        floor_dbc_per_hz,
        flicker_dbc_per_hz,
        maximum_frequency,
    })
}

/// The offset current: as a current, as the static time error t it makes (I = I_cp·t·f_pfd), or as a share of I_cp.
fn offset_current(reader: &mut Reader, section: &Section, current_a: Option<f64>, pfd_hz: Option<f64>) -> f64 {
    let names = ["offset_current", "offset_time", "offset_share"];
    let given: Vec<&str> = names.into_iter().filter(|name| section.value(name).is_some()).collect();
    if let [first, second, ..] = given.as_slice() {
        let span = section.value(second).map_or_else(|| section.head(), toml::Spanned::span);
        reader.problem(&section.key(second), &span, format!("give {first} or {second}, not both"));
        return 0.0;
    }
    // A plan without a pump current or a reference is refused elsewhere.
    let (current_a, pfd_hz) = (current_a.unwrap_or(0.0), pfd_hz.unwrap_or(0.0));
    match given.first() {
        Some(&"offset_time") => reader.real(section, "offset_time").unwrap_or(0.0) * pfd_hz * current_a,
        Some(&"offset_share") => reader.real(section, "offset_share").unwrap_or(0.0) * current_a,
        _ => reader.real(section, "offset_current").unwrap_or(0.0),
    }
}

/// A mismatch of 200 % and more would turn a source off or round.
fn check_mismatch(reader: &mut Reader, section: &Section, found: &Located<Curve>) {
    let worst = match &found.value {
        Curve::Constant(value) => value.abs(),
        Curve::Points(points) => points.iter().map(|(_, value)| value.abs()).fold(0.0, f64::max),
    };
    if worst >= 2.0 {
        let text = format!("found {} %, must lie between -200 % and 200 %, ends excluded", worst * 100.0);
        reader.problem(&section.key("mismatch"), &found.span, text);
    }
}

fn charge_table(reader: &mut Reader, section: &Section, load: Load) -> Option<ChargeTable> {
    let file = reader.text(section, "table")?;
    let rows = read_numbers(reader, &section.key("table"), &file, load, &["time_s", "charge_c"])?;
    let points: Vec<(f64, f64)> = rows.into_iter().map(|row| (row[0], row[1])).collect();
    if points.len() < 2 || points.windows(2).any(|pair| pair[0].0 >= pair[1].0) {
        let text = format!("\"{}\" needs at least two rows whose time_s rises strictly", file.value);
        reader.problem(&section.key("table"), &file.span, text);
        return None;
    }
    Some(ChargeTable { points })
}

/// Keys that only a designed filter has.
const DESIGN_KEYS: [&str; 3] = ["design_divider", "third_pole", "fourth_pole"];

/// Reads `[loop]`: exactly one of bandwidth with phase_margin, components, table.
pub fn loop_filter(reader: &mut Reader, section: &Section, load: Load) -> Option<(LoopPlan, LoopEdge)> {
    let edge = match reader.word(section, "edge").map(|found| found.value) {
        Some("3 dB") => LoopEdge::ThreeDb,
        _ => LoopEdge::UnityGain,
    };
    let designed = section.value("bandwidth").is_some() || section.value("phase_margin").is_some();
    let ways = [
        ("bandwidth", designed),
        ("components", section.value("components").is_some()),
        ("table", section.value("table").is_some()),
    ];
    let given: Vec<&str> = ways.iter().filter(|(_, given)| *given).map(|(name, _)| *name).collect();
    let plan = match given.as_slice() {
        ["components" | "table"] if DESIGN_KEYS.iter().any(|name| section.value(name).is_some()) => {
            for (name, value) in DESIGN_KEYS.iter().filter_map(|name| section.value(name).map(|value| (name, value))) {
                let text = "belongs to bandwidth and phase_margin; this filter is given, not designed";
                reader.problem(&section.key(name), &value.span(), text);
            }
            return None;
        }
        ["bandwidth"] => LoopPlan::Designed(design(reader, section)?),
        ["components"] => LoopPlan::Components(components(reader, section)?),
        ["table"] => LoopPlan::Measured(response_table(reader, section, load)?),
        [] => {
            let text = "a loop filter is missing; give bandwidth with phase_margin, components, or table";
            reader.problem(&section.path, &section.head(), text);
            return None;
        }
        several => {
            let text = format!(
                "found {}; give exactly one of bandwidth with phase_margin, components, table",
                several.join(" and ")
            );
            reader.problem(&section.path, &section.head(), text);
            return None;
        }
    };
    Some((plan, edge))
}

fn design(reader: &mut Reader, section: &Section) -> Option<FilterDesign> {
    let bandwidth = reader.real(section, "bandwidth");
    let margin = reader.quantity(section, "phase_margin");
    for (name, other, given) in [
        ("bandwidth", "phase_margin", section.value("bandwidth").is_some()),
        ("phase_margin", "bandwidth", section.value("phase_margin").is_some()),
    ] {
        if !given {
            reader.problem(&section.key(name), &section.head(), format!("missing; {other} needs it"));
        }
    }
    let divider = reader.number(section, "design_divider");
    if let Some(found) = divider.as_ref().filter(|found| found.value <= 0.0) {
        reader.problem(&section.key("design_divider"), &found.span, "must be above zero");
    }
    let margin = margin?;
    let phase_margin_deg = margin.value.to_f64();
    if phase_margin_deg >= 90.0 {
        let text = format!("found {phase_margin_deg} deg, must be below 90 deg");
        reader.problem(&section.key("phase_margin"), &margin.span, text);
        return None;
    }
    let pole_ratios = pole_ratios(reader, section)?;
    Some(FilterDesign {
        bandwidth_hz: bandwidth?,
        phase_margin_deg,
        design_divider: divider.map(|found| found.value),
        pole_ratios,
    })
}

/// Ratios of the further poles' time constants, each to the pole before it.
fn pole_ratios(reader: &mut Reader, section: &Section) -> Option<(Option<f64>, Option<f64>)> {
    let mut ratio = |name: &'static str| {
        let found = reader.number(section, name);
        if let Some(found) = found.as_ref().filter(|found| found.value <= 0.0) {
            reader.problem(&section.key(name), &found.span, "must be above zero");
        }
        found.map(|found| found.value)
    };
    let (third, fourth) = (ratio("third_pole"), ratio("fourth_pole"));
    if fourth.is_some() && section.value("third_pole").is_none() {
        reader.problem(&section.key("fourth_pole"), &section.head(), "needs third_pole");
        return None;
    }
    Some((third, fourth))
}

fn components(reader: &mut Reader, section: &Section) -> Option<FilterComponents> {
    let table = reader.table(section, "components", "loop.components")?;
    let c1_farad = reader.real(&table, "c1");
    let (r2, c2) = (reader.real(&table, "r2"), reader.real(&table, "c2"));
    let mut pair = |resistor: &'static str, capacitor: &'static str| {
        let (ohm, farad) = (reader.real(&table, resistor), reader.real(&table, capacitor));
        if table.value(resistor).is_some() != table.value(capacitor).is_some() {
            let text = format!("{resistor} and {capacitor} belong together");
            reader.problem(&table.path, &table.span, text);
        }
        ohm.zip(farad)
    };
    let (r3_c3, r4_c4) = (pair("r3", "c3"), pair("r4", "c4"));
    let found = FilterComponents { c1_farad, r2_ohm: r2?, c2_farad: c2?, r3_c3, r4_c4 };
    match found.check() {
        Ok(()) => Some(found),
        Err(error) => {
            reader.problem(&table.path, &table.span, error.to_string());
            None
        }
    }
}

fn response_table(reader: &mut Reader, section: &Section, load: Load) -> Option<ResponseTable> {
    let file = reader.text(section, "table")?;
    let rows = read_numbers(reader, &section.key("table"), &file, load, &["offset_hz", "gain_db", "phase_deg"])?;
    let points = rows
        .into_iter()
        .map(|row| {
            let size = crate::base::power_from_db(row[1]).sqrt();
            (row[0], Complex64::from_polar(size, row[2].to_radians()))
        })
        .collect();
    let table = ResponseTable { points };
    match table.check() {
        Ok(()) => Some(table),
        Err(error) => {
            reader.problem(&section.key("table"), &file.span, format!("\"{}\": {error}", file.value));
            None
        }
    }
}
