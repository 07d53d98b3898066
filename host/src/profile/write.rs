//! Profiles and explanations written from the table of fields.

use std::{collections::BTreeMap, fmt::Write as _};

use super::{
    Field, Presence, TABLES,
    field::{OPTIONAL_TABLES, fields},
};

/// Width of comments and explanations, characters.
const WIDTH: usize = 110;

/// A commented profile. `values` gives TOML values by dotted path; every other field has its default, and a required
/// field that is not given is left for the person to fill in (such a profile is refused until it is). Optional tables of
/// which nothing is given are left out.
pub fn commented(heading: &str, values: &BTreeMap<&str, String>) -> String {
    let mut text = String::new();
    for line in heading.lines() {
        text.push_str(&wrapped("# ", line));
    }
    for (table, about) in TABLES {
        if OPTIONAL_TABLES.contains(table) && !values.keys().any(|path| path.starts_with(&format!("{table}."))) {
            continue;
        }
        let _ = write!(text, "\n{}[{table}]\n", wrapped("# ", about));
        for field in fields().filter(|field| field.table() == *table) {
            text.push_str(&wrapped("# ", &format!("{} ({})", field.about, hint(field))));
            match (values.get(field.path), field.presence) {
                (Some(value), _) => _ = writeln!(text, "{} = {value}", field.key()),
                (None, Presence::Default(value)) => _ = writeln!(text, "{} = {value}", field.key()),
                (None, Presence::Required) => _ = writeln!(text, "# {} = ", field.key()),
            }
        }
    }
    text
}

/// The profile of the simulated bench, `host/examples/bench.toml`.
pub fn example() -> String {
    let values = fields().map(|field| (field.path, field.example.to_owned())).collect();
    commented(
        "Bench profile of the SIMULATED bench: an invented tube, divider and camera.\n\
         Check a profile with `ringvolt bench check FILE`; `ringvolt bench explain` prints every field.",
        &values,
    )
}

/// Every field in words, for `ringvolt bench explain`.
pub fn explain() -> String {
    let mut text = String::new();
    for (table, about) in TABLES {
        let _ = write!(text, "[{table}]\n{}\n", wrapped("  ", about));
        for field in fields().filter(|field| field.table() == *table) {
            let _ = writeln!(text, "  {}", field.key());
            text.push_str(&wrapped("      ", field.about));
            text.push_str(&wrapped("      ", &hint(field)));
        }
        text.push('\n');
    }
    text
}

fn hint(field: &Field) -> String {
    match field.presence {
        Presence::Required => format!("required; {}", field.permitted()),
        Presence::Default(value) => format!("{}; default {value}", field.permitted()),
    }
}

/// Text broken at spaces, every line beginning with `lead`.
fn wrapped(lead: &str, text: &str) -> String {
    let mut lines = vec![String::new()];
    for word in text.split_whitespace() {
        let last = lines.last().map_or(0, |line| line.chars().count());
        if last > 0 && lead.len() + last + 1 + word.chars().count() > WIDTH {
            lines.push(String::new());
        }
        if let Some(line) = lines.last_mut() {
            if !line.is_empty() {
                line.push(' ');
            }
            line.push_str(word);
        }
    }
    lines.iter().fold(String::new(), |whole, line| whole + lead + line + "\n")
}
