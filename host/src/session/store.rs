//! The run file as a session writes it: batches between commits.

use ringvolt_protocol::Hello;

use crate::{
    clock::Exchange,
    run::{
        RunError, RunWriter,
        rows::{EchoRow, EpochRow, FrameRow, NoteRow, Record},
    },
};

/// Writes into a run file.
pub struct Store {
    writer: RunWriter,
}

impl Store {
    /// On a run file that was just created, or opened to go on.
    pub const fn new(writer: RunWriter) -> Self {
        Self { writer }
    }

    pub(super) fn mark_simulated(&mut self) -> Result<(), RunError> {
        self.writer.mark_simulated()
    }

    pub(super) fn epoch(&mut self, hello: &Hello, utc_ns: i64, link: &str) -> Result<i64, RunError> {
        self.writer.epoch(&EpochRow { epoch_key: 0, hello: *hello, utc_ns, link: link.to_owned() })
    }

    pub(super) fn record(&mut self, epoch: i64, record: &Record) -> Result<(), RunError> {
        self.writer.record(epoch, record)
    }

    pub(super) fn echo(&mut self, epoch: i64, exchange: &Exchange) -> Result<(), RunError> {
        let row = EchoRow {
            asked_mono_ns: exchange.asked_mono_ns,
            answered_mono_ns: exchange.answered_mono_ns,
            utc_minus_mono_ns: exchange.utc_less_mono_ns,
            received_us: exchange.received_us,
            sent_us: exchange.sent_us,
        };
        self.writer.echo(epoch, &row)
    }

    pub(super) fn frame(&mut self, frame: &FrameRow) -> Result<(), RunError> {
        self.writer.frame(frame)
    }

    pub(super) fn note(&mut self, utc_ns: i64, author: &str, text: &str) -> Result<(), RunError> {
        self.writer.note(&NoteRow { utc_ns, author: author.to_owned(), text: text.to_owned() })
    }

    pub(super) fn commit(&mut self) -> Result<(), RunError> {
        self.writer.commit()
    }
}
