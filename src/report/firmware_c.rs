//! The words of a plan as a C99 header: static const arrays of integers, no floats.

use super::columns::word;
use crate::decide::export::{DriverWord, Export, ExportChannel, FIELDS, Field, RoundedHz};

/// Returns text that may stand inside a C comment: nothing in it ends, opens or splices a comment, and no character
/// turns the reading direction.
pub(crate) fn comment(text: &str) -> String {
    let calm: String = text
        .chars()
        .map(|c| match c {
            '\\' => '|',
            c if c == ' ' || c.is_ascii_graphic() || c.is_alphanumeric() => c,
            c if c.is_whitespace() => ' ',
            _ => '.',
        })
        .collect();
    calm.replace("*/", "* /").replace("/*", "/ *").replace("??", "? ?")
}

/// Returns a C string literal; every byte that is not plain is an octal escape.
pub(crate) fn literal(text: &str) -> String {
    let mut out = String::from("\"");
    for byte in text.bytes() {
        match byte {
            b'"' | b'\\' | b'?' => out.push_str(&format!("\\{}", char::from(byte))),
            b' '..=b'~' => out.push(char::from(byte)),
            _ => out.push_str(&format!("\\{byte:03o}")),
        }
    }
    out.push('"');
    out
}

/// Returns the stem as the start of a C name: letters, digits and underscores, a letter first.
fn prefix(stem: &str) -> String {
    let calm: String =
        stem.chars().map(|c| if c.is_ascii_alphanumeric() { c.to_ascii_lowercase() } else { '_' }).collect();
    format!("thornmap_{calm}")
}

/// Returns the smallest unsigned type that holds a value, and the macro of its constants.
const fn smallest(largest: u64) -> (&'static str, &'static str) {
    match largest {
        0..=0xff => ("uint8_t", ""),
        0x100..=0xffff => ("uint16_t", ""),
        0x1_0000..=0xffff_ffff => ("uint32_t", "UINT32_C"),
        _ => ("uint64_t", "UINT64_C"),
    }
}

/// Returns an unsigned constant of a type.
fn constant(value: u64, form: &str) -> String {
    if form.is_empty() { value.to_string() } else { format!("{form}({value})") }
}

/// Returns a signed constant.
fn signed(value: i128) -> String {
    format!("INT64_C({value})")
}

/// The fields that the header carries, each with the type that holds its largest value.
struct Layout {
    fields: Vec<(&'static Field, &'static str, &'static str)>,
}

impl Layout {
    fn of(export: &Export) -> Self {
        let words = || {
            let channels = export.channels.iter().filter_map(|channel| channel.word.as_ref());
            channels.chain(export.vectors.iter().map(|vector| &vector.word))
        };
        let fields = FIELDS
            .iter()
            .map(|field| {
                let (kind, form) = smallest(words().map(|word| (field.value)(word)).max().unwrap_or(0));
                (field, kind, form)
            })
            .collect();
        Self { fields }
    }

    fn row(&self, index: String, frequencies: [RoundedHz; 2], word: &DriverWord) -> String {
        let mut cells = vec![index];
        for frequency in frequencies {
            cells.push(signed(frequency.hz));
            cells.push(frequency.millihertz.to_string());
        }
        cells.extend(self.fields.iter().map(|(field, _, form)| constant((field.value)(word), form)));
        cells.join(", ")
    }
}

/// Returns the header.
pub(crate) fn c_header(export: &Export) -> String {
    let name = prefix(&export.stem);
    let upper = name.to_ascii_uppercase();
    let legal: Vec<&ExportChannel> = export.channels.iter().filter(|channel| channel.word.is_some()).collect();
    let layout = Layout::of(export);
    let mut out = preamble(export, &upper);
    out.push_str(&structures(&layout, &name));
    out.push_str(&format!(
        "#define {upper}_CHANNELS {}\n#define {upper}_VECTORS {}\n",
        legal.len(),
        export.vectors.len()
    ));
    out.push_str(&format!("#define {upper}_AVOIDED {}\n\n", export.avoided.len()));
    out.push_str(&format!(
        "/* Channels with a legal word, in plan order. */\nstatic const struct {name}_word {name}_channels[] = {{\n"
    ));
    for channel in &legal {
        if let (Some(word), Some(achieved)) = (&channel.word, channel.achieved_rounded) {
            let row = layout.row(channel.group_index.to_string(), [channel.channel_rounded, achieved], word);
            out.push_str(&format!("    {{ {row} }},\n"));
        }
    }
    out.push_str(&closed(legal.len(), layout.fields.len() + 5));
    out.push_str(&avoided(export, &name));
    out.push_str(&format!(
        "/* Words at the corners of the arithmetic: a driver must find them from the frequency. */\nstatic const struct {name}_word {name}_vectors[] = {{\n"
    ));
    for vector in &export.vectors {
        let row =
            layout.row(vector.group_index.to_string(), [vector.channel_rounded, vector.achieved_rounded], &vector.word);
        let mark = if vector.on_raster { "a channel of the plan" } else { "off the raster: arithmetic only" };
        let legal = if vector.legal { "" } else { ", not legal" };
        let text = format!("{}, exactly {}, {mark}{legal}", vector.name, word(&vector.channel));
        out.push_str(&format!("    /* {} */\n    {{ {row} }},\n", comment(&text)));
    }
    out.push_str(&closed(export.vectors.len(), layout.fields.len() + 5));
    out.push_str(&registers(export, &name, &upper));
    out.push_str(&format!("#endif /* {upper}_H */\n"));
    out
}

/// Returns the end of an array; C knows no empty one, so that one row of zeros stands in where the count says 0.
fn closed(rows: usize, columns: usize) -> String {
    if rows > 0 {
        return "};\n\n".to_owned();
    }
    let zeros = vec!["0"; columns].join(", ");
    format!("    {{ {zeros} }} /* no row: the count above is 0 */\n}};\n\n")
}

fn preamble(export: &Export, upper: &str) -> String {
    let mut out = format!("#ifndef {upper}_H\n#define {upper}_H\n\n/*\n");
    let mut line = |text: &str| out.push_str(&format!(" * {}\n", comment(text)));
    line(&format!("{}: divider words for firmware.", export.title));
    line(&format!("{}, Thornmap {}, plan SHA-256 {}", export.schema, export.version, export.plan_sha256));
    line(&format!("Modulator structure {}, PFD frequency exactly {}.", export.structure, word(&export.pfd_exact)));
    line(export.caution);
    for sentence in &export.rounding {
        line(&format!("Rounding: {sentence}."));
    }
    for (place, reference) in export.references_exact.iter().enumerate() {
        line(&format!("Reference {place}: exactly {}.", word(reference)));
    }
    for sentence in &export.vectors_missing {
        line(&format!("Missing vector: {sentence}."));
    }
    for channel in export.channels.iter().filter(|channel| channel.word.is_none()) {
        line(&format!("No legal word: {}.", channel.place()));
    }
    out.push_str(" */\n\n#include <stdint.h>\n\n");
    for (key, text) in
        [("SCHEMA", export.schema), ("VERSION", export.version), ("PLAN_SHA256", export.plan_sha256.as_str())]
    {
        out.push_str(&format!("#define {upper}_{key} {}\n", literal(text)));
    }
    out.push('\n');
    out
}

fn structures(layout: &Layout, name: &str) -> String {
    let mut out = format!("/* A channel or vector with its word. */\nstruct {name}_word {{\n");
    let mut member = |kind: &str, field: &str, doc: &str| {
        out.push_str(&format!("    {kind} {field}; /* {} */\n", comment(doc)));
    };
    member("uint32_t", "group", "group of the plan, from 0");
    member("int64_t", "channel_hz", "channel frequency before injection, nearest hertz");
    member("int16_t", "channel_millihertz", "its signed rest in millihertz");
    member("int64_t", "achieved_hz", "achieved output frequency, nearest hertz");
    member("int16_t", "achieved_millihertz", "its signed rest in millihertz");
    for (field, kind, _) in &layout.fields {
        member(kind, field.name, field.doc);
    }
    out.push_str(&format!(
        "}};\n\n/* Channels not to use, both ends included. */\nstruct {name}_range {{\n    uint32_t group;\n    \
         int64_t start_hz;\n    int16_t start_millihertz;\n    int64_t stop_hz;\n    int16_t stop_millihertz;\n    \
         uint32_t channels;\n    const char *reason;\n}};\n\n"
    ));
    out
}

fn avoided(export: &Export, name: &str) -> String {
    let mut out =
        format!("/* Contiguous runs of bad channels. */\nstatic const struct {name}_range {name}_avoided[] = {{\n");
    for range in &export.avoided {
        let (start, stop) = (range.start_rounded, range.stop_rounded);
        out.push_str(&format!(
            "    {{ {}, {}, {}, {}, {}, {}, {} }},\n",
            range.group_index,
            signed(start.hz),
            start.millihertz,
            signed(stop.hz),
            stop.millihertz,
            range.channels,
            literal(&format!("{}: {}", range.rules.join(" "), range.reason))
        ));
    }
    out.push_str(&closed(export.avoided.len(), 7));
    out
}

/// Returns the register values of channels and vectors; nothing without a map.
fn registers(export: &Export, name: &str, upper: &str) -> String {
    let Some(values) = &export.registers else { return String::new() };
    let count = values.registers.len();
    let (kind, form) = if values.registers.iter().all(|register| register.width <= 32) {
        ("uint32_t", "UINT32_C")
    } else {
        ("uint64_t", "UINT64_C")
    };
    let mut out = String::from("/* Registers, in the order of the map:\n");
    for register in &values.registers {
        let address = register.address.map_or_else(String::new, |address| format!(", address {address:#x}"));
        out.push_str(&format!(" * {}: {} bits{address}\n", comment(&register.name), register.width));
    }
    out.push_str(&format!(" */\n#define {upper}_REGISTERS {count}\n\n"));
    let mut table = |what: &str, rows: Vec<&Vec<u64>>| {
        out.push_str(&format!("static const {kind} {name}_{what}_registers[][{count}] = {{\n"));
        for row in &rows {
            let cells: Vec<String> = row.iter().map(|value| format!("{form}({value:#x})")).collect();
            out.push_str(&format!("    {{ {} }},\n", cells.join(", ")));
        }
        out.push_str(&closed(rows.len(), count));
    };
    table("channel", values.channels.iter().flatten().collect());
    table("vector", values.vectors.iter().collect());
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_leaves_a_comment_or_a_string() {
        assert_eq!(comment("a */ b /* c ??/ d\\\ne"), "a * / b / * c ? ?/ d| e");
        assert_eq!(comment("x\u{202e}y"), "x.y");
        assert!(!comment("**/ /*/ */*").contains("*/"));
        assert_eq!(literal("a\"b\\c??/\n\u{e9}"), "\"a\\\"b\\\\c\\?\\?/\\012\\303\\251\"");
    }

    #[test]
    fn names_are_c_names() {
        assert_eq!(prefix("7 seas-plan"), "thornmap_7_seas_plan");
    }
}
