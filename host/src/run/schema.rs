//! The layout of a run file.
//!
//! Readings are the bulk: a key made of epoch and sequence number (so that no index is needed and a double is refused by
//! the key itself), codes and flags. Times of the controller are microseconds of its epoch; UTC comes from the `echo`
//! table when it is wanted. A reduction's stamps are added beside older ones and never replace them.

use rusqlite::Connection;

/// Version of the layout that this program writes.
pub const SCHEMA_VERSION: i64 = 1;

/// Marks a SQLite file as a run: "RVLT".
pub(super) const APPLICATION_ID: i64 = 0x5256_4c54;

/// Bits of a reading's key below the epoch.
pub(super) const SEQ_BITS: u32 = 32;

const TABLES: &str = "
CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;

CREATE TABLE epoch (
    epoch_key INTEGER PRIMARY KEY,
    device TEXT NOT NULL,
    number INTEGER NOT NULL,
    heard_utc_ns INTEGER NOT NULL,
    link TEXT NOT NULL,
    hello TEXT NOT NULL
);

CREATE TABLE held_certificate (certificate_key INTEGER PRIMARY KEY, hash TEXT NOT NULL UNIQUE);

-- id = epoch_key * 2^32 + seq
CREATE TABLE reading (
    id INTEGER PRIMARY KEY,
    time_us INTEGER NOT NULL,
    duration_us INTEGER NOT NULL,
    sense_sum INTEGER NOT NULL,
    sense_count INTEGER NOT NULL,
    sense_min INTEGER NOT NULL,
    sense_max INTEGER NOT NULL,
    cross_sum INTEGER NOT NULL,
    cross_count INTEGER NOT NULL,
    cross_min INTEGER NOT NULL,
    cross_max INTEGER NOT NULL,
    flags INTEGER NOT NULL,
    certificate_key INTEGER NOT NULL
);

CREATE TABLE event (
    id INTEGER PRIMARY KEY,
    time_us INTEGER NOT NULL,
    code TEXT NOT NULL,
    detail TEXT NOT NULL
);

CREATE TABLE slow (
    id INTEGER PRIMARY KEY,
    time_us INTEGER NOT NULL,
    beam_na INTEGER,
    enclosure_centicelsius INTEGER
);

CREATE TABLE strobe (id INTEGER PRIMARY KEY, time_us INTEGER NOT NULL, rising INTEGER NOT NULL);

CREATE TABLE gap (
    gap_key INTEGER PRIMARY KEY,
    epoch_key INTEGER NOT NULL REFERENCES epoch,
    stream TEXT NOT NULL,
    first_seq INTEGER NOT NULL,
    count INTEGER NOT NULL
);

CREATE TABLE echo (
    echo_key INTEGER PRIMARY KEY,
    epoch_key INTEGER NOT NULL REFERENCES epoch,
    asked_mono_ns INTEGER NOT NULL,
    answered_mono_ns INTEGER NOT NULL,
    utc_minus_mono_ns INTEGER NOT NULL,
    received_us INTEGER NOT NULL,
    sent_us INTEGER NOT NULL
);

CREATE TABLE status (
    status_key INTEGER PRIMARY KEY,
    epoch_key INTEGER NOT NULL REFERENCES epoch,
    time_us INTEGER NOT NULL,
    detail TEXT NOT NULL
);

CREATE TABLE frame (
    frame TEXT PRIMARY KEY,
    file TEXT NOT NULL,
    noticed_utc_ns INTEGER NOT NULL,
    sha256 TEXT NOT NULL,
    start_utc_ns INTEGER,
    end_utc_ns INTEGER,
    start_u_ns INTEGER,
    length_u_ns INTEGER,
    source TEXT,
    unknown_because TEXT
) WITHOUT ROWID;

CREATE TABLE note (
    note_key INTEGER PRIMARY KEY,
    utc_ns INTEGER NOT NULL,
    author TEXT NOT NULL,
    text TEXT NOT NULL
);

CREATE TABLE reduction (
    reduction_key INTEGER PRIMARY KEY,
    created_utc_ns INTEGER NOT NULL,
    command TEXT NOT NULL,
    software TEXT NOT NULL,
    profile_text TEXT NOT NULL,
    certificate_text TEXT,
    complete INTEGER NOT NULL
);

-- Exposures that a reduction took from another source than the frame's own row.
CREATE TABLE exposure (
    reduction_key INTEGER NOT NULL REFERENCES reduction,
    frame TEXT NOT NULL REFERENCES frame,
    start_utc_ns INTEGER,
    end_utc_ns INTEGER,
    start_u_ns INTEGER,
    length_u_ns INTEGER,
    source TEXT,
    unknown_because TEXT,
    PRIMARY KEY (reduction_key, frame)
) WITHOUT ROWID;

CREATE TABLE stamp (
    reduction_key INTEGER NOT NULL REFERENCES reduction,
    frame TEXT NOT NULL REFERENCES frame,
    verdict TEXT NOT NULL,
    reasons TEXT NOT NULL,
    volts REAL,
    volts_u REAL,
    volts_u_frame REAL,
    volts_u_common REAL,
    wavelength_pm REAL,
    wavelength_u_pm REAL,
    slope_volts_per_second REAL,
    span_volts REAL,
    ripple_volts REAL,
    coverage REAL,
    enclosure_celsius REAL,
    PRIMARY KEY (reduction_key, frame)
) WITHOUT ROWID;
";

/// Makes the tables of a new file.
pub(super) fn create(connection: &Connection) -> rusqlite::Result<()> {
    connection.execute_batch(&format!(
        "BEGIN; {TABLES} PRAGMA application_id = {APPLICATION_ID}; PRAGMA user_version = {SCHEMA_VERSION}; COMMIT;"
    ))
}

/// The application and layout version of a file.
pub(super) fn identity(connection: &Connection) -> rusqlite::Result<(i64, i64)> {
    let pragma = |name: &str| connection.query_row(&format!("PRAGMA {name}"), [], |row| row.get(0));
    Ok((pragma("application_id")?, pragma("user_version")?))
}
