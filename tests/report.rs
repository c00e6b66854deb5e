//! The report: everything in it, nothing from outside, and it opens in a browser.

use crate::invented;
use ringstep::{record::Run, report};
use std::fs;

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
