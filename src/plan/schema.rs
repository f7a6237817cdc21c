//! The JSON Schema of plan files, made from the key table, so that editors complete and validate.

use serde_json::{Map, Value, json};

use crate::base::Dimension;
use crate::modulator::{Modulus, REGISTER_LENGTHS};

use super::keys::{Key, Kind, LISTS, SECTIONS, keys_of};

/// Returns the schema (draft 2020-12). Signs and what keys ask of each other are left to `thornmap check`: the schema
/// gives forms, words, units, bounds and descriptions.
///
/// # Examples
/// ```
/// let schema = thornmap::plan::json_schema();
/// assert_eq!(schema["properties"]["reference"]["required"][0], "frequency");
/// ```
#[must_use]
pub fn json_schema() -> Value {
    let mut properties = Map::new();
    properties.insert("schema".to_owned(), json!({ "const": 1, "description": "version of the plan format" }));
    let mut required = vec!["schema".to_owned()];
    for (name, is_required) in SECTIONS {
        properties.insert((*name).to_owned(), section(name));
        if *is_required {
            required.push((*name).to_owned());
        }
    }
    for (name, is_required) in LISTS {
        let mut list = json!({ "type": "array", "items": section(name) });
        if *is_required {
            list["minItems"] = json!(1);
            required.push((*name).to_owned());
        }
        properties.insert((*name).to_owned(), list);
    }
    json!({
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "Thornmap plan, schema 1",
        "type": "object",
        "additionalProperties": false,
        "required": required,
        "properties": properties,
        "$defs": { "basis": { "enum": ["measured", "datasheet", "assumed"] } },
    })
}

/// Returns the schema of a section.
fn section(name: &str) -> Value {
    let properties: Map<String, Value> = keys_of(name).map(|key| (key.name.to_owned(), described(key))).collect();
    let required: Vec<&str> = keys_of(name).filter(|key| key.required).map(|key| key.name).collect();
    json!({ "type": "object", "additionalProperties": false, "properties": properties, "required": required })
}

fn described(key: &Key) -> Value {
    let mut value = form(key);
    let description = match key.default {
        Some(default) => format!("{}; default: {default}", key.doc),
        None => key.doc.to_owned(),
    };
    value["description"] = json!(description);
    value
}

/// Returns the form of a value, with the braces that carry its basis.
fn form(key: &Key) -> Value {
    match key.kind {
        Kind::Table(section_name) => section(section_name),
        Kind::Text => json!({ "anyOf": [{ "type": "string" }, figure(&json!({ "type": "string" }))] }),
        _ => {
            let plain = plain(key);
            json!({ "anyOf": [plain, figure(&plain)] })
        }
    }
}

fn figure(value: &Value) -> Value {
    json!({
        "type": "object",
        "additionalProperties": false,
        "required": ["value"],
        "properties": { "value": value, "basis": { "$ref": "#/$defs/basis" }, "note": { "type": "string" } },
    })
}

fn plain(key: &Key) -> Value {
    match key.kind {
        Kind::Text | Kind::Table(_) => json!({ "type": "string" }),
        Kind::Flag => json!({ "type": "boolean" }),
        Kind::Whole(least, most) => json!({ "type": "integer", "minimum": least, "maximum": most }),
        Kind::Wholes(least, most) => json!({
            "type": "array", "minItems": 1, "items": { "type": "integer", "minimum": least, "maximum": most },
        }),
        Kind::Number => json!({ "type": ["number", "string"] }),
        Kind::Word(words) => json!({ "enum": words }),
        Kind::Quantity(dimension, _) => quantity(dimension),
        Kind::Range(dimension) => {
            json!({ "type": "array", "minItems": 2, "maxItems": 2, "items": quantity(dimension) })
        }
        Kind::Quantities(dimension, _) => json!({ "type": "array", "minItems": 1, "items": quantity(dimension) }),
        Kind::Pairs(first, second) => pairs(first, second),
        Kind::QuantityOrPairs(over, dimension) => {
            json!({ "anyOf": [quantity(dimension), pairs(over, dimension)] })
        }
        Kind::Special(_) => special(key),
    }
}

/// Returns the form of a key that has one of its own.
///
/// # Panics
/// For such a key without a form here: a broken program.
fn special(key: &Key) -> Value {
    match (key.section, key.name) {
        ("modulator", "modulus") => json!({ "anyOf": [
            { "type": "integer", "minimum": 2, "maximum": Modulus::LARGEST },
            { "type": "string", "pattern": r"^\s*2\^\s*([1-9]|[1-3][0-9]|4[0-8])\s*$" },
            only("largest", &json!({ "type": "integer", "minimum": 2, "maximum": Modulus::LARGEST })),
            only("step", &quantity(Dimension::Frequency)),
        ] }),
        ("modulator", "dither") => dither(),
        ("modulator", "ntf") => json!({ "type": "array", "minItems": 1, "items": { "type": "integer" } }),
        ("boundary", "guard") => {
            json!({ "anyOf": [quantity(Dimension::Frequency), { "type": "string", "pattern": with_unit("%") }] })
        }
        ("alternatives", "doubler") => json!({ "type": "array", "minItems": 1, "items": { "type": "boolean" } }),
        ("alternatives", "dithers") => json!({ "type": "array", "minItems": 1, "items": dither() }),
        (section, name) => panic!("{section}.{name} has no form in the schema"),
    }
}

fn dither() -> Value {
    let whole = |least: u64| json!({ "type": "integer", "minimum": least });
    json!({ "anyOf": [
        { "const": "none" },
        {
            "type": "object",
            "additionalProperties": false,
            "required": ["stage", "register"],
            "properties": {
                "stage": whole(1),
                "register": { "enum": REGISTER_LENGTHS },
                "seed": whole(1),
                "weight": whole(1),
            },
        },
    ] })
}

/// Returns a table with this one key.
fn only(name: &str, value: &Value) -> Value {
    json!({ "type": "object", "additionalProperties": false, "required": [name], "properties": { name: value } })
}

/// Returns the pattern of a number, or a fraction of two, before a unit pattern.
fn with_unit(unit: &str) -> String {
    let digits = r"[+-]?([0-9][0-9_]*\.?[0-9_]*|\.[0-9][0-9_]*)([eE][+-]?[0-9]+)?";
    format!(r"^\s*{digits}(\s*/\s*{digits})?\s*{unit}\s*$")
}

fn quantity(dimension: Dimension) -> Value {
    json!({
        "type": "string",
        "pattern": with_unit(&dimension.unit_pattern()),
        "description": format!("accepted units: {}", dimension.accepted()),
    })
}

fn pairs(first: Dimension, second: Dimension) -> Value {
    json!({
        "type": "array",
        "minItems": 1,
        "items": {
            "type": "array", "minItems": 2, "maxItems": 2,
            "prefixItems": [quantity(first), quantity(second)],
        },
    })
}
