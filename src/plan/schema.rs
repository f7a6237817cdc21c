//! The JSON Schema of plan files, made from the key table, so that editors complete and validate.

use serde_json::{Map, Value, json};

use crate::base::Dimension;

use super::keys::{Key, Kind, LISTS, SECTIONS, keys_of};

/// Returns the schema (draft 2020-12). Units and signs are left to `thornmap check`: the schema gives forms, words,
/// bounds and descriptions.
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
        kind => {
            let plain = plain(kind);
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

fn plain(kind: Kind) -> Value {
    match kind {
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
        // Their forms are checked by the program; the schema leaves them open.
        Kind::Special(words) => json!({ "$comment": words }),
    }
}

fn quantity(dimension: Dimension) -> Value {
    json!({ "type": "string", "description": format!("accepted units: {}", dimension.accepted()) })
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
