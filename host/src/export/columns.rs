//! What a table and its columns are.

/// What a column holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// A whole number.
    Integer,
    /// Any number.
    Number,
    /// A time, RFC 3339 UTC with nine decimals.
    Time,
    /// Text.
    Text,
    /// One of these words.
    Word(&'static [&'static str]),
    /// `true` or `false`.
    Flag,
}

/// One column.
#[derive(Clone, Copy, Debug)]
pub struct Column {
    /// Its name.
    pub name: &'static str,
    /// What it holds.
    pub kind: Kind,
    /// Its unit; empty where it has none.
    pub unit: &'static str,
    /// What it says.
    pub description: &'static str,
    /// Whether it may be empty.
    pub optional: bool,
}

/// One table.
#[derive(Clone, Copy, Debug)]
pub struct Table {
    /// Its name.
    pub name: &'static str,
    /// Its file.
    pub file: &'static str,
    /// What a row is.
    pub description: &'static str,
    /// The columns whose values together name a row; empty where there are none.
    pub key: &'static [&'static str],
    /// Its columns.
    pub columns: &'static [Column],
}

/// A column that always holds something.
pub(super) const fn always(name: &'static str, kind: Kind, unit: &'static str, description: &'static str) -> Column {
    Column { name, kind, unit, description, optional: false }
}

/// A column that may be empty.
pub(super) const fn sometimes(name: &'static str, kind: Kind, unit: &'static str, description: &'static str) -> Column {
    Column { name, kind, unit, description, optional: true }
}

/// The mark that stands in every table.
pub(super) const SIMULATED: Column =
    always("simulated", Kind::Flag, "", "true where the row comes from a SIMULATED bench and is no measurement");
