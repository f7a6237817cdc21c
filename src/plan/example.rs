//! The commented starter plan, made from the key table.

use super::keys::{Key, LISTS, SECTIONS, keys_of};

/// Values of the starter plan: (section, key, TOML value); a key that is not here is written as a comment.
const VALUES: &[(&str, &str, &str)] = &[
    ("plan", "title", "\"my channel plan\""),
    ("plan", "revision", "\"A\""),
    ("reference", "frequency", "\"19.2 MHz\""),
    (
        "reference",
        "noise",
        "[[\"10 Hz\", \"-95 dBc/Hz\"], [\"1 kHz\", \"-145 dBc/Hz\"], [\"100 kHz\", \"-155 dBc/Hz\"]]",
    ),
    ("oscillator", "range", "[\"1.65 GHz\", \"1.85 GHz\"]"),
    ("oscillator", "gain", "\"32 MHz/V\""),
    ("oscillator", "noise", "[[\"10 kHz\", \"-88 dBc/Hz\"], [\"1 MHz\", \"-133 dBc/Hz\"]]"),
    ("divider", "minimum", "24"),
    ("divider", "maximum", "4095"),
    ("divider", "output", "[4]"),
    ("modulator", "structure", "\"mash\""),
    ("modulator", "order", "3"),
    ("modulator", "modulus", "\"2^24\""),
    ("modulator", "seeds", "[1, 0, 0]"),
    ("modulator", "dither", "\"none\""),
    ("detector", "current", "\"2.5 mA\""),
    ("detector", "mismatch", "\"2 %\""),
    ("detector", "leakage", "\"1 nA\""),
    ("detector", "floor", "\"-226 dBc/Hz\""),
    ("detector", "flicker", "\"-118 dBc/Hz\""),
    ("detector", "maximum_frequency", "\"100 MHz\""),
    ("loop", "bandwidth", "\"60 kHz\""),
    ("loop", "phase_margin", "\"50 deg\""),
    ("boundary", "guard", "\"100 kHz\""),
    ("anchor", "mechanism", "\"detector\""),
    ("anchor", "level", "{ value = \"-58 dBc\", basis = \"assumed\", note = \"replace by a measurement\" }"),
    ("anchor", "at", "\"422.4125 MHz\""),
    ("limits", "spur", "[[\"1 kHz\", \"-45 dBc\"], [\"10 kHz\", \"-60 dBc\"], [\"1 MHz\", \"-75 dBc\"]]"),
    ("limits", "margin", "\"6 dB\""),
    ("limits", "phase_error", "\"1.5 deg\""),
    ("channels", "name", "\"uplink\""),
    ("channels", "first", "\"422.0000 MHz\""),
    ("channels", "last", "\"424.0000 MHz\""),
    ("channels", "spacing", "\"12.5 kHz\""),
];

/// Values of the keys that stand as comments: a starting point, or the default written out.
const HINTS: &[(&str, &str, &str)] = &[
    ("reference", "doubler", "false"),
    ("reference", "divider", "1"),
    ("reference", "tolerance", "\"2 ppm\""),
    ("oscillator", "tuning", "[[\"0.5 V\", \"1.65 GHz\"], [\"2.5 V\", \"1.85 GHz\"]]"),
    ("oscillator", "tuning_range", "[\"0.4 V\", \"2.9 V\"]"),
    (
        "oscillator",
        "leeson",
        "{ noise_factor = 4, power = \"1 mW\", loaded_q = 20, corner = \"10 kHz\", temperature = \"290 K\" }",
    ),
    ("divider", "floor", "\"-160 dBc/Hz\""),
    ("modulator", "ntf", "[3, -3, 1]"),
    ("modulator", "runs_at_zero", "false"),
    ("detector", "offset_current", "\"0 uA\""),
    ("detector", "offset_time", "\"400 ps\""),
    ("detector", "offset_share", "\"2 %\""),
    ("detector", "dead_zone", "\"0 ps\""),
    ("detector", "quadratic", "0"),
    ("detector", "cubic", "0"),
    ("detector", "table", "\"charge.csv\""),
    ("detector", "reset_delay", "\"500 ps\""),
    ("detector", "offset_noise", "\"3 pA/sqrt(Hz)\""),
    ("detector", "pump_noise", "\"20 pA/sqrt(Hz)\""),
    ("loop", "design_divider", "88.5"),
    ("loop", "third_pole", "0.4"),
    ("loop", "fourth_pole", "0.4"),
    ("loop", "components", "{ c1 = \"2.2 nF\", r2 = \"510 ohm\", c2 = \"15 nF\", r3 = \"220 ohm\", c3 = \"470 pF\" }"),
    ("loop", "table", "\"h.csv\""),
    ("loop", "edge", "\"unity-gain\""),
    ("boundary", "largest_q", "3"),
    ("boundary", "harmonics", "5"),
    ("anchor", "offset", "\"7.5 kHz\""),
    ("anchor", "output_divider", "4"),
    ("anchor", "q", "1"),
    ("anchor", "roll_off", "\"0 dB\""),
    ("clock", "name", "\"processor\""),
    ("clock", "frequency", "\"48 MHz\""),
    ("clock", "anchor", "{ mechanism = \"output\", level = \"-70 dBc\", at = \"422.5 MHz\" }"),
    ("limits", "integration", "[\"1 kHz\", \"10 MHz\"]"),
    ("channels", "list", "[\"422.1 MHz\", \"1267/3 MHz\"]"),
    ("channels", "file", "\"channels.csv\""),
    ("channels", "injection", "\"-10.7 MHz\""),
    ("channels", "output", "[4]"),
    ("channels", "limits", "{ phase_error = \"1 deg\" }"),
    ("victim", "name", "\"adjacent channel\""),
    ("victim", "offsets", "[\"6.25 kHz\", \"18.75 kHz\"]"),
    ("victim", "width", "\"0 Hz\""),
    ("victim", "limit", "\"-60 dBc\""),
    ("victim", "band", "[\"430 MHz\", \"431 MHz\"]"),
    ("analysis", "level_uncertainty", "\"3 dB\""),
    ("alternatives", "references", "[\"19.2 MHz\", \"20 MHz\"]"),
    ("alternatives", "dividers", "[1, 2]"),
    ("alternatives", "doubler", "[false, true]"),
    ("alternatives", "orders", "[2, 3, 4]"),
    ("alternatives", "dithers", "[\"none\", { stage = 1, register = 23, seed = 1, weight = 1 }]"),
    ("alternatives", "injections", "[\"-10.7 MHz\", \"10.7 MHz\"]"),
    ("alternatives", "output_dividers", "[4, 8]"),
    ("alternatives", "seeds", "[1, 12345]"),
    ("alternatives", "moduli", "[16777216, 16777213]"),
    ("alternatives", "offset_currents", "[\"0 uA\", \"60 uA\"]"),
    ("alternatives", "nudge", "\"100 Hz\""),
    ("analysis", "record", "131072"),
    ("analysis", "span", "\"9.6 MHz\""),
    ("analysis", "tone_floor", "\"-120 dBc\""),
];

/// Returns a plan to start from: every key with its meaning, those that most plans need filled in.
///
/// # Examples
/// ```
/// let text = thornmap::plan::example_plan();
/// assert!(thornmap::plan::parse_plan(&text, "example", &|_| Err("none".to_owned())).is_ok());
/// ```
#[must_use]
pub fn example_plan() -> String {
    let mut text = String::from(
        "# A plan for thornmap: fill in your own figures, then run `thornmap check PLAN` and `thornmap survey PLAN`.\n\
         # Values with a unit are texts: \"19.2 MHz\", \"25/3 kHz\", \"-52 dBc\". Any figure may say where it comes from:\n\
         # { value = \"-52 dBc\", basis = \"measured\", note = \"board 3\" }; basis is measured, datasheet or assumed.\n\
         # A prediction is no compliance measurement; transmitting needs a licence, and local rules decide.\n\
         schema = 1\n",
    );
    let order = SECTIONS.iter().filter(|(name, _)| !matches!(*name, "alternatives" | "analysis" | "limits"));
    for (name, _) in order {
        write_section(&mut text, name, &format!("[{name}]"));
    }
    for (name, _) in LISTS.iter().filter(|(name, _)| *name != "channels") {
        write_section(&mut text, name, &format!("[[{name}]]"));
    }
    write_section(&mut text, "limits", "[limits]");
    write_section(&mut text, "channels", "[[channels]]");
    for name in ["alternatives", "analysis"] {
        write_section(&mut text, name, &format!("[{name}]"));
    }
    text
}

fn find(list: &[(&str, &str, &'static str)], key: &Key) -> Option<&'static str> {
    list.iter().find(|(section, name, _)| *section == key.section && *name == key.name).map(|(_, _, value)| *value)
}

/// Writes a section; one without any filled-in key is a comment as a whole.
fn write_section(text: &mut String, name: &str, head: &str) {
    let is_used = keys_of(name).any(|key| find(VALUES, key).is_some());
    let mark = if is_used { "" } else { "# " };
    text.push_str(&format!("\n{mark}{head}\n"));
    for key in keys_of(name) {
        let default = key.default.map_or_else(String::new, |default| format!("; default: {default}"));
        match find(VALUES, key) {
            Some(value) => text.push_str(&format!("{} = {value}  # {}{default}\n", key.name, key.doc)),
            None => {
                let value = find(HINTS, key).unwrap_or("\"…\"");
                text.push_str(&format!("# {} = {value}  # {}{default}\n", key.name, key.doc));
            }
        }
    }
}
