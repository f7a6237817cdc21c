//! Reading values by the key table; every problem is noted, reading goes on.

use std::collections::BTreeMap;
use std::ops::Range;

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use crate::base::{Assumption, Basis, Dimension, Exact, Frequency, parse_number, parse_quantity};

use super::keys::{Key, Kind, Sign, key_of, keys_of};
use super::problem::{PlanProblem, line_and_column};

/// A value with the place it was read from.
#[derive(Debug, Clone, PartialEq)]
pub struct Located<T> {
    /// The value.
    pub value: T,
    /// Byte range in the plan text.
    pub span: Range<usize>,
}

/// One table of the plan file; an absent one behaves as if empty.
#[derive(Debug, Clone)]
pub struct Section<'a, 'i> {
    /// Name in the key table.
    pub kind: &'static str,
    /// Dotted path for messages, for example `channels[2].limits`.
    pub path: String,
    /// The table, if the file holds it.
    pub table: Option<&'a DeTable<'i>>,
    /// Its place, or the end of the file.
    pub span: Range<usize>,
}

/// What reading collects.
#[derive(Debug)]
pub struct Reader<'t> {
    text: &'t str,
    /// Problems so far.
    pub problems: Vec<PlanProblem>,
    /// Figures that were given, in file order of reading.
    pub given: Vec<Assumption>,
    /// Requirements that were given, with basis and note.
    pub required: Vec<Assumption>,
    /// Defaults that apply.
    pub defaults: Vec<Assumption>,
    /// Basis by dotted key.
    pub basis: BTreeMap<String, Basis>,
    /// Doubts.
    pub warnings: Vec<String>,
    /// Channels that the plan may hold.
    pub most_channels: u64,
}

/// Sections that state what is wanted, not what the hardware is: their given values are no assumptions.
const REQUIREMENTS: [&str; 5] = ["plan", "limits", "channels", "alternatives", "analysis"];

impl<'t> Reader<'t> {
    /// Returns a reader over a plan text.
    #[must_use]
    pub fn new(text: &'t str, most_channels: u64) -> Self {
        Self {
            text,
            most_channels,
            problems: Vec::new(),
            given: Vec::new(),
            required: Vec::new(),
            defaults: Vec::new(),
            basis: BTreeMap::new(),
            warnings: Vec::new(),
        }
    }

    /// Notes a problem.
    pub fn problem(&mut self, key: &str, span: &Range<usize>, text: impl Into<String>) {
        self.problem_with_hint(key, span, text, None);
    }

    /// Notes a problem with a way out.
    pub fn problem_with_hint(&mut self, key: &str, span: &Range<usize>, text: impl Into<String>, hint: Option<String>) {
        let (line, column) = line_and_column(self.text, span.start);
        self.problems.push(PlanProblem {
            span: span.clone(),
            line,
            column,
            key: key.to_owned(),
            text: text.into(),
            hint,
        });
    }

    /// Notes a default that applies.
    pub fn default(&mut self, key: String, value: &str) {
        self.defaults.push(Assumption { key, value: value.to_owned(), basis: Basis::Default, note: None });
    }

    /// Returns a sub-table of a section that was checked for unknown keys.
    pub fn table<'a, 'i>(
        &mut self,
        section: &Section<'a, 'i>,
        name: &'static str,
        kind: &'static str,
    ) -> Option<Section<'a, 'i>> {
        let value = section.value(name)?;
        let path = section.key(name);
        let Some(table) = value.get_ref().as_table() else {
            self.problem(&path, &value.span(), format!("found {}, expected a table", describe(value.get_ref())));
            return None;
        };
        let found = Section { kind, path, table: Some(table), span: value.span() };
        self.unknown_keys(&found);
        Some(found)
    }

    /// Notes keys that the table of keys does not know.
    pub fn unknown_keys(&mut self, section: &Section) {
        let Some(table) = section.table else { return };
        let mut unknown: Vec<_> =
            table.keys().filter(|name| !keys_of(section.kind).any(|key| key.name == name.get_ref().as_ref())).collect();
        unknown.sort_by_key(|name| name.span().start);
        for name in unknown {
            let typed = name.get_ref().as_ref();
            let known: Vec<&str> = keys_of(section.kind).map(|key| key.name).collect();
            let hint = did_you_mean(typed, &known);
            let text = format!("unknown key; known keys here: {}", known.join(", "));
            self.problem_with_hint(&section.key(typed), &name.span(), text, hint);
        }
    }

    /// Returns the value of a key, or notes that it is missing or that its default applies.
    fn value<'a, 'i>(&mut self, section: &Section<'a, 'i>, key: &Key) -> Option<&'a Spanned<DeValue<'i>>> {
        let found = section.value(key.name);
        if found.is_none() {
            let path = section.key(key.name);
            if key.required {
                let text = format!("missing; {}", key.doc);
                self.problem_with_hint(
                    &path,
                    &section.head(),
                    text,
                    Some(format!("add {} to [{}]", key.name, section.path)),
                );
            } else if let Some(default) = key.default {
                self.default(path, default);
            }
        }
        found
    }

    /// Unwraps `{ value, basis, note }`, records the figure, and returns its plain value.
    fn figure<'a, 'i>(
        &mut self,
        section: &Section<'a, 'i>,
        name: &str,
        value: &'a Spanned<DeValue<'i>>,
    ) -> Option<&'a Spanned<DeValue<'i>>> {
        let path = section.key(name);
        let mut basis = Basis::Assumed;
        let mut note = None;
        let mut plain = value;
        // A key with braces of its own, such as { step = … }, is a figure only where it says value.
        let own_braces = matches!(key_of(section.kind, name).kind, Kind::Special(_));
        if let Some(table) = value.get_ref().as_table()
            && (!own_braces || table.get("value").is_some())
        {
            const KNOWN: [&str; 3] = ["value", "basis", "note"];
            for key in table.keys() {
                let typed = key.get_ref().as_ref();
                if !KNOWN.contains(&typed) {
                    let text = "unknown key; a figure is { value = …, basis = …, note = … }";
                    self.problem_with_hint(&format!("{path}.{typed}"), &key.span(), text, did_you_mean(typed, &KNOWN));
                }
            }
            if let Some(found) = table.get("basis") {
                match found.get_ref().as_str() {
                    Some("measured") => basis = Basis::Measured,
                    Some("datasheet") => basis = Basis::Datasheet,
                    Some("assumed") => {}
                    _ => {
                        let text = format!(
                            "found {}, allowed are \"measured\", \"datasheet\", \"assumed\"",
                            describe(found.get_ref())
                        );
                        self.problem(&format!("{path}.basis"), &found.span(), text);
                    }
                }
            }
            if let Some(found) = table.get("note") {
                note = found.get_ref().as_str().map(str::to_owned);
                if note.is_none() {
                    let text = format!("found {}, expected a text in quotes", describe(found.get_ref()));
                    self.problem(&format!("{path}.note"), &found.span(), text);
                }
            }
            match table.get("value") {
                Some(found) => plain = found,
                None => {
                    self.problem(&path, &value.span(), "a figure in braces needs a value: { value = …, basis = … }");
                    return None;
                }
            }
        }
        let text = self.text.get(plain.span()).unwrap_or_default();
        let text = text.split_whitespace().collect::<Vec<_>>().join(" ").trim_matches('"').to_owned();
        let found = Assumption { key: path.clone(), value: text, basis, note };
        if section.kind == "limits" {
            self.required.push(found);
        } else if !REQUIREMENTS.contains(&section.kind) {
            self.given.push(found);
        }
        self.basis.insert(path, basis);
        Some(plain)
    }

    /// Returns a figure's plain value by the key table.
    pub fn plain<'a, 'i>(&mut self, section: &Section<'a, 'i>, name: &'static str) -> Option<&'a Spanned<DeValue<'i>>> {
        let key = key_of(section.kind, name);
        let value = self.value(section, key)?;
        self.figure(section, name, value)
    }

    /// Returns a text.
    pub fn text(&mut self, section: &Section, name: &'static str) -> Option<Located<String>> {
        let value = self.plain(section, name)?;
        match value.get_ref().as_str() {
            Some(text) => {
                let shown = without_direction_controls(text);
                if shown != text {
                    let key = section.key(name);
                    self.warnings.push(format!(
                        "{key}: direction controls are shown as \u{fffd}: they would turn figures round"
                    ));
                }
                Some(Located { value: shown, span: value.span() })
            }
            None => {
                let text = format!("found {}, expected a text in quotes", describe(value.get_ref()));
                self.problem(&section.key(name), &value.span(), text);
                None
            }
        }
    }

    /// Returns one of the words that the key table allows.
    pub fn word(&mut self, section: &Section, name: &'static str) -> Option<Located<&'static str>> {
        let Kind::Word(words) = key_of(section.kind, name).kind else { return None };
        let typed = self.text(section, name)?;
        match words.iter().find(|word| **word == typed.value) {
            Some(word) => Some(Located { value: word, span: typed.span }),
            None => {
                let text = format!("found \"{}\", allowed are {}", typed.value, quoted(words));
                let hint = did_you_mean(&typed.value, words);
                self.problem_with_hint(&section.key(name), &typed.span, text, hint);
                None
            }
        }
    }

    /// Returns true or false.
    pub fn flag(&mut self, section: &Section, name: &'static str) -> Option<bool> {
        let value = self.plain(section, name)?;
        let found = value.get_ref().as_bool();
        if found.is_none() {
            let text = format!("found {}, expected true or false", describe(value.get_ref()));
            self.problem(&section.key(name), &value.span(), text);
        }
        found
    }

    /// Returns a whole number inside the bounds of the key table.
    pub fn whole(&mut self, section: &Section, name: &'static str) -> Option<Located<u64>> {
        let value = self.plain(section, name)?;
        let (Kind::Whole(least, most) | Kind::Wholes(least, most)) = key_of(section.kind, name).kind else {
            return None;
        };
        self.whole_value(&section.key(name), value, least, most)
    }

    /// Returns one whole number inside bounds.
    pub fn whole_value(&mut self, path: &str, value: &Spanned<DeValue>, least: u64, most: u64) -> Option<Located<u64>> {
        let found = value
            .get_ref()
            .as_integer()
            .and_then(|digits| i128::from_str_radix(digits.as_str(), digits.radix()).ok())
            .filter(|number| (i128::from(least)..=i128::from(most)).contains(number))
            .and_then(|number| u64::try_from(number).ok());
        match found {
            Some(number) => Some(Located { value: number, span: value.span() }),
            None => {
                let text =
                    format!("found {}, expected a whole number from {least} to {most}", describe(value.get_ref()));
                self.problem(path, &value.span(), text);
                None
            }
        }
    }

    /// Returns a list of whole numbers inside the bounds of the key table; it may not be empty.
    pub fn wholes(&mut self, section: &Section, name: &'static str) -> Option<Located<Vec<u64>>> {
        let value = self.plain(section, name)?;
        let Kind::Wholes(least, most) = key_of(section.kind, name).kind else { return None };
        let path = section.key(name);
        let items = self.items(&path, value)?;
        let count = items.len();
        let numbers: Vec<u64> = items
            .into_iter()
            .filter_map(|item| self.whole_value(&path, item, least, most))
            .map(|found| found.value)
            .collect();
        (numbers.len() == count).then(|| Located { value: numbers, span: value.span() })
    }

    /// Returns the items of a list that is not empty.
    pub fn items<'a, 'i>(
        &mut self,
        path: &str,
        value: &'a Spanned<DeValue<'i>>,
    ) -> Option<Vec<&'a Spanned<DeValue<'i>>>> {
        match value.get_ref().as_array() {
            Some(items) if !items.is_empty() => Some(items.iter().collect()),
            Some(_) => {
                self.problem(path, &value.span(), "an empty list; at least one entry is due");
                None
            }
            None => {
                let text = format!("found {}, expected a list in brackets", describe(value.get_ref()));
                self.problem(path, &value.span(), text);
                None
            }
        }
    }

    /// Returns a number without unit: TOML number, or text such as "25/3".
    pub fn number(&mut self, section: &Section, name: &'static str) -> Option<Located<f64>> {
        let value = self.plain(section, name)?;
        let path = section.key(name);
        let typed = match value.get_ref() {
            DeValue::Integer(digits) => digits.as_str().to_owned(),
            DeValue::Float(digits) => digits.as_str().to_owned(),
            DeValue::String(text) => text.clone().into_owned(),
            other => {
                let text = format!("found {}, expected a number", describe(other));
                self.problem(&path, &value.span(), text);
                return None;
            }
        };
        match parse_number(&typed) {
            Ok(number) => Some(Located { value: number.to_f64(), span: value.span() }),
            Err(error) => {
                self.problem(&path, &value.span(), error.to_string());
                None
            }
        }
    }

    /// Returns a value with a unit, exact in the base unit, with the sign that the key table asks for.
    pub fn quantity(&mut self, section: &Section, name: &'static str) -> Option<Located<Exact>> {
        let value = self.plain(section, name)?;
        let Kind::Quantity(dimension, sign) = key_of(section.kind, name).kind else { return None };
        self.quantity_value(&section.key(name), value, dimension, sign)
    }

    /// Returns one value with a unit.
    pub fn quantity_value(
        &mut self,
        path: &str,
        value: &Spanned<DeValue>,
        dimension: Dimension,
        sign: Sign,
    ) -> Option<Located<Exact>> {
        let Some(typed) = value.get_ref().as_str() else {
            let text = format!(
                "found {} where a value with a unit is due; accepted are {}",
                describe(value.get_ref()),
                dimension.accepted()
            );
            self.problem_with_hint(
                path,
                &value.span(),
                text,
                Some("write the value and its unit in quotes".to_owned()),
            );
            return None;
        };
        let found = match parse_quantity(typed, dimension) {
            Ok(found) => found,
            Err(error) => {
                self.problem(path, &value.span(), error.to_string());
                return None;
            }
        };
        let allowed = match sign {
            Sign::Any => None,
            Sign::Positive => (found.sign() <= 0).then_some("above zero"),
            Sign::NotNegative => (found.sign() < 0).then_some("zero or above"),
        };
        if let Some(allowed) = allowed {
            self.problem(path, &value.span(), format!("found \"{typed}\", must be {allowed}"));
            return None;
        }
        Some(Located { value: found, span: value.span() })
    }

    /// Returns a frequency.
    pub fn frequency(&mut self, section: &Section, name: &'static str) -> Option<Located<Frequency>> {
        let found = self.quantity(section, name)?;
        Some(Located { value: Frequency::from_hz(found.value), span: found.span })
    }

    /// Returns a quantity as a double.
    pub fn real(&mut self, section: &Section, name: &'static str) -> Option<f64> {
        self.quantity(section, name).map(|found| found.value.to_f64())
    }

    /// Returns a list of quantities.
    pub fn quantities(&mut self, section: &Section, name: &'static str) -> Option<Located<Vec<Exact>>> {
        let value = self.plain(section, name)?;
        let Kind::Quantities(dimension, sign) = key_of(section.kind, name).kind else { return None };
        let path = section.key(name);
        let items = self.items(&path, value)?;
        let count = items.len();
        let found: Vec<Exact> = items
            .into_iter()
            .filter_map(|item| self.quantity_value(&path, item, dimension, sign))
            .map(|found| found.value)
            .collect();
        (found.len() == count).then(|| Located { value: found, span: value.span() })
    }

    /// Returns a range: two quantities, the second above the first.
    pub fn range(&mut self, section: &Section, name: &'static str) -> Option<Located<(Exact, Exact)>> {
        let value = self.plain(section, name)?;
        let Kind::Range(dimension) = key_of(section.kind, name).kind else { return None };
        let path = section.key(name);
        let items = self.items(&path, value)?;
        let [low, high] = items.as_slice() else {
            self.problem(
                &path,
                &value.span(),
                format!("found {} entries, expected two: lowest and highest", items.len()),
            );
            return None;
        };
        let low = self.quantity_value(&path, low, dimension, Sign::NotNegative);
        let high = self.quantity_value(&path, high, dimension, Sign::NotNegative);
        let (low, high) = (low?.value, high?.value);
        if low >= high {
            self.problem(&path, &value.span(), "the second value must be above the first");
            return None;
        }
        Some(Located { value: (low, high), span: value.span() })
    }

    /// Returns pairs of quantities whose first values rise strictly, as doubles.
    pub fn pairs_value(
        &mut self,
        path: &str,
        value: &Spanned<DeValue>,
        first: (Dimension, Sign),
        second: (Dimension, Sign),
    ) -> Option<Vec<(f64, f64)>> {
        let items = self.items(path, value)?;
        let mut pairs: Vec<(Exact, f64)> = Vec::new();
        let mut complete = true;
        for item in items {
            let both = item.get_ref().as_array().map(|pair| pair.iter().collect::<Vec<_>>());
            let Some([a, b]) = both.as_deref() else {
                let text = format!("found {}, expected a pair in brackets", describe(item.get_ref()));
                self.problem(path, &item.span(), text);
                complete = false;
                continue;
            };
            let at = self.quantity_value(path, a, first.0, first.1);
            let level = self.quantity_value(path, b, second.0, second.1);
            let (Some(at), Some(level)) = (at, level) else {
                complete = false;
                continue;
            };
            if pairs.last().is_some_and(|(before, _)| *before >= at.value) {
                self.problem(path, &at.span, "the first values of the pairs must rise strictly");
                complete = false;
            }
            pairs.push((at.value, level.value.to_f64()));
        }
        complete.then(|| pairs.into_iter().map(|(at, level)| (at.to_f64(), level)).collect())
    }

    /// Returns a list of pairs by the key table; the first values must be positive when they are offsets.
    pub fn pairs(&mut self, section: &Section, name: &'static str) -> Option<Located<Vec<(f64, f64)>>> {
        let value = self.plain(section, name)?;
        let Kind::Pairs(first, second) = key_of(section.kind, name).kind else { return None };
        let (first, second) = ((first, first_sign(first)), (second, second_sign(second)));
        let pairs = self.pairs_value(&section.key(name), value, first, second)?;
        Some(Located { value: pairs, span: value.span() })
    }

    /// Returns one quantity, or pairs over another, by the key table.
    pub fn quantity_or_pairs(&mut self, section: &Section, name: &'static str) -> Option<Located<Curve>> {
        let value = self.plain(section, name)?;
        let Kind::QuantityOrPairs(over, dimension) = key_of(section.kind, name).kind else { return None };
        let path = section.key(name);
        let sign = second_sign(dimension);
        let curve = if value.get_ref().is_array() {
            Curve::Points(self.pairs_value(&path, value, (over, first_sign(over)), (dimension, sign))?)
        } else {
            Curve::Constant(self.quantity_value(&path, value, dimension, sign)?.value.to_f64())
        };
        Some(Located { value: curve, span: value.span() })
    }
}

/// One value, or points over another quantity.
#[derive(Debug, Clone, PartialEq)]
pub enum Curve {
    /// One value.
    Constant(f64),
    /// Points, rising in the first value.
    Points(Vec<(f64, f64)>),
}

/// Offsets and frequencies are positive; voltages may be any.
fn first_sign(dimension: Dimension) -> Sign {
    if dimension == Dimension::Frequency { Sign::Positive } else { Sign::Any }
}

/// Gains and frequencies are positive; levels and ratios may be any.
fn second_sign(dimension: Dimension) -> Sign {
    match dimension {
        Dimension::TuningGain | Dimension::Frequency => Sign::Positive,
        _ => Sign::Any,
    }
}

impl<'a, 'i> Section<'a, 'i> {
    /// Returns the value of a key.
    #[must_use]
    pub fn value(&self, name: &str) -> Option<&'a Spanned<DeValue<'i>>> {
        self.table?.get(name)
    }

    /// Returns the dotted path of a key.
    #[must_use]
    pub fn key(&self, name: &str) -> String {
        if self.path.is_empty() { name.to_owned() } else { format!("{}.{name}", self.path) }
    }

    /// Returns the place that a message about a missing key points at.
    #[must_use]
    pub fn head(&self) -> Range<usize> {
        self.span.start..self.span.start + usize::from(self.span.end > self.span.start)
    }
}

/// Returns what a value is, for a message: its kind, and its text where short.
#[must_use]
pub fn describe(value: &DeValue) -> String {
    match value {
        DeValue::String(text) if text.chars().count() <= 40 => format!("\"{text}\""),
        DeValue::String(_) => "a long text".to_owned(),
        DeValue::Integer(digits) => digits.as_str().to_owned(),
        DeValue::Float(digits) => digits.as_str().to_owned(),
        DeValue::Boolean(flag) => flag.to_string(),
        DeValue::Datetime(_) => "a date".to_owned(),
        DeValue::Array(_) => "a list".to_owned(),
        DeValue::Table(_) => "a table".to_owned(),
    }
}

/// Returns words in quotes, separated by commas.
fn quoted(words: &[&str]) -> String {
    words.iter().map(|word| format!("\"{word}\"")).collect::<Vec<_>>().join(", ")
}

/// Returns a hint with the nearest known word, where one is near enough.
#[must_use]
pub fn did_you_mean(typed: &str, known: &[&str]) -> Option<String> {
    known
        .iter()
        .map(|word| (strsim::damerau_levenshtein(typed, word), word))
        .filter(|(distance, word)| *distance <= 1.max(word.chars().count().min(typed.chars().count()) / 3))
        .min_by_key(|(distance, _)| *distance)
        .map(|(_, word)| format!("did you mean \"{word}\"?"))
}

/// Returns a text in which controls that override, embed or isolate a writing direction are replaced: one that is left
/// open turns round the figures of the sentence it is put into. Letters of every script stay as they are.
fn without_direction_controls(text: &str) -> String {
    let is_control = |c: char| matches!(c, '\u{202a}'..='\u{202e}' | '\u{2066}'..='\u{2069}');
    text.chars().map(|c| if is_control(c) { '\u{fffd}' } else { c }).collect()
}
