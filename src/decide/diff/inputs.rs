//! Inputs that changed: the validated plans compared key by key.

use std::collections::{BTreeMap, BTreeSet};

use serde::Serialize;
use serde_json::Value;

use super::survey_file::SurveyFile;

/// One key of the validated plan whose value changed.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct KeyChange {
    /// Dotted key in the validated plan; lists count from 1.
    pub key: String,
    /// JSON text before; `None` where the old plan has no such key.
    pub old: Option<String>,
    /// JSON text after; `None` where the new plan has no such key.
    pub new: Option<String>,
}

/// One input of the plan file that changed.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct InputChange {
    /// Key in the plan file; lists count from 1.
    pub input: String,
    /// The validated keys that hold it.
    pub keys: Vec<KeyChange>,
    /// A default in both plans: it follows from another input.
    pub follows: bool,
    /// Whether channels can depend on it; title block and alternatives do not reach them.
    pub reaches_channels: bool,
}

impl InputChange {
    /// Returns whether the input may have changed a channel on its own account.
    #[must_use]
    pub fn acts(&self) -> bool {
        self.reaches_channels && !self.follows
    }
}

/// Returns the inputs that differ, by key.
#[must_use]
pub fn input_changes(old: &SurveyFile, new: &SurveyFile) -> Vec<InputChange> {
    let (before, after) = (flattened(&old.plan), flattened(&new.plan));
    let keys: BTreeSet<&String> = before.keys().chain(after.keys()).collect();
    let mut inputs: BTreeMap<String, Vec<KeyChange>> = BTreeMap::new();
    for key in keys {
        let (was, is) = (before.get(key), after.get(key));
        if was != is {
            let change = KeyChange { key: key.clone(), old: was.cloned(), new: is.cloned() };
            inputs.entry(input_of(key)).or_default().push(change);
        }
    }
    inputs
        .into_iter()
        .map(|(input, keys)| InputChange {
            follows: old.defaults.contains(&input) && new.defaults.contains(&input),
            reaches_channels: !(input.starts_with("plan.") || input.starts_with("alternatives.")),
            input,
            keys,
        })
        .collect()
}

/// Returns every leaf by its dotted key; a list of objects is entered, any other list is one value.
fn flattened(plan: &Value) -> BTreeMap<String, String> {
    let mut leaves = BTreeMap::new();
    enter(plan, String::new(), &mut leaves);
    leaves
}

fn enter(value: &Value, key: String, leaves: &mut BTreeMap<String, String>) {
    match value {
        Value::Object(map) if !map.is_empty() => {
            for (name, inner) in map {
                let key = if key.is_empty() { name.clone() } else { format!("{key}.{name}") };
                enter(inner, key, leaves);
            }
        }
        Value::Array(list) if !list.is_empty() && list.iter().all(Value::is_object) => {
            for (place, inner) in list.iter().enumerate() {
                enter(inner, format!("{key}[{}]", place + 1), leaves);
            }
        }
        leaf => {
            leaves.insert(key, leaf.to_string());
        }
    }
}

/// Unit suffixes of validated keys, longest first where one ends another.
const SUFFIXES: [&str; 14] = [
    "_dbc_per_hz",
    "_a_per_rthz",
    "_per_cycle2",
    "_per_cycle",
    "_exact",
    "_dbc",
    "_deg",
    "_db",
    "_hz",
    "_ohm",
    "_farad",
    "_a",
    "_v",
    "_s",
];

/// Returns the key of the plan file that a dotted key of the validated plan comes from.
///
/// # Examples
/// ```
/// use thornmap::decide::diff::input_of;
/// assert_eq!(input_of("detector.mismatch.constant"), "detector.mismatch");
/// assert_eq!(input_of("groups[2].channels.raster.count"), "channels[2].last");
/// assert_eq!(input_of("anchors[1].level_dbc"), "anchor[1].level");
/// ```
#[must_use]
pub fn input_of(key: &str) -> String {
    let mut parts = key.split('.');
    let section = parts.next().unwrap_or("");
    let rest: Vec<&str> = parts.collect();
    let at = |place: usize| rest.get(place).copied().unwrap_or("");
    let (list, number) = section.split_once('[').map_or((section, String::new()), |(list, n)| (list, format!("[{n}")));
    let name = match (list, at(0)) {
        ("modulator", "settings") if at(1) == "noise_transfer" => "ntf",
        ("modulator", "settings") | ("loop", "designed") => at(1),
        ("loop", "components") => "components",
        ("loop", "measured") => "table",
        ("boundary", "edge") => return "loop.edge".to_owned(),
        ("groups", "channels") => match (at(1), at(2)) {
            (_, "first") => "first",
            (_, "spacing") => "spacing",
            (_, "count") => "last",
            _ => "list",
        },
        ("groups", "output_dividers") => "output",
        ("anchors", "place") => match (at(1), at(2)) {
            ("channel", _) => "at",
            (_, "output_divider") => "output_divider",
            _ => "offset",
        },
        (_, name) => name,
    };
    let section = match list {
        "identity" => "plan",
        "groups" => "channels",
        "anchors" => "anchor",
        "clocks" => "clock",
        other => other,
    };
    let name = SUFFIXES.iter().find_map(|suffix| name.strip_suffix(suffix)).unwrap_or(name);
    if name.is_empty() { format!("{section}{number}") } else { format!("{section}{number}.{name}") }
}
