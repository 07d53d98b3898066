//! The page of trips is made from the controller's own table.

use std::{fs, path::PathBuf};

use ringvolt_protocol::TRIPS;
use ringvolt_tests::root;

const BEGIN: &str = "<!-- trips:begin -->";
const END: &str = "<!-- trips:end -->";

fn page() -> PathBuf {
    root().join("hardware-notes/trips.md")
}

fn latency(latency_us: u32) -> String {
    match latency_us {
        0 => "see the rule".to_owned(),
        us if us < 1_000_000 => format!("{} ms", f64::from(us) / 1_000.0),
        us => format!("{} s", f64::from(us) / 1e6),
    }
}

fn generated() -> String {
    let mut text = String::from(
        "\n| trip | what it says | detected when | permit withdrawn within | cleared by Reset when | treat as live |\n",
    );
    text += "| --- | --- | --- | --- | --- | --- |\n";
    for row in TRIPS {
        let live = if row.treat_as_live { "**yes**" } else { "" };
        text += &format!(
            "| `{}` | {} | {} | {} | {} | {live} |\n",
            row.code,
            row.sentence,
            row.detection,
            latency(row.latency_us),
            row.clearing
        );
    }
    text
}

/// Set RINGVOLT_WRITE_PAGES=1 to write the page anew.
#[test]
fn the_page_of_trips_is_that_of_the_table() {
    let text = fs::read_to_string(page()).unwrap();
    let (before, rest) = text.split_once(BEGIN).expect("the page has its begin mark");
    let (found, after) = rest.split_once(END).expect("the page has its end mark");
    if std::env::var_os("RINGVOLT_WRITE_PAGES").is_some() {
        fs::write(page(), format!("{before}{BEGIN}{}{END}{after}", generated())).unwrap();
        return;
    }
    assert_eq!(
        found,
        generated(),
        "hardware-notes/trips.md is not made from the table: run with RINGVOLT_WRITE_PAGES=1"
    );
}
