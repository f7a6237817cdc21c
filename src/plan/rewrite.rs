//! A plan's text with other figures in it: the rest stays as it was typed.

use std::ops::Range;

use toml::de::{DeTable, DeValue};

/// A figure of a plan that can be put in place of the one there.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Place {
    /// `level` of the anchor with this index from 0.
    AnchorLevel(usize),
    /// `roll_off` of the anchor with this index from 0.
    AnchorRollOff(usize),
    /// `detector.mismatch`.
    Mismatch,
    /// `detector.offset_current`, in place of whichever key gives it.
    OffsetCurrent,
}

/// Returns the text with each place's value replaced by the given TOML, all else as typed, and the places that the text
/// does not hold.
#[must_use]
pub fn rewritten(text: &str, changes: &[(Place, String)]) -> (String, Vec<Place>) {
    let (root, _) = DeTable::parse_recoverable(text);
    let mut missed = Vec::new();
    let mut edits: Vec<(Range<usize>, String)> = Vec::new();
    for (place, value) in changes {
        match edit_of(text, root.get_ref(), place, value) {
            Some(edit) => edits.push(edit),
            None => missed.push(place.clone()),
        }
    }
    // From the end, so that earlier places keep theirs.
    edits.sort_by_key(|(span, _)| std::cmp::Reverse((span.start, span.end)));
    let mut out = text.to_owned();
    for (span, value) in edits {
        out.replace_range(span, &value);
    }
    (out, missed)
}

/// Returns what to put where for one change.
fn edit_of(text: &str, root: &DeTable, place: &Place, value: &str) -> Option<(Range<usize>, String)> {
    match place {
        Place::AnchorLevel(index) => {
            let (_, level) = entry(anchor(root, *index)?.0, "level")?;
            Some((level, value.to_owned()))
        }
        Place::AnchorRollOff(index) => {
            let (anchor, span) = anchor(root, *index)?;
            if let Some((_, roll_off)) = entry(anchor, "roll_off") {
                return Some((roll_off, value.to_owned()));
            }
            // Before the level, so that a comment behind it stays with it.
            let (level, _) = entry(anchor, "level")?;
            let end = if text.get(span)?.starts_with('{') { ", " } else { "\n" };
            Some((level.start..level.start, format!("roll_off = {value}{end}")))
        }
        Place::Mismatch => {
            let (_, mismatch) = entry(detector(root)?, "mismatch")?;
            Some((mismatch, value.to_owned()))
        }
        Place::OffsetCurrent => {
            let detector = detector(root)?;
            let given = ["offset_current", "offset_time", "offset_share"];
            let (key, old) = given.iter().find_map(|key| entry(detector, key))?;
            Some((key.start..old.end, format!("offset_current = {value}")))
        }
    }
}

/// Returns the places of a key and of its value.
fn entry(table: &DeTable, key: &str) -> Option<(Range<usize>, Range<usize>)> {
    table.iter().find(|(name, _)| name.get_ref() == key).map(|(name, value)| (name.span(), value.span()))
}

/// Returns an anchor with its place.
fn anchor<'t, 'i>(root: &'t DeTable<'i>, index: usize) -> Option<(&'t DeTable<'i>, Range<usize>)> {
    let DeValue::Array(anchors) = root.get("anchor")?.get_ref() else { return None };
    let anchor = anchors.get(index)?;
    match anchor.get_ref() {
        DeValue::Table(table) => Some((table, anchor.span())),
        _ => None,
    }
}

fn detector<'t, 'i>(root: &'t DeTable<'i>) -> Option<&'t DeTable<'i>> {
    match root.get("detector")?.get_ref() {
        DeValue::Table(detector) => Some(detector),
        _ => None,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn values_are_replaced_and_all_else_stays() {
        let text = "# top\n[detector]\noffset_time = \"2 ns\" # old\nmismatch = \"2 %\"\n[[anchor]]\nlevel = \"-50 dBc\" # first\n[[anchor]]\nroll_off = \"1 dB\"\nlevel = { value = \"-46 dBc\", basis = \"measured\" }\n";
        let change = |place, value: &str| (place, format!("\"{value}\""));
        let (out, missed) = rewritten(
            text,
            &[
                change(Place::AnchorLevel(0), "-45 dBc"),
                change(Place::AnchorRollOff(0), "3 dB"),
                change(Place::AnchorRollOff(1), "3 dB"),
                change(Place::AnchorLevel(1), "-44 dBc"),
                change(Place::OffsetCurrent, "31 uA"),
                change(Place::AnchorLevel(2), "0 dBc"),
            ],
        );
        assert_eq!(missed, [Place::AnchorLevel(2)]);
        assert_eq!(
            out,
            "# top\n[detector]\noffset_current = \"31 uA\" # old\nmismatch = \"2 %\"\n[[anchor]]\nroll_off = \"3 dB\"\nlevel = \"-45 dBc\" # first\n[[anchor]]\nroll_off = \"3 dB\"\nlevel = \"-44 dBc\"\n"
        );
        let inline = "anchor = [{ mechanism = \"detector\", level = \"-50 dBc\" }]\n[detector]\ncurrent = \"1 mA\"\n";
        let (out, missed) =
            rewritten(inline, &[change(Place::AnchorRollOff(0), "3 dB"), change(Place::Mismatch, "1 %")]);
        assert_eq!(missed, [Place::Mismatch]);
        assert!(
            out.starts_with("anchor = [{ mechanism = \"detector\", roll_off = \"3 dB\", level = \"-50 dBc\" }]"),
            "{out}"
        );
    }
}
