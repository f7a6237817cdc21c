//! The parts of the report that are signed: risks, proofs, requirements, and the same content as Markdown and PNG.

use serde_json::Value;
use thornmap::decide::dossier::dossier;
use thornmap::plan::parse_plan;
use thornmap::report::{RenderOptions, pdf, render, render_with};
use thornmap::survey::survey;

use super::page::{assert_decibels, assert_hertz, assert_well_formed, plain};
use super::{ALL, fixture, json, text, worst_tone};

const EVERYTHING: RenderOptions = RenderOptions { markdown: true, png: true, ..ALL };

fn channel_at<'a>(json: &'a Value, at: &str) -> &'a Value {
    let (group, index) = at.split_once('/').unwrap();
    let (group, index): (u64, u64) = (group.parse().unwrap(), index.parse().unwrap());
    let channels = json["channels"].as_array().unwrap();
    channels.iter().find(|c| c["group_index"] == group && c["index"] == index).expect("every risk is a channel")
}

#[test]
fn every_figure_of_the_risks_is_that_of_survey_json() {
    let set = render(&fixture::survey(300), &ALL).unwrap();
    let (json, html) = (json(&set), text(&set, "report.html"));
    let mut figures = 0;
    let mut risks = 0;
    for row in html.split("<tr data-risk=\"").skip(1) {
        let (at, rest) = row.split_once("\">").unwrap();
        let channel = channel_at(&json, at);
        let row = rest.split_once("</tr>").unwrap().0;
        let cells: Vec<&str> = row.split("</td>").flat_map(|cell| cell.split("</th>")).collect();
        risks += 1;
        assert_ne!(channel["verdict"], "clear");
        assert!(plain(cells[0]).contains(channel["verdict"].as_str().unwrap()));
        let Some(tone) = worst_tone(channel) else { continue };
        let parts: Vec<String> = cells[1].split("<small>").map(plain).collect();
        assert_eq!(parts[0], tone["label"].as_str().unwrap());
        let mut known = 0;
        for (name, value) in tone["contributions"].as_object().unwrap() {
            let Some(_) = value.as_f64() else { continue };
            let shown = parts.iter().find_map(|part| part.strip_prefix(name.trim_end_matches("_dbc"))).expect(name);
            figures += usize::from(assert_decibels(shown.trim(), value));
            known += 1;
        }
        assert_eq!(parts.len() - 1, known + tone["unknown"].as_array().unwrap().len(), "{parts:?}");
        let (offset, inside) = cells[2].split_once("<small>").unwrap();
        assert_hertz(&plain(offset), tone["offset_hz"].as_f64().unwrap());
        assert_eq!(plain(inside) == "inside the loop", tone["inside_loop"].as_bool().unwrap());
        let levels: Vec<String> = cells[3].split("<small>").map(plain).collect();
        if tone["level_dbc"].is_null() {
            assert!(levels[0].starts_with("unknown"), "{levels:?}");
        } else {
            figures += usize::from(assert_decibels(&levels[0], &tone["level_dbc"]));
        }
        figures += usize::from(assert_decibels(levels[1].trim_start_matches("limit "), &tone["limit_dbc"]));
        figures += usize::from(assert_decibels(levels[2].trim_start_matches("margin "), &tone["margin_db"]));
    }
    let summary = &json["summary"];
    assert_eq!(risks, summary["bad"].as_u64().unwrap() + summary["marginal"].as_u64().unwrap());
    assert!(figures > 40, "{figures} figures");
}

/// Reads a number of a proof.
fn number(text: &str) -> f64 {
    text.trim_start_matches("= ").replace(" Hz", "").parse().unwrap_or_else(|_| panic!("{text} is no number"))
}

#[test]
fn proofs_hold_when_done_again() {
    let plan = thornmap::plan::demo_plan();
    let result = survey(&plan, &|_| {}).unwrap();
    let html = text(&render(&result, &ALL).unwrap(), "report.html");
    let (mut words, mut residues) = (0u64, 0);
    for proof in html.split("<div class=\"proof\">").skip(1) {
        let lines: Vec<String> = proof
            .split("</div>")
            .next()
            .unwrap()
            .split("<li><bdi>")
            .skip(1)
            .map(|line| plain(line.trim_end()))
            .collect();
        let pfd_hz = number(lines[0].rsplit_once("= ").unwrap().1);
        let parts: Vec<f64> =
            lines[0].split("= ").nth(2).unwrap().split(['×', '/']).map(|p| number(p.trim())).collect();
        assert_eq!(parts[0] * parts[1] / parts[2], pfd_hz);
        let output_hz = number(lines[1].split("; ").next().unwrap().rsplit_once("= ").unwrap().1);
        let vco_hz = number(lines[1].rsplit_once("= ").unwrap().1);
        for line in &lines {
            if let Some(rest) = line.strip_prefix("word: N = ") {
                let take = |name: &str| -> i128 {
                    let at = if name == "N" { rest } else { rest.split_once(&format!("{name} = ")).unwrap().1 };
                    at.chars().take_while(char::is_ascii_digit).collect::<String>().parse().unwrap()
                };
                let (n, k, m) = (take("N"), take("K"), take("M"));
                let divider = vco_hz / output_hz;
                let achieved = pfd_hz * (n as f64 + k as f64 / m as f64) / divider;
                let shown = number(rest.rsplit_once(", error").unwrap().0.rsplit_once("= ").unwrap().1);
                assert!((achieved - shown).abs() < 1e-6 && (achieved - output_hz).abs() < pfd_hz / m as f64, "{line}");
                words += 1;
            }
            if let Some((head, tail)) = line.rsplit_once(", tone offset = ") {
                let claim = head.rsplit_once("; ").unwrap().1;
                let (product, rest) = claim.split_once(" = ").unwrap();
                let (q, k) = product.split_once(" × ").unwrap();
                let (residue, m) = rest.split_once(" (mod ").unwrap();
                let whole = |text: &str| text.trim_end_matches(')').parse::<i128>().unwrap();
                let (q, k, residue, m) = (whole(q), whole(k), whole(residue), whole(m));
                assert_eq!((q * k - residue) % m, 0, "{line}");
                assert!(2 * residue.abs() <= m, "the smallest residue: {line}");
                let offset_hz = number(tail.rsplit_once("= ").unwrap().1);
                assert!((residue.abs() as f64 / m as f64 * pfd_hz - offset_hz).abs() < 1e-6, "{line}");
                residues += 1;
            }
        }
    }
    assert_eq!(words, result.summary.bad + result.summary.marginal);
    assert!(residues >= 20, "{residues}");
}

#[test]
fn requirements_name_their_source() {
    let text_of = |limits: &str| {
        format!(
            "schema = 1\n[reference]\nfrequency = \"20 MHz\"\n[oscillator]\nrange = [\"1.6 GHz\", \"1.9 GHz\"]\ngain = \"30 MHz/V\"\n\
             [detector]\ncurrent = \"1 mA\"\n[loop]\nbandwidth = \"50 kHz\"\nphase_margin = \"50 deg\"\n{limits}\n\
             [[channels]]\nname = \"one\"\nlist = [\"1.7003 GHz\"]\n\
             [[channels]]\nname = \"two\"\nlist = [\"1.7103 GHz\"]\nlimits = {{ margin = \"2 dB\" }}\n"
        )
    };
    let spur = "[limits]\nspur = { value = [[\"1 kHz\", \"-60 dBc\"]], note = \"customer, clause 7\" }";
    let plan = parse_plan(&text_of(spur), "x", &|_| Err("none".into())).unwrap();
    let html = plain(&text(&render(&survey(&plan, &|_| {}).unwrap(), &ALL).unwrap(), "report.html"));
    let at = html.find("Requirements").unwrap();
    let part = &html[at..at + html[at..].find("Rules of the verdict").unwrap()];
    for said in [
        "Spur mask at the output (one)-60.00 dBc at 1 kHz; straight in the logarithm of the offset between, end values heldcustomer, clause 7",
        "Internal margin (one)6 dB below the maskdefault of the program",
        "Internal margin (two)2 dB below the maskthe plan, without a note",
        "Phase error with tones (two)nonedefault of the program",
        "Guard, inclusivethe channel's own loop edgedefault of the program",
    ] {
        assert!(part.contains(said), "{said} in {part}");
    }
}

#[test]
fn the_dossier_is_in_the_page_and_in_markdown() {
    // Beside an integer of the one reference, far from any of the other.
    let text_of = "schema = 1\n[reference]\nfrequency = \"20 MHz\"\n[oscillator]\nrange = [\"1.6 GHz\", \"1.9 GHz\"]\ngain = \"30 MHz/V\"\n\
         [modulator]\nmodulus = 4001\n[detector]\ncurrent = \"1 mA\"\nmismatch = \"2 %\"\nfloor = \"-220 dBc/Hz\"\n\
         [loop]\nbandwidth = \"50 kHz\"\nphase_margin = \"50 deg\"\n[limits]\nspur = [[\"1 kHz\", \"-60 dBc\"]]\n\
         [[channels]]\nlist = [\"1.70003 GHz\", \"1.70303 GHz\"]\n\
         [alternatives]\nreferences = [\"20 MHz\", \"21 MHz\"]\norders = [2, 3]\n[analysis]\nrecord = 8192\n";
    let plan = parse_plan(text_of, "small", &|_| Err("none".into())).unwrap();
    let result = survey(&plan, &|_| {}).unwrap();
    assert!(result.summary.bad + result.summary.marginal > 0);
    let made = dossier(&result, &|| {}).unwrap();
    let set = render_with(&result, &made, &EVERYTHING).unwrap();
    let (html, markdown) = (plain(&text(&set, "report.html")), text(&set, "report.md"));
    let cured = made.remedy.as_ref().unwrap().channels.iter().filter_map(|channel| channel.cures.first());
    let mut cures = 0;
    for cure in cured {
        let words = format!("{}: {}", cure.words(), cure.after.verdict.word());
        assert!(html.contains(&words), "{words}");
        assert!(markdown.contains(&cure.words()), "{words}");
        cures += 1;
    }
    assert!(cures > 0);
    let first = &made.comparison.as_ref().unwrap().ranked[0];
    assert!(html.contains(&first.reason) && html.contains(&first.option.name()));
    for name in ["options", "budget"] {
        assert!(set.get(&format!("plots/{name}.svg")).is_some(), "{name}");
        assert!(markdown.contains(&format!("(plots/{name}.svg)")), "{name}");
    }
    // Every table of the Markdown has as many cells in each row as in its head.
    let mut width = None;
    let mut rows = 0;
    for line in markdown.lines() {
        if !line.starts_with('|') {
            width = None;
            continue;
        }
        let cells = line.replace("\\|", "").matches('|').count();
        assert_eq!(*width.get_or_insert(cells), cells, "{line}");
        rows += 1;
    }
    assert!(rows > 50, "{rows}");
}

#[test]
fn hostile_text_is_inert_in_markdown() {
    let mut result = fixture::survey(12);
    result.plan.identity.title = format!("{}\n# head\n@all", fixture::HOSTILE);
    for channel in &mut result.channels {
        channel.group = "a|b](javascript:x)<script>".into();
    }
    let markdown = text(&render(&result, &EVERYTHING).unwrap(), "report.md");
    assert!(!markdown.contains("<script") && !markdown.contains("\n# head") && !markdown.contains("@all"));
    assert!(markdown.contains("a\\|b\\](javascript:x)&lt;script&gt;"));
}

#[test]
fn pictures_of_dots_are_whole_and_the_same_every_time() {
    let result = fixture::survey(40);
    let (first, second) = (render(&result, &EVERYTHING).unwrap(), render(&result, &EVERYTHING).unwrap());
    let drawn: Vec<_> = first.files.iter().filter(|file| file.path.ends_with(".png")).collect();
    assert!(drawn.len() >= 3);
    for file in drawn {
        assert_eq!(second.get(&file.path), Some(file.bytes.as_slice()), "{}", file.path);
        // The head of PNG (ISO/IEC 15948): signature, then IHDR with width and height.
        assert_eq!(&file.bytes[..8], b"\x89PNG\r\n\x1a\n");
        let side = |at: usize| u32::from_be_bytes(file.bytes[at..at + 4].try_into().unwrap());
        assert_eq!(side(16), 2 * 760, "{}", file.path);
        assert!(file.bytes.len() > 8_000, "{} is nearly empty", file.path);
    }
}

#[test]
fn without_a_browser_pdf_says_what_to_do() {
    let error = pdf(b"<p>x</p>", Some(&"no-such-browser-here".into())).unwrap_err().to_string();
    assert!(error.contains("no-such-browser-here") && error.contains("print report.html"), "{error}");
}

#[test]
fn a_hostile_plan_is_inert_in_every_file() {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/browser/hostile.toml");
    let plan = parse_plan(&std::fs::read_to_string(path).unwrap(), "hostile", &|_| Err("none".into())).unwrap();
    let set = render(&survey(&plan, &|_| {}).unwrap(), &EVERYTHING).unwrap();
    for file in set.files.iter().filter(|file| file.path.ends_with(".svg")) {
        assert_well_formed(&file.path, std::str::from_utf8(&file.bytes).unwrap());
    }
    for path in ["report.html", "report.md"] {
        let text = text(&set, path);
        for raw in ["<script>alert", "<img", "<iframe", "<b onclick", "<svg onload", "\u{202e}"] {
            assert!(!text.contains(raw), "{raw} in {path}");
        }
        assert!(text.contains("alert(1)"), "the title is shown in {path}");
    }
    let csv = text(&set, "channels.csv");
    let mut cells = 0;
    for record in csv::Reader::from_reader(csv.as_bytes()).records() {
        for cell in &record.unwrap() {
            let is_formula = cell.starts_with(['=', '+', '-', '@', '\t', '\r']) && cell.parse::<f64>().is_err();
            assert!(!is_formula || cell.ends_with(" Hz"), "{cell}");
            cells += usize::from(cell.starts_with("'="));
        }
    }
    assert!(cells > 10, "{cells} cells made inert");
}
