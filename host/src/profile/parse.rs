//! From TOML to a checked [`Profile`]: every fault with file, line, field, what is wrong and what is permitted.

use std::{
    fmt,
    path::{Path, PathBuf},
};

use toml::{
    Spanned,
    de::{DeTable, DeValue},
};

use super::{
    Field, Kind, Presence, Profile, ScreenShape, TABLES, TimeSource,
    field::{self, OPTIONAL_TABLES, fields, plain},
};
use crate::{
    divider::{Network, figures},
    text::{self, TextError},
};

/// Longest profile that is read, bytes.
pub const MAX_PROFILE_BYTES: u64 = 256 << 10;

/// One thing wrong with a profile.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Fault {
    /// Which file.
    pub origin: String,
    /// Which line, counted from 1; `None` where something is missing altogether.
    pub line: Option<usize>,
    /// Dotted path of the field or table, empty where the file is not TOML at all.
    pub field: String,
    /// What is wrong, and what is permitted.
    pub problem: String,
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.origin)?;
        if let Some(line) = self.line {
            write!(f, ", line {line}")?;
        }
        f.write_str(": ")?;
        if !self.field.is_empty() {
            write!(f, "{} ", self.field)?;
        }
        f.write_str(&self.problem)
    }
}

/// Why a profile cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum ProfileError {
    /// The file could not be read.
    #[error(transparent)]
    Text(#[from] TextError),
    /// It holds faults, in the order of their lines.
    #[error("{}", .0.iter().map(Fault::to_string).collect::<Vec<_>>().join("\n"))]
    Faults(Vec<Fault>),
}

impl ProfileError {
    /// The faults found in the text; empty where the file could not be read.
    pub fn faults(&self) -> &[Fault] {
        match self {
            Self::Text(_) => &[],
            Self::Faults(faults) => faults,
        }
    }
}

impl Profile {
    /// Reads a profile file and checks every field.
    ///
    /// # Errors
    /// When the file is unreadable or anything in it is wrong; all faults are told, each on one line.
    pub fn load(path: &Path) -> Result<Self, ProfileError> {
        let text = text::read(path, MAX_PROFILE_BYTES)?;
        Self::parse(&text, &path.display().to_string())
    }

    /// As [`Self::load`], from text. `origin` names it in errors; files named in it are taken relative to the folder
    /// of `origin`.
    ///
    /// # Errors
    /// As [`Self::load`].
    pub fn parse(text: &str, origin: &str) -> Result<Self, ProfileError> {
        let mut reader = Reader { text, origin, faults: Vec::new(), profile: Self::default() };
        match DeTable::parse(text) {
            Ok(root) => reader.read(root.get_ref()),
            Err(error) => reader.not_toml(&error),
        }
        if reader.faults.is_empty() {
            return Ok(reader.profile);
        }
        reader.faults.sort_by_key(|fault| fault.line.unwrap_or(usize::MAX));
        Err(ProfileError::Faults(reader.faults))
    }
}

struct Reader<'a> {
    text: &'a str,
    origin: &'a str,
    faults: Vec<Fault>,
    profile: Profile,
}

type Table<'a> = DeTable<'a>;

impl Reader<'_> {
    fn fault(&mut self, offset: Option<usize>, field: &str, problem: String) {
        let line = offset.map(|offset| text::line_at(self.text, offset));
        self.faults.push(Fault { origin: self.origin.to_owned(), line, field: field.to_owned(), problem });
    }

    fn not_toml(&mut self, error: &toml::de::Error) {
        let problem = format!("is not TOML: {}", error.message().replace('\n', ", "));
        self.fault(error.span().map(|span| span.start), "", problem);
    }

    fn read(&mut self, root: &Table<'_>) {
        self.unknown(root, "");
        for field in fields() {
            let left_out = OPTIONAL_TABLES.contains(&field.table()) && find(root, field.table()).is_none();
            if !left_out {
                self.field(root, field);
            }
        }
        if self.faults.is_empty() {
            self.rules(root);
        }
    }

    /// Tables and fields that are not in the table of fields.
    fn unknown(&mut self, table: &Table<'_>, prefix: &str) {
        for (key, value) in table {
            let path =
                if prefix.is_empty() { key.get_ref().to_string() } else { format!("{prefix}.{}", key.get_ref()) };
            let is_field = fields().any(|field| field.path == path);
            let is_table = TABLES.iter().any(|(name, _)| *name == path);
            match (is_field, is_table, value.get_ref().as_table()) {
                (true, ..) => {}
                (_, true, Some(inner)) => self.unknown(inner, &path),
                (_, true, None) => {
                    let problem = format!("is {}; it must be a table, [{path}]", described(value.get_ref()));
                    self.fault(Some(key.span().start), &path, problem);
                }
                _ => self.fault(Some(key.span().start), &short(&path), unknown_problem(&path)),
            }
        }
    }

    fn field(&mut self, root: &Table<'_>, field: &Field) {
        match (find(root, field.path), field.presence) {
            (Some(value), _) => {
                if let Err(problem) = set(&mut self.profile, field, value.get_ref(), self.origin) {
                    self.fault(Some(value.span().start), field.path, problem);
                }
            }
            (None, Presence::Required) => {
                // A table that is something else altogether has been told already.
                let header = find(root, field.table());
                if header.is_none_or(|table| table.get_ref().is_table()) {
                    let problem = format!("is missing; permitted are {}. {}", field.permitted(), field.about);
                    self.fault(header.map(|table| table.span().start), field.path, problem);
                }
            }
            (None, Presence::Default(value)) => {
                let parsed = DeValue::parse(value);
                let put = parsed.map_err(|error| error.to_string());
                if let Err(problem) = put.and_then(|value| set(&mut self.profile, field, value.get_ref(), self.origin))
                {
                    self.fault(None, field.path, problem);
                }
            }
        }
    }

    /// What one field says about another.
    fn rules(&mut self, root: &Table<'_>) {
        for (path, broken) in RULES {
            if let Some(problem) = broken(&self.profile) {
                let table = path.rsplit_once('.').map_or("", |(table, _)| table);
                let place = find(root, path).or_else(|| find(root, table));
                self.fault(place.map(|value| value.span().start), path, problem);
            }
        }
    }
}

/// A rule's field, and what is wrong where it is broken.
type Rule = (&'static str, fn(&Profile) -> Option<String>);

/// What one field says about another.
const RULES: &[Rule] = &[
    ("tube.bulb_radius_mm", |p| {
        let missing = p.tube.screen == ScreenShape::Bulb && p.tube.bulb_radius_mm < 10.0;
        missing.then(|| {
            format!(
                "is {}, but a bulb needs its inner radius; permitted are 10 to 500 mm",
                plain(p.tube.bulb_radius_mm)
            )
        })
    }),
    ("tube.target_to_screen_mm", |p| {
        let most = 4.0 * p.tube.bulb_radius_mm;
        let far = p.tube.screen == ScreenShape::Bulb && most >= 40.0 && p.tube.target_to_screen_mm > most;
        far.then(|| {
            let found = plain(p.tube.target_to_screen_mm);
            format!(
                "is {found}, more than twice the bulb's diameter; permitted are 10 to {} mm, or check bulb_radius_mm",
                plain(most)
            )
        })
    }),
    ("tube.contact_potential_u_volts", |p| {
        let blind = p.tube.apply_contact_potential && p.tube.contact_potential_u_volts <= 0.0;
        blind.then(|| {
            "is 0, but nobody knows a contact potential exactly; with apply_contact_potential it must be above 0"
                .to_owned()
        })
    }),
    ("divider.nominal_volts_per_code", |p| {
        apart(p.divider.nominal_volts_per_code, p.divider.sense.as_ref(), "divider.sense")
    }),
    ("divider.nominal_cross_volts_per_code", |p| {
        apart(p.divider.nominal_cross_volts_per_code, p.divider.cross.as_ref(), "divider.cross")
    }),
    ("divider.filter_seconds", |p| {
        let parts = figures(p.divider.sense.as_ref()?, 1000.0).filter_seconds;
        let near = (p.divider.filter_seconds - parts).abs() <= 1e-5 + 0.25 * parts;
        let found = plain(p.divider.filter_seconds);
        (!near)
            .then(|| format!("is {found} s, but the parts in [divider.sense] give {parts:.2e} s; correct one of them"))
    }),
    ("camera.exposure_seconds", |p| {
        let needed = p.camera.time_source == TimeSource::FileTime && p.camera.exposure_seconds <= 0.0;
        needed.then(|| {
            "is 0, but a file's time does not tell how long it was exposed; permitted are above 0 to 3600 s".to_owned()
        })
    }),
    ("limits.span_mark_fraction", |p| {
        let (mark, refuse) = (p.limits.span_mark_fraction, p.limits.span_refuse_fraction);
        (mark > refuse).then(|| {
            format!("is {}, above span_refuse_fraction, {}: nothing would ever be marked", plain(mark), plain(refuse))
        })
    }),
    ("limits.least_volts", |p| {
        let (least, most) = (p.limits.least_volts, p.controller.limit_volts);
        (least >= most).then(|| {
            format!(
                "is {}, not below controller.limit_volts, {}: every frame would be refused",
                plain(least),
                plain(most)
            )
        })
    }),
];

/// When the nominal worth of a code is not what the parts give, within 5 %.
fn apart(nominal: f64, network: Option<&Network>, table: &str) -> Option<String> {
    let parts = network?.volts_per_code();
    let near = (parts / nominal - 1.0).abs() <= 0.05;
    (!near).then(|| {
        format!(
            "is {} V, but the parts in [{table}] give {} V; correct one of them",
            plain(nominal),
            plain((1e6 * parts).round() / 1e6)
        )
    })
}

fn find<'t, 'i>(root: &'t Table<'i>, path: &str) -> Option<&'t Spanned<DeValue<'i>>> {
    let mut parts = path.split('.');
    let first = root.get(parts.next()?)?;
    parts.try_fold(first, |value, part| value.get_ref().as_table()?.get(part))
}

fn unknown_problem(path: &str) -> String {
    let names = fields().map(|field| field.path).chain(TABLES.iter().map(|(name, _)| *name));
    let nearest = names.map(|name| (strsim::jaro_winkler(name, path), name)).max_by(|a, b| a.0.total_cmp(&b.0));
    let hint = match nearest {
        Some((likeness, name)) if likeness > 0.85 => format!("; did you mean {name}?"),
        _ => "; `ringvolt bench explain` lists all there are".to_owned(),
    };
    format!("is not a field of a bench profile{hint}")
}

/// Text that came from a file, cut to what fits on a line.
fn short(text: &str) -> String {
    let clean: String = text.chars().filter(|char| !char.is_control()).collect();
    if clean.chars().count() <= 60 { clean } else { format!("{}...", clean.chars().take(57).collect::<String>()) }
}

fn described(value: &DeValue<'_>) -> String {
    match value {
        DeValue::String(text) => format!("the text \"{}\"", short(text)),
        DeValue::Integer(digits) => format!("the whole number {}", short(digits.as_str())),
        DeValue::Float(digits) => format!("the number {}", short(digits.as_str())),
        DeValue::Boolean(value) => value.to_string(),
        DeValue::Datetime(_) => "a date or time".to_owned(),
        DeValue::Array(_) => "a list".to_owned(),
        DeValue::Table(_) => "a table".to_owned(),
    }
}

fn whole(value: &DeValue<'_>) -> Option<i64> {
    let digits = value.as_integer()?;
    i64::from_str_radix(digits.as_str(), digits.radix()).ok()
}

fn number(value: &DeValue<'_>) -> Option<f64> {
    match value {
        DeValue::Float(digits) => digits.as_str().parse().ok(),
        _ => whole(value).map(|value| value as f64),
    }
}

fn one_line(text: &str) -> bool {
    text.chars().count() <= 200 && !text.chars().any(char::is_control)
}

fn ending(value: &DeValue<'_>) -> Option<String> {
    let text = value.as_str()?;
    let plain = |char: char| char.is_ascii_lowercase() || char.is_ascii_digit();
    ((1..=8).contains(&text.len()) && text.chars().all(plain)).then(|| text.to_owned())
}

/// Puts a value into the profile, or says what is wrong with it.
fn set(profile: &mut Profile, field: &Field, value: &DeValue<'_>, origin: &str) -> Result<(), String> {
    let good = match &field.kind {
        Kind::Number { least, most, at } => {
            let within = number(value).filter(|found| (*least..=*most).contains(found));
            within.map(|found| *at(profile) = found)
        }
        Kind::Numbers { count, least, most, at } => {
            let inside = |found: &f64| (*least..=*most).contains(found);
            let entries = value.as_array().map(|list| list.iter().map(|entry| number(entry.get_ref()).filter(inside)));
            let list: Option<Vec<f64>> = entries.and_then(Iterator::collect);
            list.filter(|list| (count.0..=count.1).contains(&list.len())).map(|list| *at(profile) = list)
        }
        Kind::Count { least, most, at } => {
            let found = whole(value)
                .and_then(|found| u32::try_from(found).ok())
                .filter(|found| (*least..=*most).contains(found));
            found.map(|found| *at(profile) = found)
        }
        Kind::Whole { allowed, at } => {
            let found = whole(value).and_then(|found| u8::try_from(found).ok()).filter(|found| allowed.contains(found));
            found.map(|found| *at(profile) = found)
        }
        Kind::Word { allowed, set } => {
            let index = value.as_str().and_then(|word| allowed.iter().position(|known| *known == word));
            index.map(|index| set(profile, index))
        }
        Kind::Switch { at } => value.as_bool().map(|found| *at(profile) = found),
        Kind::Line { may_be_empty, at } => {
            let line = value.as_str().filter(|line| one_line(line) && (*may_be_empty || !line.trim().is_empty()));
            line.map(|line| *at(profile) = line.to_owned())
        }
        Kind::Board { at } => {
            let hex = |id: &&str| id.len() == 16 && id.bytes().all(|byte| byte.is_ascii_hexdigit());
            let board = value.as_str().filter(|id| id.is_empty() || hex(id));
            board.map(|id| *at(profile) = id.to_ascii_lowercase())
        }
        Kind::Endings { at } => {
            let list: Option<Vec<String>> =
                value.as_array().and_then(|list| list.iter().map(|entry| ending(entry.get_ref())).collect());
            list.filter(|list| (1..=16).contains(&list.len())).map(|list| *at(profile) = list)
        }
        Kind::File { at } => {
            let name = value.as_str().filter(|name| one_line(name) && !name.trim().is_empty());
            name.map(|name| *at(profile) = beside(origin, name))
        }
    };
    good.ok_or_else(|| format!("is {}; permitted are {}", described(value), field.permitted()))
}

/// A file named in a profile, relative to the profile's folder.
fn beside(origin: &str, name: &str) -> PathBuf {
    Path::new(origin).parent().unwrap_or(Path::new("")).join(name)
}

/// Checks one value as the field would be checked in a file, for answers typed by a person.
pub(crate) fn check_answer(field: &field::Field, value: &str) -> Result<(), String> {
    let parsed =
        DeValue::parse(value).map_err(|error| format!("is not a value: {}", error.message().replace('\n', ", ")))?;
    set(&mut Profile::default(), field, parsed.get_ref(), "")
}
