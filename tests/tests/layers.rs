//! Who may import whom: the table in DEVELOPERS.md, checked against the sources.

use std::{
    collections::{BTreeMap, BTreeSet},
    fs,
    path::{Path, PathBuf},
};

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).parent().unwrap().to_owned()
}

/// Rows of the table between the marks in DEVELOPERS.md: a host module, and the host modules it may name.
fn table() -> BTreeMap<String, BTreeSet<String>> {
    let text = fs::read_to_string(root().join("DEVELOPERS.md")).unwrap();
    let body = text.split("<!-- layers:begin -->").nth(1).unwrap().split("<!-- layers:end -->").next().unwrap();
    let words = |cell: &str| {
        cell.split(['`', ',', ' '])
            .filter(|word| !word.is_empty() && *word != "-")
            .map(str::to_owned)
            .collect::<Vec<_>>()
    };
    body.lines()
        .filter(|line| line.starts_with("| `"))
        .map(|line| {
            let cells: Vec<&str> = line.trim_matches('|').split('|').collect();
            (words(cells[0]).remove(0), words(cells[1]).into_iter().collect())
        })
        .collect()
}

fn sources(folder: &Path) -> Vec<PathBuf> {
    let mut found = Vec::new();
    for entry in fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        if path.is_dir() {
            found.extend(sources(&path));
        } else if path.extension().is_some_and(|extension| extension == "rs") {
            found.push(path);
        }
    }
    found
}

/// The host modules a file names: `crate::NAME` and the first level of `use crate::{NAME..., NAME...}`.
fn named(text: &str) -> BTreeSet<String> {
    let word = |text: &str| text.chars().take_while(|c| c.is_alphanumeric() || *c == '_').collect::<String>();
    let mut names = BTreeSet::new();
    let code: String =
        text.lines().filter(|line| !line.trim_start().starts_with("//")).map(|line| format!("{line}\n")).collect();
    for rest in code.split("crate::").skip(1) {
        let Some(list) = rest.strip_prefix('{') else {
            names.insert(word(rest));
            continue;
        };
        let mut depth = 0;
        let mut item = String::new();
        for c in list.chars() {
            match c {
                '{' => depth += 1,
                '}' if depth == 0 => break,
                '}' => depth -= 1,
                ',' if depth == 0 => {
                    names.insert(word(item.trim()));
                    item.clear();
                    continue;
                }
                _ => {}
            }
            item.push(c);
        }
        names.insert(word(item.trim()));
    }
    names.remove("");
    names
}

#[test]
fn modules_import_only_what_the_table_allows() {
    let table = table();
    let src = root().join("host/src");
    let mut faults = Vec::new();
    for entry in fs::read_dir(&src).unwrap() {
        let path = entry.unwrap().path();
        if !path.is_dir() {
            continue;
        }
        let module = path.file_name().unwrap().to_str().unwrap().to_owned();
        let Some(allowed) = table.get(&module) else {
            faults.push(format!("{module} has no row in DEVELOPERS.md"));
            continue;
        };
        for file in sources(&path) {
            for name in named(&fs::read_to_string(&file).unwrap()) {
                if name != module && !allowed.contains(&name) {
                    faults.push(format!("{} names {name}, which the table does not allow", file.display()));
                }
            }
        }
    }
    assert!(table.len() > 10, "the table was not read");
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}

#[test]
fn the_reader_of_imports_sees_what_is_there() {
    let text = "use crate::{clock::Clock, run::{rows::Reading, x}, stamp};\n// crate::view\nlet a = crate::physics::x;";
    let names: Vec<String> = named(text).into_iter().collect();
    assert_eq!(names, ["clock", "physics", "run", "stamp"]);
}

#[test]
fn the_top_level_holds_what_it_should() {
    let allowed = [
        "Cargo.toml",
        "Cargo.lock",
        "README.md",
        "DEVELOPERS.md",
        "firmware",
        "host",
        "protocol",
        "tests",
        "hardware-notes",
        "LICENSE-MIT",
        "LICENSE-APACHE",
        "target",
        "demo",
    ];
    for entry in fs::read_dir(root()).unwrap() {
        let name = entry.unwrap().file_name().into_string().unwrap();
        assert!(name.starts_with('.') || allowed.contains(&name.as_str()), "{name} does not belong at the top level");
    }
}

/// `cargo run` at the top must know which of the workspace's programs is meant.
#[test]
fn the_first_command_of_the_readme_names_one_program() {
    let readme = fs::read_to_string(root().join("README.md")).unwrap();
    assert!(readme.contains("cargo run --release -- demo --out demo"));
    let defaults = ["host", "tests", "firmware", "protocol"]
        .into_iter()
        .filter(|member| fs::read_to_string(root().join(member).join("Cargo.toml")).unwrap().contains("default-run ="));
    assert_eq!(defaults.collect::<Vec<_>>(), ["host"]);
}
