//! The two records of the store, as values.

use postcard::{from_bytes, to_slice};
use ringvolt_firmware::{
    io::{StoreOutcome, StoreRequest, Unreadable},
    store::{MAX_RECORD, Slots},
};
use ringvolt_protocol::{CertificateRecord, SettingsRecord};
use serde::{Serialize, de::DeserializeOwned};

use crate::flash::{self, Flash};

/// The certificate record, where the store holds a readable one.
pub fn certificate(flash: &mut Flash) -> Option<CertificateRecord> {
    read(flash, flash::CERTIFICATE).ok().flatten()
}

/// The settings record; `Ok(None)` where none was ever written.
///
/// # Errors
/// [`Unreadable`] where one was written and cannot be read, or holds a value out of range.
pub fn settings(flash: &mut Flash) -> Result<Option<SettingsRecord>, Unreadable> {
    match read::<SettingsRecord>(flash, flash::SETTINGS)? {
        Some(settings) if settings.fault().is_some() => Err(Unreadable),
        found => Ok(found),
    }
}

/// Carries out what the controller asked for.
pub fn write(flash: &mut Flash, request: &StoreRequest) -> StoreOutcome {
    match request {
        StoreRequest::Certificate(record) => put(flash, flash::CERTIFICATE, record),
        StoreRequest::Settings(record) => put(flash, flash::SETTINGS, record),
    }
}

fn read<R: DeserializeOwned>(flash: &mut Flash, slots: Slots) -> Result<Option<R>, Unreadable> {
    let mut bytes = [0; MAX_RECORD];
    match slots.read(flash, &mut bytes)? {
        None => Ok(None),
        Some(length) => from_bytes(&bytes[..length]).map(Some).map_err(|_| Unreadable),
    }
}

fn put<R: Serialize>(flash: &mut Flash, slots: Slots, record: &R) -> StoreOutcome {
    let mut bytes = [0; MAX_RECORD];
    match to_slice(record, &mut bytes) {
        Ok(used) => slots.write(flash, used),
        Err(_) => StoreOutcome::Failed,
    }
}
