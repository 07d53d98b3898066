//! The Frictionless description of an export (Data Package and Table Schema, version 1).

use std::{fs, io, path::Path};

use serde_json::{Value, json};
use sha2::{Digest, Sha256};

use super::columns::{Column, Kind, Table};
use crate::run::Header;

/// One table's description, with its size and hash.
pub(super) fn resource(table: &Table, path: &Path) -> io::Result<Value> {
    let bytes = fs::read(path)?;
    let hash: String = Sha256::digest(&bytes).iter().map(|byte| format!("{byte:02x}")).collect();
    Ok(json!({
        "name": table.name,
        "path": table.file,
        "title": table.description,
        "profile": "tabular-data-resource",
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "bytes": bytes.len(),
        "hash": format!("sha256:{hash}"),
        "schema": { "fields": table.columns.iter().map(field).collect::<Vec<_>>(), "missingValues": [""] },
    }))
}

fn field(column: &Column) -> Value {
    let kind = match column.kind {
        Kind::Integer => "integer",
        Kind::Number => "number",
        // Nine decimals are more than a table schema's date-time takes: a string with a pattern says it exactly.
        Kind::Time | Kind::Text => "string",
        Kind::Flag => "boolean",
    };
    let mut field = json!({ "name": column.name, "type": kind, "description": column.description });
    if !column.unit.is_empty() {
        field["unit"] = json!(column.unit);
    }
    let mut constraints = json!({});
    // An empty text is a missing value to a table schema.
    if !column.optional && column.kind != Kind::Text {
        constraints["required"] = json!(true);
    }
    if column.kind == Kind::Time {
        field["description"] = json!(format!("{} (RFC 3339, UTC, nine decimals)", column.description));
        constraints["pattern"] = json!(r"\d{4}-\d{2}-\d{2}T\d{2}:\d{2}:\d{2}\.\d{9}Z");
    }
    field["constraints"] = constraints;
    field
}

/// The whole description.
pub(super) fn package(header: &Header, resources: Vec<Value>) -> String {
    let mark = if header.simulated { "SIMULATED: " } else { "" };
    let description = if header.simulated {
        "SIMULATED data of an invented bench: no measurement."
    } else {
        "Accelerating voltage and electron wavelength for every camera frame of one run."
    };
    let value = json!({
        "profile": "tabular-data-package",
        "name": "ringvolt-run",
        "title": format!("{mark}{}", header.bench_name),
        "description": description,
        "simulated": header.simulated,
        "created_by": header.software,
        "resources": resources,
    });
    // A value made of plain strings and numbers serialises.
    serde_json::to_string_pretty(&value).unwrap_or_default() + "\n"
}
