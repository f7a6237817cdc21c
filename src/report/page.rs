//! The page: the document in one template, with its own style and script and a policy that lets nothing else run.

use askama::Template;

use super::ReportError;
use super::document::Document;
use super::paint::plot_css;
use super::policy::policy;

#[derive(Template)]
#[template(path = "report.html")]
struct Page<'a> {
    doc: &'a Document<'a>,
    policy: String,
    css: String,
    script: String,
}

/// Returns the text of `report.html`.
///
/// # Errors
/// `Page` where the template fails.
pub(crate) fn page(doc: &Document<'_>) -> Result<String, ReportError> {
    // A checkout may have turned line ends; the browser turns them back before it compares the hash.
    let css = format!("{}{}", include_str!("templates/report.css"), plot_css()).replace('\r', "");
    let script = include_str!("templates/report.js").replace('\r', "");
    let page = Page { doc, policy: policy(&css, Some(&script)), css, script };
    Ok(page.render()?)
}
