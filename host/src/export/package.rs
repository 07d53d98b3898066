//! The Frictionless description of an export (Data Package and Table Schema, version 1).

use std::{
    fs::File,
    io::{self, Read},
    path::Path,
};

use serde_json::{Value, json};
use sha2::{Digest, Sha256};

use super::columns::{Column, Kind, Table};
use crate::run::Header;

/// One table's description, with its size and hash.
pub(super) fn resource(table: &Table, path: &Path) -> io::Result<Value> {
    let (bytes, hash) = size_and_hash(path)?;
    Ok(json!({
        "name": table.name,
        "path": table.file,
        "title": table.description,
        "profile": "tabular-data-resource",
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "bytes": bytes,
        "hash": format!("sha256:{hash}"),
        "dialect": { "lineTerminator": "\n" },
        "schema": schema(table),
    }))
}

/// Readings of a long run are hundreds of megabytes: they are not held in memory for their hash.
fn size_and_hash(path: &Path) -> io::Result<(u64, String)> {
    let mut file = File::open(path)?;
    let mut hasher = Sha256::new();
    let mut piece = vec![0; 1 << 16];
    let mut bytes = 0;
    loop {
        match file.read(&mut piece)? {
            0 => break,
            count => {
                hasher.update(&piece[..count]);
                bytes += count as u64;
            }
        }
    }
    Ok((bytes, crate::text::hex(&hasher.finalize())))
}

fn schema(table: &Table) -> Value {
    let mut schema = json!({ "fields": table.columns.iter().map(field).collect::<Vec<_>>(), "missingValues": [""] });
    if !table.key.is_empty() {
        schema["primaryKey"] = json!(table.key);
    }
    schema
}

fn field(column: &Column) -> Value {
    let kind = match column.kind {
        Kind::Integer => "integer",
        Kind::Number => "number",
        Kind::Time => "datetime",
        Kind::Text | Kind::Word(_) => "string",
        Kind::Flag => "boolean",
    };
    let mut field = json!({ "name": column.name, "type": kind, "description": column.description });
    if !column.unit.is_empty() {
        field["unit"] = json!(column.unit);
    }
    let mut constraints = json!({});
    // An empty text is a missing value to a table schema.
    if !column.optional && (column.kind != Kind::Text || column.name == "frame") {
        constraints["required"] = json!(true);
    }
    match column.kind {
        Kind::Time => {
            // The default format of a table schema has whole seconds only; `any` leaves RFC 3339 to the reader's parser.
            field["format"] = json!("any");
            field["description"] = json!(format!("{} (RFC 3339, UTC, nine decimals)", column.description));
        }
        Kind::Word(words) => constraints["enum"] = json!(words),
        _ => {}
    }
    field["constraints"] = constraints;
    field
}

/// The whole description.
pub(super) fn package(header: &Header, run: &str, resources: Vec<Value>) -> String {
    let mark = if header.simulated { "SIMULATED: " } else { "" };
    let description = if header.simulated {
        "SIMULATED data of an invented bench: no measurement."
    } else {
        "Accelerating voltage and electron wavelength for every camera frame of one run."
    };
    let mut value = json!({
        "profile": "tabular-data-package",
        "name": "ringvolt-run",
        "title": format!("{mark}{}", header.bench_name),
        "description": description,
        "simulated": header.simulated,
        "run": run,
        "created_by": header.software,
        "resources": resources,
    });
    // Whose measurement it is decides on its licence; an invented one may be given away.
    if header.simulated {
        value["licenses"] = json!([{
            "name": "CC0-1.0",
            "path": "https://creativecommons.org/publicdomain/zero/1.0/",
            "title": "CC0 1.0 Universal",
        }]);
    }
    // A value made of plain strings and numbers serialises.
    serde_json::to_string_pretty(&value).unwrap_or_default() + "\n"
}

/// The run that an earlier description belongs to, where it says so.
pub(super) fn run_of(text: &str) -> Option<String> {
    let value: Value = serde_json::from_str(text).ok()?;
    value.get("run")?.as_str().map(str::to_owned)
}
