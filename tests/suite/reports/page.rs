//! The page and its plots: the same figures as survey.json, hostile text inert, every shape of plan drawn.

use serde_json::Value;
use thornmap::report::render;

use super::{ALL, FLAGGED, fixture, json, text, worst_tone};

/// Returns the text of a piece of markup: tags removed, character references undone.
pub(super) fn plain(markup: &str) -> String {
    let mut text = String::new();
    let mut inside = false;
    for c in markup.chars() {
        match c {
            '<' => inside = true,
            '>' => inside = false,
            c if !inside => text.push(c),
            _ => {}
        }
    }
    [
        ("&lt;", "<"),
        ("&gt;", ">"),
        ("&quot;", "\""),
        ("&#39;", "'"),
        ("&#34;", "\""),
        ("&#60;", "<"),
        ("&#62;", ">"),
        ("&#38;", "&"),
        ("&amp;", "&"),
    ]
    .iter()
    .fold(text, |text, (coded, plain)| text.replace(coded, plain))
    .replace('\u{2212}', "-")
}

/// Returns the rows of the channel table: where the channel stands in the plan and its cells, markup and all.
fn table_rows(html: &str) -> Vec<(u64, u64, Vec<&str>)> {
    html.split("<tr data-at=\"")
        .skip(1)
        .map(|row| {
            let (at, rest) = row.split_once("\">").unwrap();
            let (group, index) = at.split_once('/').unwrap();
            let cells = rest.split_once("</tr>").unwrap().0;
            let cells = cells.split("</td>").flat_map(|cell| cell.split("</th>")).filter(|cell| !cell.is_empty());
            (group.parse().unwrap(), index.parse().unwrap(), cells.collect())
        })
        .collect()
}

/// Asserts that a cell shows a level or margin with two decimals; returns whether there was a figure.
pub(super) fn assert_decibels(cell: &str, value: &Value) -> bool {
    let Some(value) = value.as_f64() else { return false };
    let shown: f64 = cell.trim_start_matches("≤ ").parse().unwrap_or_else(|_| panic!("{cell} for {value}"));
    // Half a unit of the last place shown, and half a unit of the last place of survey.json.
    assert!((shown - value).abs() <= 0.005 + 0.5e-4 + 1e-9, "{cell} for {value}");
    true
}

pub(super) fn assert_hertz(cell: &str, hz: f64) {
    let (number, unit) = cell.trim().split_once(' ').unwrap_or_else(|| panic!("{cell} for {hz}"));
    let scale = match unit {
        "Hz" => 1.0,
        "kHz" => 1e3,
        "MHz" => 1e6,
        "mHz" => 1e-3,
        other => panic!("unit {other}"),
    };
    // Six significant digits: half a unit of the sixth is at most 5e-6 of the value.
    assert!((number.parse::<f64>().unwrap() * scale - hz).abs() <= 5e-6 * hz.abs(), "{cell} for {hz}");
}

#[test]
fn the_page_tabulates_the_figures_of_survey_json() {
    let set = render(&fixture::survey(300), &ALL).unwrap();
    let (json, html) = (json(&set), text(&set, "report.html"));
    let channels = json["channels"].as_array().unwrap();
    let rows = table_rows(&html);
    assert_eq!(rows.len(), channels.len());
    let mut figures = 0;
    for (group, index, cells) in &rows {
        let found = channels.iter().find(|c| c["group_index"] == *group && c["index"] == *index);
        let channel = found.expect("every row is a channel");
        assert_eq!(cells.len(), 11);
        assert!(plain(cells[1]).ends_with(channel["verdict"].as_str().unwrap()));
        let fired = |rule: &str| channel["reasons"].as_array().unwrap().iter().filter(|r| r["rule"] == rule).count();
        for rule in thornmap::assess::Rule::ALL {
            let shown = match fired(rule.name()) {
                0 => continue,
                1 => rule.name().to_owned(),
                often => format!("{} ×{often}", rule.name()),
            };
            assert!(plain(cells[2]).contains(&shown), "{shown}");
        }
        match worst_tone(channel) {
            None => assert!((3..8).all(|cell| plain(cells[cell]) == "–")),
            Some(tone) => {
                assert_eq!(plain(cells[3]), tone["label"].as_str().unwrap());
                assert_hertz(&plain(cells[4]), tone["offset_hz"].as_f64().unwrap());
                let level = plain(cells[5]);
                match tone["level_dbc"].is_null() {
                    false => figures += usize::from(assert_decibels(&level, &tone["level_dbc"])),
                    true => {
                        let known = level.strip_prefix("unknown").expect("an unknown level says so");
                        let known = known.strip_prefix("known part ").unwrap_or_default();
                        assert_eq!(assert_decibels(known, &tone["known_level_dbc"]), !known.is_empty());
                    }
                }
                figures += usize::from(assert_decibels(&plain(cells[6]), &tone["limit_dbc"]));
                let margin = plain(cells[7]);
                figures += usize::from(assert_decibels(&margin, &tone["margin_db"]));
                assert_eq!(margin.starts_with('≤'), tone["level_dbc"].is_null() && !tone["margin_db"].is_null());
            }
        }
        if let Some(offset) = channel["boundary"]["tone_offset_hz"].as_f64() {
            let cell = plain(cells[8]);
            let (fraction, shown) = cell.split_once(": ").unwrap();
            assert_eq!(fraction, format!("{}/{}", channel["boundary"]["p"], channel["boundary"]["q"]));
            assert_hertz(shown, offset);
        }
        if channel["k"].as_u64().is_some_and(|k| k > 0) {
            assert_eq!(plain(cells[10]), format!("{} + {}/{}", channel["n"], channel["k"], channel["m"]));
        }
    }
    assert!(figures > 600, "{figures} figures compared");
    let summary = &json["summary"];
    let sentence =
        format!("{} are bad, {} marginal and {} clear", summary["bad"], summary["marginal"], summary["clear"]);
    assert!(html.contains(&sentence), "{sentence}");
    assert!(html.contains(json["plan_sha256"].as_str().unwrap()));
    assert!(html.contains("<code><bdi>thornmap survey petrel.toml --cures never</bdi></code>"));
}

#[test]
fn the_page_lists_every_assumption_and_rule() {
    let result = fixture::survey(20);
    let html = text(&render(&result, &ALL).unwrap(), "report.html");
    let words = plain(&html[html.find("<main>").unwrap()..]);
    for assumption in &result.assumptions {
        assert!(words.contains(&assumption.key), "{}", assumption.key);
        assert!(words.contains(assumption.basis.word()));
    }
    for rule in thornmap::assess::Rule::ALL {
        assert!(words.contains(rule.sentence()), "{}", rule.name());
    }
    for said in ["no compliance measurement", "needs a licence", "Verify on hardware", "sideband", "inclusive"] {
        assert!(words.contains(said), "{said}");
    }
}

#[test]
fn hostile_text_stays_text() {
    let mut result = fixture::survey(12);
    result.plan.identity.title = fixture::HOSTILE.into();
    result.plan.identity.notes = Some("n".repeat(300) + fixture::HOSTILE);
    result.plan.groups[0].name = fixture::HOSTILE.into();
    result.warnings.push(fixture::HOSTILE.into());
    for channel in &mut result.channels {
        channel.group = fixture::HOSTILE.into();
        channel.warnings.push(fixture::HOSTILE.into());
        for tone in &mut channel.tones {
            tone.label = fixture::HOSTILE.into();
        }
    }
    let set = render(&result, &ALL).unwrap();
    for file in set.files.iter().filter(|file| file.path.ends_with(".html") || file.path.ends_with(".svg")) {
        let text = std::str::from_utf8(&file.bytes).unwrap();
        // The page has one script of its own, an SVG none.
        assert_eq!(text.matches("<script").count(), usize::from(file.path == "report.html"), "{}", file.path);
        assert_eq!(text.matches("</script").count(), usize::from(file.path == "report.html"), "{}", file.path);
        assert!(!text.contains("<img"), "{}", file.path);
        assert_eq!(text.matches("<style").count(), text.matches("</style>").count(), "{}", file.path);
        assert_eq!(text.matches("<style").count(), 1, "{}", file.path);
    }
    let html = text(&set, "report.html");
    assert!(html.contains("{{ 7*7 }}") && !html.contains(" 49 "), "the template language is not run on user text");
}

/// Decodes base 64 letter by letter: the other direction of what the page did.
fn decoded(hash: &str) -> Vec<u8> {
    let letters = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let bits: String =
        hash.trim_end_matches('=').chars().map(|c| format!("{:06b}", letters.find(c).unwrap())).collect();
    (0..32).map(|byte| u8::from_str_radix(&bits[8 * byte..8 * byte + 8], 2).unwrap()).collect()
}

#[test]
fn the_page_is_closed_to_everything_but_its_own_style_and_script() {
    let html = text(&render(&fixture::survey(12), &ALL).unwrap(), "report.html");
    for opening in
        [" src=", "url(", "@import", " style=", " onload", " onclick", "<link", "<iframe", "http-equiv=\"refresh"]
    {
        assert!(!html.replace("src=x onerror", "").contains(opening), "{opening}");
    }
    let rest = html.replace("xmlns=\"http://www.w3.org/2000/svg\"", "");
    assert!(!rest.contains("http://") && !rest.contains("https://"));
    // Links lead to places of the page alone.
    assert_eq!(html.matches(" href=").count(), html.matches(" href=\"#").count());
    let style = html.split_once("<style>").unwrap().1.split_once("</style>").unwrap().0;
    let script = html.split_once("<script>").unwrap().1.split_once("</script>").unwrap().0;
    let policy = html.split_once("Content-Security-Policy\" content=\"").unwrap().1.split_once('"').unwrap().0;
    let policy = plain(policy);
    for (what, content) in [("style-src", style), ("script-src", script)] {
        let rule = policy.split_once(what).unwrap().1.split_once(';').unwrap().0;
        assert_eq!(rule.matches("sha256-").count(), 1, "{policy}");
        let hash = rule.split_once("'sha256-").unwrap().1.split_once('\'').unwrap().0;
        assert_eq!(decoded(hash), <sha2::Sha256 as sha2::Digest>::digest(content.as_bytes()).to_vec(), "{what}");
    }
    assert!(!policy.contains("unsafe"));
    assert!(policy.starts_with("default-src 'none';"));
}

/// Asserts that every tag of a picture is closed in turn and that no figure is missing from a path.
pub(super) fn assert_well_formed(name: &str, svg: &str) {
    let mut open: Vec<&str> = Vec::new();
    for piece in svg.split('<').skip(1) {
        let (tag, _) = piece.split_once('>').unwrap_or_else(|| panic!("{name}: {piece}"));
        let word = tag.split([' ', '\n', '/']).next().unwrap();
        if let Some(closing) = tag.strip_prefix('/') {
            assert_eq!(open.pop(), Some(closing), "{name}");
        } else if !tag.ends_with('/') {
            open.push(word);
        }
        if let Some((_, path)) = tag.split_once(" d=\"") {
            assert!(!path.contains("NaN") && !path.contains("inf"), "{name}: {path}");
        }
    }
    assert!(open.is_empty(), "{name}: {open:?}");
}

#[test]
fn plots_are_well_formed_for_every_shape_of_plan() {
    let usual = fixture::survey(137);
    let with = |change: fn(&mut thornmap::survey::SurveyResult)| {
        let mut result = usual.clone();
        change(&mut result);
        result
    };
    let shapes = [
        ("usual", with(|_| {}), 4),
        ("one channel", with(|r| r.channels.truncate(1)), 4),
        ("no channels", with(|r| r.channels.clear()), 0),
        ("no tones", with(|r| r.channels.iter_mut().for_each(|c| c.tones.clear())), 2),
        ("no boundaries", with(|r| r.channels.iter_mut().for_each(|c| c.boundary = None)), 3),
        (
            "all on a boundary",
            with(|r| r.channels.iter_mut().filter_map(|c| c.boundary.as_mut()).for_each(|b| b.tone_offset_hz = 0.0)),
            4,
        ),
        (
            "no guard or edge",
            with(|r| r.channels.iter_mut().for_each(|c| (c.guard_hz, c.loop_edge_hz) = (None, None))),
            4,
        ),
        ("no spectrum", with(|r| r.spectrum = None), 3),
        ("far groups", with(|r| r.channels.last_mut().unwrap().channel_hz = 868e6), 4),
        ("same frequency", with(|r| r.channels.iter_mut().for_each(|c| c.channel_hz = 433e6)), 4),
    ];
    for (name, result, plots) in shapes {
        let set = render(&result, &ALL).unwrap();
        let drawn: Vec<_> = set.files.iter().filter(|file| file.path.starts_with("plots/")).collect();
        assert_eq!(drawn.len(), plots, "{name}");
        for file in drawn {
            assert_well_formed(&format!("{name} {}", file.path), std::str::from_utf8(&file.bytes).unwrap());
        }
        assert_eq!(text(&set, "report.html").matches("<figure>").count(), plots, "{name}");
    }
}

#[test]
fn every_flagged_channel_of_a_small_plan_has_its_mark() {
    let result = fixture::survey(60);
    let svg = text(&render(&result, &ALL).unwrap(), "plots/boundaries.svg");
    // Bad marks are squares of 4.4 units; one more stands in the key. No two channels of this plan share a spot.
    let bad: usize =
        svg.lines().filter(|line| line.contains("\"f-bad\"")).map(|line| line.matches("h4.4v4.4").count()).sum();
    assert_eq!(bad as u64, result.summary.bad + 1);
}

#[test]
fn large_plans_stay_small_and_say_what_is_left_out() {
    let set = render(&fixture::survey(20_000), &ALL).unwrap();
    let html = text(&set, "report.html");
    assert!(html.len() < 3_000_000, "{} bytes", html.len());
    assert_eq!(table_rows(&html).len(), 2_000);
    assert!(html.contains("The worst 2\u{202f}000 of 20\u{202f}001 channels; channels.csv holds all 20\u{202f}001."));
}

#[test]
fn flagged_detail_shows_only_flagged_rows_and_the_command_that_made_it() {
    let result = fixture::survey(200);
    let html = text(&render(&result, &FLAGGED).unwrap(), "report.html");
    assert_eq!(table_rows(&html).len() as u64, result.summary.bad + result.summary.marginal);
    assert!(html.contains("thornmap survey petrel.toml --detail flagged --cures never"));
}
