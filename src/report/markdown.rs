//! The document as Markdown, for a pull request.

use std::fmt::{self, Write};

use askama::Template;
use askama::filters::Escaper;

use super::ReportError;
use super::document::{Document, Row};

/// Rows of the channel table in Markdown: a reader of a pull request scrolls no further.
const MOST_ROWS: usize = 200;

#[derive(Template)]
#[template(path = "report.md")]
struct Page<'a> {
    doc: &'a Document<'a>,
    /// The first rows of the channel table.
    rows: &'a [Row],
}

/// Returns the text of `report.md`.
///
/// # Errors
/// `Page` where the template fails.
pub(crate) fn markdown(doc: &Document<'_>) -> Result<String, ReportError> {
    Ok(Page { doc, rows: &doc.rows[..doc.rows.len().min(MOST_ROWS)] }.render()?)
}

/// Makes text inert in Markdown, tables included.
#[derive(Debug, Clone, Copy, Default)]
pub(crate) struct Escape;

impl Escaper for Escape {
    fn write_escaped_str<W: Write>(&self, mut out: W, text: &str) -> fmt::Result {
        for c in text.chars() {
            match c {
                '<' => out.write_str("&lt;")?,
                '>' => out.write_str("&gt;")?,
                '&' => out.write_str("&amp;")?,
                // A name with @ calls nobody, a number with # opens nothing.
                '@' => out.write_str("&#64;")?,
                '#' => out.write_str("&#35;")?,
                '\\' | '`' | '*' | '_' | '[' | ']' | '|' | '~' | '!' | '$' => {
                    out.write_char('\\')?;
                    out.write_char(c)?;
                }
                c if c.is_control() => out.write_char(' ')?,
                c => out.write_char(c)?,
            }
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn text_is_inert() {
        let mut out = String::new();
        Escape.write_escaped_str(&mut out, "a|b <script> [x](javascript:y) *b* @all #1\n`c`").unwrap();
        assert_eq!(out, "a\\|b &lt;script&gt; \\[x\\](javascript:y) \\*b\\* &#64;all &#35;1 \\`c\\`");
    }
}
