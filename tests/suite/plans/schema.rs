//! The JSON Schema against the key table and against whole plans.

use serde_json::Value;
use thornmap::plan::keys::{KEYS, LISTS, SECTIONS};
use thornmap::plan::{example_plan, json_schema};

use super::read;

/// Returns the schema of a section's table, nested ones by their dotted name.
fn section<'a>(schema: &'a Value, name: &str) -> &'a Value {
    let mut parts = name.split('.');
    let first = parts.next().unwrap_or_default();
    let mut found = &schema["properties"][first];
    if LISTS.iter().any(|(list, _)| *list == first) {
        found = &found["items"];
    }
    for part in parts {
        found = &found["properties"][part];
    }
    found
}

#[test]
fn schema_holds_exactly_the_keys_of_the_table() {
    let schema = json_schema();
    assert_eq!(schema["$schema"], "https://json-schema.org/draft/2020-12/schema");
    let mut runs = 0;
    for key in KEYS.iter().filter(|key| !key.section.is_empty()) {
        let found = section(&schema, key.section);
        let property = &found["properties"][key.name];
        assert!(property["description"].as_str().is_some_and(|text| text.starts_with(key.doc)), "{key:?}");
        let is_required = found["required"].as_array().is_some_and(|list| list.iter().any(|name| name == key.name));
        assert_eq!(is_required, key.required, "{key:?}");
        assert_eq!(found["additionalProperties"], false);
        runs += 1;
    }
    let mut listed = 0;
    let sections = SECTIONS.iter().chain(LISTS).map(|(name, _)| *name);
    for name in sections.chain(["oscillator.leeson", "loop.components"]) {
        listed += section(&schema, name)["properties"].as_object().map_or(0, serde_json::Map::len);
    }
    assert_eq!(runs, listed, "a key of the schema is not in the table");
    assert!(runs > 90, "{runs}");
}

#[test]
fn every_key_stands_in_the_starter_plan() {
    let text = example_plan();
    let mut runs = 0;
    for key in KEYS.iter().filter(|key| !key.section.contains('.')) {
        let head = if LISTS.iter().any(|(list, _)| *list == key.section) {
            format!("[[{}]]", key.section)
        } else {
            format!("[{}]", key.section)
        };
        let from = if key.section.is_empty() { 0 } else { text.find(&head).unwrap_or_else(|| panic!("{head}")) };
        let body = &text[from + 1..];
        let end = body.find("\n[").or_else(|| body.find("\n# [")).unwrap_or(body.len());
        let lines: Vec<&str> = if from == 0 { text.lines().collect() } else { body[..end].lines().collect() };
        let stands = lines.iter().any(|line| line.trim_start_matches("# ").split(" =").next() == Some(key.name));
        assert!(stands, "{head} {}", key.name);
        runs += 1;
    }
    assert!(runs > 85, "{runs}");
}

#[test]
fn every_commented_key_of_the_starter_plan_can_be_put_to_use() {
    // Uncommenting one line must give a valid value: whatever is refused then is a clash with another key or a file.
    let text = example_plan();
    let mut runs = 0;
    for (number, line) in text.lines().enumerate() {
        let Some(entry) = line.strip_prefix("# ") else { continue };
        let Some((name, _)) = entry.split_once(" = ") else { continue };
        if !KEYS.iter().any(|key| key.name == name) {
            continue;
        }
        let changed: String =
            text.lines().enumerate().map(|(at, old)| format!("{}\n", if at == number { entry } else { old })).collect();
        for problem in read(&changed).err().unwrap_or_default() {
            let clash = [
                "not both",
                "one of",
                "belongs to",
                "needs",
                "no such file",
                "missing",
                "error-feedback",
                "unknown key",
            ];
            assert!(clash.iter().any(|words| problem.text.contains(words)), "{entry}: {problem}");
        }
        runs += 1;
    }
    assert!(runs > 40, "{runs}");
    // The placeholder stands for names and dates only.
    assert_eq!(text.matches("= \"…\"").count(), 5);
}
