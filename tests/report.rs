//! The report: everything in it, nothing from outside, and it opens in a browser.

use crate::{invented, need};
use ringstep::{record::Run, report};
use std::{fs, process::Command};

fn rendered() -> (tempfile::TempDir, String) {
    let folder = tempfile::tempdir().unwrap();
    invented::write_run(folder.path());
    let mut run = Run::open(folder.path()).unwrap();
    report::write(&mut run).unwrap();
    let page = fs::read_to_string(folder.path().join("report.html")).unwrap();
    if let Some(keep) = std::env::var_os("RINGSTEP_KEEP_REPORT") {
        fs::write(keep, &page).unwrap();
    }
    (folder, page)
}

#[test]
fn a_report_holds_every_value_and_says_that_it_is_simulated() {
    let (folder, page) = rendered();
    let run = Run::open(folder.path()).unwrap();
    assert!(run.altered.is_empty());
    for point in &run.results().points {
        for (name, value) in point.values.named() {
            let shown = value.is_none_or(|value| page.contains(&format!("<data value=\"{}\">", value.value)));
            assert!(shown, "{name} at {} V", point.line_v);
        }
        assert!(point.doubts.iter().all(|doubt| {
            page.contains(&doubt.doubt.sentence.replace('&', "&#38;").replace('<', "&#60;").replace('>', "&#62;"))
        }));
    }
    assert!(page.contains("Simulated data."));
    assert!(page.contains("no value"), "a value that could not be had is not left blank");
}

#[test]
fn a_report_is_one_file_that_asks_for_nothing_from_outside() {
    let (_folder, page) = rendered();
    for reference in ["http:", "https:", "//www", " src=", "url(", "@import", "<script", "<link", "<iframe", "<object"]
    {
        assert!(!page.contains(reference), "{reference}");
    }
    assert!(!regex::Regex::new(r#"href="[^#]"#).unwrap().is_match(&page));
}

#[test]
fn a_report_is_well_formed_and_every_drawing_has_words() {
    // Python's XML parser as the independent reader: the page is written as HTML that is also XML.
    if !need::need_python("xml.etree.ElementTree") {
        return;
    }
    let (folder, _) = rendered();
    let script = r#"
import sys, collections, xml.etree.ElementTree as tree
page = tree.parse(sys.argv[1]).getroot()
ids = collections.Counter(e.get('id') for e in page.iter() if e.get('id'))
assert max(ids.values()) == 1, ids.most_common(3)
drawings = list(page.iter('svg'))
assert len(drawings) >= 9, len(drawings)
for svg in drawings:
    words = [svg.find('title').text, svg.find('desc').text]
    assert all(words), words
    assert all(name in ids for name in svg.get('aria-labelledby').split())
for figure in page.iter('figure'):
    assert figure.find('figcaption').text.strip()
for section in page.iter('section'):
    assert section.get('aria-labelledby') in ids
headings = ' '.join(''.join(e.itertext()) for e in page.iter('h2'))
for name in ['Result', 'Drain waveform', 'Across line voltage', 'Values', 'Doubts', 'Instruments', 'Preflight', 'Timeline', 'Cautions']:
    assert name in headings, name
names = {e.text for e in page.iter('text')}
for name in ['turn-on', 'turn-off', 'clamp', 'leakage ring', 'reflected plateau', 'demagnetisation knee', 'relaxation ring', 'bulk']:
    assert name in names, name
print('ok')
"#;
    let output = Command::new("python3").args(["-c", script]).arg(folder.path().join("report.html")).output().unwrap();
    assert_eq!(String::from_utf8_lossy(&output.stdout).trim(), "ok", "{}", String::from_utf8_lossy(&output.stderr));
}

#[test]
fn a_browser_shows_the_report_without_scrolling_sideways_on_a_narrow_screen() {
    if !need::need("chromium") {
        return;
    }
    let (folder, page) = rendered();
    let escaped = page.replace('&', "&amp;").replace('"', "&quot;");
    let outer = format!(
        "<body><iframe style=\"width:380px;height:900px\" srcdoc=\"{escaped}\"></iframe><p id=\"width\"></p><script>\
         onload = () => {{ const page = document.querySelector('iframe').contentDocument; \
         document.getElementById('width').textContent = 'needs ' + page.documentElement.scrollWidth + ' px, drawings ' \
         + page.querySelectorAll('svg').length; }}</script></body>"
    );
    let file = folder.path().join("narrow.html");
    fs::write(&file, outer).unwrap();
    let profile = tempfile::tempdir().unwrap();
    let output = Command::new("chromium")
        .args(["--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--disable-background-networking"])
        .args(["--disable-component-update", "--disable-sync", "--window-size=800,1000", "--dump-dom"])
        .arg(format!("--user-data-dir={}", profile.path().display()))
        .arg(format!("file://{}", file.display()))
        .output()
        .unwrap();
    let shown = String::from_utf8_lossy(&output.stdout);
    let found = regex::Regex::new(r"needs (\d+) px, drawings (\d+)").unwrap();
    let [width, drawings] = found.captures(&shown).expect("the page was laid out").extract().1;
    assert!(width.parse::<u32>().unwrap() <= 380, "{width} px wide");
    assert!(drawings.parse::<u32>().unwrap() >= 9);
}

#[test]
fn long_captures_stay_small_in_the_report_and_lose_no_peak() {
    let folder = tempfile::tempdir().unwrap();
    let needle = 431.0;
    let wave =
        invented::waveform(2_000_000, 1e-9, 0.0, |t| if (t - 1.234_567e-3).abs() < 1e-12 { needle } else { 100.0 });
    invented::write_refused_run(folder.path(), wave);
    let run = Run::open(folder.path()).unwrap();
    let page = report::render(&run).unwrap();
    assert!(page.len() < 200_000, "{} bytes", page.len());
    assert!(page.contains("no point was finished") && page.contains("Nothing could be measured"));
    let curve = regex::Regex::new(r#"class="data fine" d="([^"]*)""#).unwrap();
    let curve = curve.captures(&page).unwrap()[1].to_owned();
    let heights = curve.split(['M', 'L']).filter_map(|place| place.split(' ').nth(1)?.parse::<f64>().ok());
    let highest = heights.fold(f64::INFINITY, f64::min);
    assert!(highest < 60.0, "the one sample at {needle} V stands near the top of the drawing, not at {highest}");
}

#[test]
fn a_run_of_many_points_stays_small_enough_to_mail() {
    let folder = tempfile::tempdir().unwrap();
    invented::write_sweep(folder.path(), 14);
    let page = report::render(&Run::open(folder.path()).unwrap()).unwrap();
    assert!(page.len() < 1_500_000, "{} bytes", page.len());
    assert!(page.contains("6 more points are in the tables but not drawn"));
}
