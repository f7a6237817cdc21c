//! The one table of plan keys: reading, messages, starter plan and schema all follow from it.

use crate::base::Dimension;

/// Which signs a quantity may have.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Sign {
    /// Any finite value.
    Any,
    /// Above zero.
    Positive,
    /// Zero or above.
    NotNegative,
}

/// The form of a value.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// Free text.
    Text,
    /// true or false.
    Flag,
    /// A whole number within these bounds, inclusive.
    Whole(u64, u64),
    /// A list of whole numbers within these bounds.
    Wholes(u64, u64),
    /// A number without unit.
    Number,
    /// One of these words.
    Word(&'static [&'static str]),
    /// A value with a unit; a figure may carry its basis.
    Quantity(Dimension, Sign),
    /// Two values with a unit, the second above the first.
    Range(Dimension),
    /// A list of values with a unit.
    Quantities(Dimension, Sign),
    /// A list of pairs of values with units.
    Pairs(Dimension, Dimension),
    /// A value, or a list of pairs over another quantity (first dimension).
    QuantityOrPairs(Dimension, Dimension),
    /// A table of its own; the name is that of its section.
    Table(&'static str),
    /// A form of its own, described in words.
    Special(&'static str),
}

/// One key of the plan file.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Key {
    /// Section name, empty for the top level.
    pub section: &'static str,
    /// Key name.
    pub name: &'static str,
    /// Form of the value.
    pub kind: Kind,
    /// Whether the plan must give it.
    pub required: bool,
    /// What applies when it is absent, in words; `None`: nothing is assumed.
    pub default: Option<&'static str>,
    /// One line for people.
    pub doc: &'static str,
}

const fn key(section: &'static str, name: &'static str, kind: Kind, doc: &'static str) -> Key {
    Key { section, name, kind, required: false, default: None, doc }
}

impl Key {
    const fn required(self) -> Self {
        Self { required: true, ..self }
    }

    const fn or(self, default: &'static str) -> Self {
        Self { default: Some(default), ..self }
    }
}

use Dimension::{
    Angle, Capacitance, Current, CurrentNoise, Frequency, Level, LevelDifference, NoiseLevel, Power, Ratio, Resistance,
    Temperature, Time, TuningGain, Voltage,
};
use Kind::{
    Flag, Number, Pairs, Quantities, Quantity, QuantityOrPairs, Range, Special, Table, Text, Whole, Wholes, Word,
};
use Sign::{Any, NotNegative, Positive};

/// Largest divider or count that a plan may hold.
const LARGE: u64 = 1 << 32;

/// Every key, section by section in the order of the starter plan.
pub const KEYS: &[Key] = &[
    key("", "schema", Whole(1, 1), "version of the plan format").required(),
    key("plan", "title", Text, "title of the plan").or("the file's stem"),
    key("plan", "revision", Text, "revision").or("not stated"),
    key("plan", "prepared_by", Text, "who prepared it").or("not stated"),
    key("plan", "checked_by", Text, "who checked it").or("not stated"),
    key("plan", "approved_by", Text, "who approved it").or("not stated"),
    key("plan", "date", Text, "date, as it shall appear").or("not stated"),
    key("plan", "notes", Text, "free notes").or("not stated"),
    key("reference", "frequency", Quantity(Frequency, Positive), "reference frequency").required(),
    key("reference", "doubler", Flag, "whether the reference is doubled before its divider").or("false"),
    key("reference", "divider", Whole(1, LARGE), "reference divider R").or("1"),
    key("reference", "tolerance", Quantity(Ratio, NotNegative), "frequency tolerance").or("unknown"),
    key("reference", "noise", Pairs(Frequency, NoiseLevel), "noise at the reference frequency")
        .or("unknown: total noise null, partial sum named"),
    key("oscillator", "range", Range(Frequency), "lowest and highest VCO frequency, inclusive").required(),
    key("oscillator", "gain", QuantityOrPairs(Frequency, TuningGain), "tuning gain, one value or over frequency")
        .required(),
    key("oscillator", "noise", Pairs(Frequency, NoiseLevel), "free-running noise")
        .or("unknown: total noise null, partial sum named"),
    key("oscillator", "leeson", Table("oscillator.leeson"), "free-running noise by Leeson's model, instead of points"),
    key("oscillator", "tuning", Pairs(Voltage, Frequency), "tuning curve"),
    key("oscillator", "tuning_range", Range(Voltage), "usable tuning voltage, inclusive; needs tuning"),
    key("oscillator.leeson", "noise_factor", Number, "noise factor F, a power ratio of at least 1").required(),
    key("oscillator.leeson", "power", Quantity(Power, Positive), "signal power").required(),
    key("oscillator.leeson", "loaded_q", Number, "loaded quality factor").required(),
    key("oscillator.leeson", "corner", Quantity(Frequency, NotNegative), "flicker corner").or("0 Hz"),
    key("oscillator.leeson", "temperature", Quantity(Temperature, Positive), "temperature").or("290 K"),
    key("divider", "minimum", Whole(1, LARGE), "smallest legal division, inclusive").or("1"),
    key("divider", "maximum", Whole(1, LARGE), "largest legal division, inclusive").or("none: not checked"),
    key("divider", "output", Wholes(1, 1_000_000), "output dividers, tried in this order").or("[1]"),
    key("divider", "floor", Quantity(NoiseLevel, Any), "noise floor of the output divider")
        .or("none: the divider adds no noise"),
    key(
        "modulator",
        "structure",
        Word(&["mash", "prime-mash", "output-fed", "error-feedback", "integer"]),
        "modulator structure",
    )
    .or("mash"),
    key("modulator", "order", Whole(0, 5), "modulator order").or("3 (0 for integer)"),
    key(
        "modulator",
        "modulus",
        Special("a whole number, \"2^b\", { largest = 4095 } or { step = \"12.5 kHz\" }"),
        "modulus M",
    )
    .or("2^24"),
    key("modulator", "seeds", Wholes(0, 1 << 48), "start residues, first stage first")
        .or("[1, 0, …] (none for integer)"),
    key("modulator", "dither", Special("\"none\" or { stage = 2, register = 23, seed = 1, weight = 1 }"), "dither")
        .or("none"),
    key(
        "modulator",
        "ntf",
        Special("a list of whole numbers h_1, h_2, …"),
        "error filter of error-feedback: y = floor((K + sum h_j e[n-j])/M)",
    )
    .or("(1 - 1/z)^order, for error-feedback"),
    key("modulator", "runs_at_zero", Flag, "whether the modulator keeps running at K = 0").or("false"),
    key("detector", "current", Quantity(Current, Positive), "charge-pump current").required(),
    key(
        "detector",
        "mismatch",
        QuantityOrPairs(Voltage, Ratio),
        "pump mismatch (up less down over mean), one value or over tuning voltage",
    )
    .or("unknown: nonlinearity null, never 0 %"),
    key("detector", "offset_current", Quantity(Current, Any), "offset current, positive discharges the filter")
        .or("0 A"),
    key("detector", "offset_time", Quantity(Time, Any), "offset current as the static time error it makes, instead"),
    key("detector", "offset_share", Quantity(Ratio, Any), "offset current as a share of the pump current, instead"),
    key("detector", "leakage", Quantity(Current, Any), "leakage at the tuning node, positive discharges")
        .or("unknown: reference tone null"),
    key("detector", "dead_zone", Quantity(Time, NotNegative), "half width of the dead zone").or("0 s"),
    key("detector", "quadratic", Number, "quadratic term of the charge curve, per cycle").or("0"),
    key("detector", "cubic", Number, "cubic term of the charge curve, per cycle squared").or("0"),
    key(
        "detector",
        "table",
        Text,
        "csv of a measured charge curve (time_s, charge_c); replaces mismatch, dead zone and polynomial",
    ),
    key("detector", "reset_delay", Quantity(Time, NotNegative), "reset delay").or("unknown"),
    key("detector", "offset_noise", Quantity(CurrentNoise, NotNegative), "noise of the offset current")
        .or("unknown: total noise null with an offset current"),
    key("detector", "pump_noise", Quantity(CurrentNoise, NotNegative), "noise of the pump currents")
        .or("taken as inside the floor"),
    key("detector", "floor", Quantity(NoiseLevel, Any), "detector floor normalised to 1 Hz")
        .or("unknown: total noise null, partial sum named"),
    key("detector", "flicker", Quantity(NoiseLevel, Any), "detector flicker at 10 kHz, normalised to a 1 GHz VCO")
        .or("unknown: total noise null, partial sum named"),
    key("detector", "maximum_frequency", Quantity(Frequency, Positive), "largest PFD frequency, inclusive")
        .or("not checked"),
    key("loop", "bandwidth", Quantity(Frequency, Positive), "unity-gain frequency at the design divider"),
    key("loop", "phase_margin", Quantity(Angle, Positive), "phase margin at the design divider"),
    key("loop", "design_divider", Number, "N + K/M of the design")
        .or("geometric mean of the smallest and largest legal N + K/M"),
    key("loop", "third_pole", Number, "time constant R3·C3 over that of the first pole; C3 = C1/4").or("no third pole"),
    key("loop", "fourth_pole", Number, "time constant R4·C4 over R3·C3; C4 = C3/4").or("no fourth pole"),
    key("loop", "components", Table("loop.components"), "filter components, instead of bandwidth and margin"),
    key(
        "loop",
        "table",
        Text,
        "csv of a measured closed-loop response (offset_hz, gain_db, phase_deg), instead of either",
    ),
    key("loop", "edge", Word(&["unity-gain", "3 dB"]), "what inside the loop means").or("unity-gain"),
    key("loop.components", "c1", Quantity(Capacitance, Positive), "first shunt capacitor"),
    key("loop.components", "r2", Quantity(Resistance, Positive), "resistor of the zero").required(),
    key("loop.components", "c2", Quantity(Capacitance, Positive), "capacitor of the zero").required(),
    key("loop.components", "r3", Quantity(Resistance, Positive), "resistor of the third pole"),
    key("loop.components", "c3", Quantity(Capacitance, Positive), "capacitor of the third pole"),
    key("loop.components", "r4", Quantity(Resistance, Positive), "resistor of the fourth pole"),
    key("loop.components", "c4", Quantity(Capacitance, Positive), "capacitor of the fourth pole"),
    key(
        "boundary",
        "guard",
        Special("a frequency, or a share of the PFD frequency such as \"1.25 %\""),
        "guard on the tone offset, inclusive",
    )
    .or("the channel's loop edge"),
    key("boundary", "largest_q", Whole(1, 64), "largest boundary denominator q").or("3"),
    key("boundary", "harmonics", Whole(1, 64), "harmonics listed").or("5"),
    key("anchor", "mechanism", Word(&["detector", "tuning", "output"]), "path of the coupling").required(),
    key("anchor", "level", Quantity(Level, Any), "level at the output, single sideband").required(),
    key("anchor", "at", Quantity(Frequency, Positive), "channel on which it was taken"),
    key("anchor", "offset", Quantity(Frequency, Positive), "tone offset at which it was taken, instead of at"),
    key("anchor", "output_divider", Whole(1, 1_000_000), "output divider in use, with offset")
        .or("the first of divider.output, with offset"),
    key("anchor", "q", Whole(1, 64), "boundary denominator").or("1"),
    key("anchor", "roll_off", Quantity(LevelDifference, Any), "fall per harmonic").or("0 dB (worst case)"),
    key("clock", "name", Text, "name of the clock").required(),
    key("clock", "frequency", Quantity(Frequency, Positive), "frequency of the clock").required(),
    key("clock", "anchor", Table("anchor"), "known level of its tone").or("unknown level"),
    key("victim", "name", Text, "who is hit, as the reports shall say").required(),
    key("victim", "offsets", Range(Frequency), "offsets from the carrier, either side, inclusive"),
    key("victim", "band", Range(Frequency), "output frequencies, instead of offsets, inclusive"),
    key(
        "victim",
        "width",
        Quantity(Frequency, NotNegative),
        "bandwidth of the victim: tones within half of it beyond the range hit as well",
    )
    .or("0 Hz"),
    key("victim", "limit", Quantity(Level, Any), "its limit at the output; the stricter of it and the mask holds")
        .or("the mask alone"),
    key("limits", "spur", Pairs(Frequency, Level), "spur mask at the output, offsets rising")
        .or("none: position alone decides"),
    key("limits", "margin", Quantity(LevelDifference, NotNegative), "margin below a limit that is still marginal")
        .or("6 dB"),
    key("limits", "phase_error", Quantity(Angle, Positive), "limit on the rms phase error").or("none"),
    key("limits", "integration", Range(Frequency), "integration limits of the phase error")
        .or("1 kHz to the smaller of 10 MHz and half the PFD frequency"),
    key("channels", "name", Text, "name of the group").or("group N"),
    key("channels", "first", Quantity(Frequency, Positive), "first channel of a raster"),
    key("channels", "last", Quantity(Frequency, Positive), "last channel of a raster, inclusive"),
    key("channels", "spacing", Quantity(Frequency, Any), "spacing of a raster"),
    key("channels", "list", Quantities(Frequency, Positive), "channels one by one, instead of a raster"),
    key("channels", "file", Text, "csv with a column channel, instead of a raster"),
    key("channels", "injection", Quantity(Frequency, Any), "added to the channel to give the output").or("0 Hz"),
    key("channels", "output", Wholes(1, 1_000_000), "output dividers of the group").or("divider.output"),
    key("channels", "limits", Table("limits"), "limits of the group, instead of the plan's").or("the plan's limits"),
    key("alternatives", "references", Quantities(Frequency, Positive), "reference frequencies a remedy may use")
        .or("the plan's own"),
    key("alternatives", "dividers", Wholes(1, LARGE), "reference dividers a remedy may use").or("the plan's own"),
    key("alternatives", "doubler", Special("a list of true and false"), "doubler settings a remedy may use")
        .or("the plan's own"),
    key("alternatives", "orders", Wholes(0, 5), "orders a remedy may use").or("the plan's own"),
    key("alternatives", "dithers", Special("a list of dithers as in modulator.dither"), "dithers a remedy may use")
        .or("the plan's own"),
    key("alternatives", "injections", Quantities(Frequency, Any), "injections a remedy may use").or("the groups' own"),
    key("alternatives", "output_dividers", Wholes(1, 1_000_000), "output dividers a remedy may use")
        .or("the groups' own"),
    key("alternatives", "seeds", Wholes(0, 1 << 48), "first seeds a remedy may use").or("the plan's own"),
    key("alternatives", "moduli", Wholes(2, 1 << 48), "fixed moduli a remedy may use").or("the plan's own"),
    key("alternatives", "offset_currents", Quantities(Current, Any), "offset currents a remedy may use")
        .or("the plan's own"),
    key("alternatives", "nudge", Quantity(Frequency, NotNegative), "largest shift of the output a remedy may make")
        .or("0 Hz"),
    key("analysis", "record", Whole(1024, 1 << 25), "samples of a record, and the longest period transformed whole")
        .or("131072"),
    key("analysis", "span", Quantity(Frequency, Positive), "largest tone offset listed")
        .or("the smaller of 10 MHz and half the PFD frequency"),
    key("analysis", "tone_floor", Quantity(Level, Any), "known tones below it are dropped and counted").or("-120 dBc"),
    key(
        "analysis",
        "level_uncertainty",
        Quantity(LevelDifference, NotNegative),
        "how far levels may be off, half width",
    )
    .or("0 dB: none stated"),
];

/// Sections with one table, in the order of the starter plan, and whether the plan must hold them.
pub const SECTIONS: &[(&str, bool)] = &[
    ("plan", false),
    ("reference", true),
    ("oscillator", true),
    ("divider", false),
    ("modulator", false),
    ("detector", true),
    ("loop", true),
    ("boundary", false),
    ("limits", false),
    ("alternatives", false),
    ("analysis", false),
];

/// Sections that may stand several times, `[[name]]`, and whether the plan must hold one.
pub const LISTS: &[(&str, bool)] = &[("anchor", false), ("clock", false), ("victim", false), ("channels", true)];

/// Returns the keys of a section.
pub fn keys_of(section: &str) -> impl Iterator<Item = &'static Key> {
    KEYS.iter().filter(move |key| key.section == section)
}

/// Returns one key of a section; a broken table is a broken program.
///
/// # Panics
/// For a key that is not in the table.
#[must_use]
pub fn key_of(section: &str, name: &str) -> &'static Key {
    keys_of(section).find(|key| key.name == name).expect("every key that is read stands in the table")
}
