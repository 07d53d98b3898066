//! `poll`: owns the parts and passes values between them.

use core::borrow::BorrowMut;

use ringvolt_protocol::{
    CertificateHash, CertificateRecord, Contacts, EventKind, HostHello, LampSettings, Line, PROTOCOL_VERSION, Reading,
    ReadingFlags, Refusal, Request, ResetCause, SettingsRecord, Slow, Status, ToDevice, ToHost, Trip, TripSet,
    WindowCodes, lamp::Sequence,
};

use crate::{
    acquisition::Acquisition,
    agreement::{Agreement, Judge, LIVE_MV, WindowVolts},
    calibration::millivolts,
    channel::ChannelWatch,
    contacts::{Change, Lines},
    interlock::{Changes, Interlock, InterlockTimes},
    io::{Boot, Channel, ConverterNotice, Inputs, Outputs, StoreOutcome, StoreRequest},
    journal::Journal,
    link::Link,
};

/// Windows closed in one poll at most: a poll after a long pause must end soon all the same.
const MOST_WINDOWS: usize = 64;
/// A pause between polls longer than this leaves conversions unread.
const LATE_US: u64 = 2_500;
/// Such a pause is told as an event when it is longer than this.
const VERY_LATE_US: u64 = 20_000;
/// Slow inputs are kept this often: often enough to tell a change within an exposure from one before it.
const SLOW_EVERY_US: u64 = 200_000;
/// The beam current must be above its limit for this long.
const OVER_CURRENT_US: u64 = 2_000;

/// Version of this firmware.
pub const FIRMWARE: [u8; 3] = [0, 1, 0];

/// The controller. The journal is given from outside because it is large: a static one on a board, a boxed one on a
/// computer.
pub struct Controller<J> {
    boot: Boot,
    settings: SettingsRecord,
    certificate: Option<CertificateRecord>,
    /// Causes that boot has found and only a stored record removes.
    standing: TripSet,
    lines: Lines,
    interlock: Interlock,
    acquisition: Acquisition,
    sense: ChannelWatch,
    cross: ChannelWatch,
    agreement: Agreement,
    over_voltage_run: u8,
    over_current_since_us: Option<u64>,
    host_was_heard: bool,
    released: Option<Released>,
    journal: J,
    link: Link,
    store: Option<StoreRequest>,
    store_asked: bool,
    lamp: Lamp,
    slow: SlowSums,
    permit_level: bool,
    permit_edge_us: u64,
    last_poll_us: Option<u64>,
    status: Status,
}

/// When the contactors released, and from which voltage.
#[derive(Clone, Copy, Debug)]
struct Released {
    /// When whatever is left must be gone, microseconds.
    gone_us: u64,
}

/// The sync lamp.
#[derive(Clone, Copy, Debug)]
struct Lamp {
    settings: LampSettings,
    sequence: Sequence,
    next_us: u64,
    lit: bool,
    running: bool,
}

/// Sums of the slow inputs since the last time.
#[derive(Clone, Copy, Debug, Default)]
struct SlowSums {
    beam_na: i64,
    beam_count: i64,
    due_us: u64,
}

impl<J: BorrowMut<Journal>> Controller<J> {
    /// Polls must come at least this often, microseconds: the permit square wave (about 1 kHz) is made of them.
    pub const POLL_INTERVAL_US: u64 = 500;

    /// A controller that has just been powered up: the permit is withdrawn.
    pub fn new(boot: Boot, mut journal: J) -> Self {
        let mut standing = TripSet::EMPTY;
        let stored = boot.settings.ok().flatten().filter(|settings| settings.fault().is_none());
        // A record out of its ranges is as unreadable as a damaged one: the defaults know nothing of this bench.
        if stored.is_none() && boot.settings != Ok(None) {
            standing.insert(Trip::SettingsUnreadable);
        }
        let settings = stored.unwrap_or_default();
        // A record made with another board is as good as none.
        let certificate = boot.certificate.filter(|certificate| certificate.device == boot.device);
        let mut interlock = Interlock::new(times(&settings));
        if boot.reset_cause != ResetCause::PowerOn {
            interlock.latch(Trip::Restarted);
        }
        let held = certificate.map_or(CertificateHash::NONE, |certificate| certificate.hash);
        journal.borrow_mut().hold_certificate(held);
        journal.borrow_mut().event(0, EventKind::Started { cause: boot.reset_cause });
        Self {
            boot,
            settings,
            certificate,
            standing,
            lines: Lines::new(),
            interlock,
            acquisition: Acquisition::new(settings.window_ns),
            sense: ChannelWatch::new(0),
            cross: ChannelWatch::new(0),
            agreement: Agreement::default(),
            over_voltage_run: 0,
            over_current_since_us: None,
            host_was_heard: false,
            released: None,
            journal,
            link: Link::new(),
            store: None,
            store_asked: false,
            lamp: Lamp { settings: settings.lamp, sequence: Sequence::new(), next_us: 0, lit: false, running: false },
            slow: SlowSums::default(),
            permit_level: false,
            permit_edge_us: 0,
            last_poll_us: None,
            status: Status::default(),
        }
    }

    /// Takes everything that came in since the last call and says what the pins shall be.
    ///
    /// `now_us` is microseconds since power-up and never goes back.
    pub fn poll(&mut self, now_us: u64, inputs: &Inputs<'_>) -> Outputs {
        // A clock that went back would be a fault of the shell; here it only stands still.
        let last_us = self.last_poll_us.unwrap_or(now_us);
        let now_us = now_us.max(last_us);
        let elapsed_us = now_us - last_us;
        self.last_poll_us = Some(now_us);
        self.note_lateness(now_us, elapsed_us);
        self.take_contacts(now_us, inputs);
        self.take_conversions(now_us, inputs);
        self.close_windows(now_us);
        self.take_slow(now_us, inputs);
        let causes = self.causes(now_us, inputs);
        let contacts = self.lines.contacts();
        let elapsed_us = u32::try_from(elapsed_us).unwrap_or(u32::MAX);
        if self.lines.are_known() {
            let changes = self.interlock.step(elapsed_us, contacts, causes);
            self.tell(now_us, &changes);
        }
        self.turn_permit(now_us);
        self.turn_lamp(now_us);
        self.take_outcome(inputs);
        self.take_messages(now_us, inputs.received);
        self.report(now_us, inputs);
        Outputs {
            permit: self.permit_level,
            hv_lamp_dark: !self.status.hv_present,
            lamp: self.lamp.lit,
            led: self.led(now_us),
            store: self.ask_store(),
        }
    }

    /// When `poll` wants to be called next if nothing comes in, microseconds since power-up.
    pub fn poll_at(&self) -> u64 {
        self.last_poll_us.map_or(0, |last_us| last_us + Self::POLL_INTERVAL_US)
    }

    /// Framed bytes that wait to be sent, oldest first; call [`Self::sent`] with how many of them were taken.
    pub fn outgoing(&self) -> &[u8] {
        self.link.outgoing()
    }

    /// Tells that the first `count` of [`Self::outgoing`] are on their way.
    pub fn sent(&mut self, count: usize) {
        self.link.sent(count);
    }

    /// The state as the last poll left it.
    pub const fn status(&self) -> &Status {
        &self.status
    }

    /// The interlock, for those who explore it.
    pub const fn interlock(&self) -> &Interlock {
        &self.interlock
    }

    fn note_lateness(&mut self, now_us: u64, elapsed_us: u64) {
        if elapsed_us <= LATE_US {
            return;
        }
        self.acquisition.paused(now_us - elapsed_us, now_us);
        // What this processor slept through is not the converters' silence.
        self.sense.forgive(now_us);
        self.cross.forgive(now_us);
        self.agreement.doubt();
        if elapsed_us > VERY_LATE_US {
            let pause_us = u32::try_from(elapsed_us).unwrap_or(u32::MAX);
            self.journal.borrow_mut().event(now_us, EventKind::LateLoop { pause_us });
        }
    }

    fn take_contacts(&mut self, now_us: u64, inputs: &Inputs<'_>) {
        for edge in inputs.edges.iter().filter(|edge| edge.line == Line::Strobe) {
            self.journal.borrow_mut().strobe(edge.time_us.min(now_us), edge.active);
        }
        for Change { line, active, time_us } in self.lines.update(now_us, inputs.edges, inputs.contacts) {
            self.journal.borrow_mut().event(time_us, EventKind::Line { line, active });
            if line == Line::Contactors {
                self.released = active.then(|| self.expect_bleed(time_us)).flatten();
            }
        }
        let contacts = self.lines.contacts();
        if !(contacts.loop_a_closed && contacts.loop_b_closed) {
            self.acquisition.mark(now_us, ReadingFlags::LOOP_OPEN);
        }
    }

    /// After one and a half times the time that bleeding takes from the present voltage to 60 V, nothing may be left.
    /// Time constants are counted by halvings, 0.7 of one each, and rounded up.
    fn expect_bleed(&self, time_us: u64) -> Option<Released> {
        if self.settings.bleed_ms == 0 {
            return None;
        }
        let (sense, cross) = self.agreement.latest_mv()?;
        let from = sense.unsigned_abs().max(cross.unsigned_abs());
        let halvings = u64::from(32 - (from / LIVE_MV.unsigned_abs()).leading_zeros());
        let bleed_us = u64::from(self.settings.bleed_ms) * 1_000;
        Some(Released { gone_us: time_us + 500_000 + halvings * bleed_us * 105 / 100 })
    }

    fn take_conversions(&mut self, now_us: u64, inputs: &Inputs<'_>) {
        for notice in inputs.notices {
            let kind = match *notice {
                ConverterNotice::ConfigurationRepaired(channel) => {
                    self.acquisition.mark(now_us, ReadingFlags::CONFIGURATION_REPAIRED);
                    EventKind::ConfigurationRepaired { cross: channel == Channel::Cross }
                }
                ConverterNotice::BusRecovered { channel, freed } => {
                    EventKind::BusRecovered { cross: channel == Channel::Cross, freed }
                }
            };
            self.journal.borrow_mut().event(now_us, kind);
        }
        let floor = self.settings.noise_floor_millicodes;
        for conversion in inputs.conversions {
            self.acquisition.take(conversion);
            match conversion.channel {
                Channel::Sense => {
                    self.sense.take(conversion, floor);
                    self.cross.take_other(conversion.code);
                    self.watch_limit(conversion.code);
                }
                Channel::Cross => {
                    self.cross.take(conversion, floor);
                    self.sense.take_other(conversion.code);
                }
            }
        }
        self.sense.pass(now_us);
        self.cross.pass(now_us);
    }

    /// Over-voltage is judged on single conversions, by the certificate's volts and by the raw code.
    fn watch_limit(&mut self, code: i16) {
        let sign = self.settings.polarity.sign();
        let raw = i64::from(code) * sign > i64::from(self.settings.limit_code);
        let volts = self.certificate.as_ref().and_then(|c| millivolts(&c.sense, i32::from(code), 1));
        let above = volts.is_some_and(|mv| i64::from(mv) * sign > i64::from(self.settings.limit_mv));
        self.over_voltage_run = if raw || above { self.over_voltage_run.saturating_add(1) } else { 0 };
    }

    fn is_over_voltage(&self) -> bool {
        self.over_voltage_run >= 2
    }

    fn close_windows(&mut self, now_us: u64) {
        for _ in 0..MOST_WINDOWS {
            let Some(mut reading) = self.acquisition.close(now_us) else { break };
            self.judge_window(&reading);
            self.flag(&mut reading);
            self.journal.borrow_mut().reading(&reading);
        }
    }

    fn judge_window(&mut self, reading: &Reading) {
        let Some(certificate) = &self.certificate else { return };
        let doubtful = [&self.sense, &self.cross].iter().any(|watch| watch.is_silent() || watch.is_over_range());
        if doubtful {
            self.agreement.doubt();
            return;
        }
        let sign = self.settings.polarity.sign() as i32;
        let tube_mv = |mv: Option<i32>| mv.and_then(|mv| mv.checked_mul(sign));
        let low_mv = |line, codes: &WindowCodes| {
            let lowest = if sign > 0 { codes.min } else { codes.max };
            tube_mv(millivolts(line, i32::from(lowest), 1))
        };
        let window = WindowVolts {
            time_us: reading.time_us,
            duration_us: reading.duration_us,
            sense_mv: tube_mv(millivolts(&certificate.sense, reading.sense.sum, reading.sense.count)),
            cross_mv: tube_mv(millivolts(&certificate.cross, reading.cross.sum, reading.cross.count)),
            sense_low_mv: low_mv(&certificate.sense, &reading.sense),
            cross_low_mv: low_mv(&certificate.cross, &reading.cross),
        };
        let judge = Judge { certificate, bleed_ms: self.settings.bleed_ms, permit: self.interlock.is_given() };
        self.agreement.take(&window, &judge);
    }

    fn flag(&self, reading: &mut Reading) {
        let disagree = [Trip::SensesDisagree, Trip::SenseLost, Trip::CrossLost, Trip::RatioChanged];
        let trips = self.agreement.trips();
        let flags = &mut reading.flags;
        flags.set(ReadingFlags::SENSE_OVER_RANGE, over_range(reading.sense.min, reading.sense.max));
        flags.set(ReadingFlags::CROSS_OVER_RANGE, over_range(reading.cross.min, reading.cross.max));
        flags.set(ReadingFlags::SENSE_SILENT, self.sense.is_silent() || reading.sense.count == 0);
        flags.set(ReadingFlags::CROSS_SILENT, self.cross.is_silent() || reading.cross.count == 0);
        flags.set(ReadingFlags::SENSE_FROZEN, self.sense.is_frozen());
        flags.set(ReadingFlags::CROSS_FROZEN, self.cross.is_frozen());
        flags.set(ReadingFlags::SENSES_DISAGREE, disagree.iter().any(|trip| trips.contains(*trip)));
        flags.set(ReadingFlags::OVER_VOLTAGE, self.is_over_voltage());
        flags.set(ReadingFlags::UNCALIBRATED, self.certificate.is_none());
        // Given since before the window began: an edge within it is an event, and refuses by its time.
        flags.set(ReadingFlags::PERMIT, self.interlock.is_given());
    }

    fn take_slow(&mut self, now_us: u64, inputs: &Inputs<'_>) {
        if let Some(beam_na) = inputs.optional.beam_na {
            self.slow.beam_na += i64::from(beam_na);
            self.slow.beam_count += 1;
        }
        let over = self.settings.beam_limit_na > 0
            && inputs.optional.beam_na.is_some_and(|na| i64::from(na) > i64::from(self.settings.beam_limit_na));
        self.over_current_since_us = over.then(|| self.over_current_since_us.unwrap_or(now_us));
        if now_us < self.slow.due_us {
            return;
        }
        let beam = (self.slow.beam_count > 0).then(|| self.slow.beam_na / self.slow.beam_count);
        self.journal.borrow_mut().slow(&Slow {
            seq: 0,
            time_us: now_us,
            beam_na: beam.and_then(|na| i32::try_from(na).ok()),
            enclosure_centicelsius: inputs.optional.enclosure_centicelsius,
        });
        self.slow = SlowSums { due_us: now_us + SLOW_EVERY_US, ..SlowSums::default() };
    }

    /// Everything that keeps the permit away, apart from what the interlock sees itself.
    fn causes(&mut self, now_us: u64, inputs: &Inputs<'_>) -> TripSet {
        let heard = self.link.is_heard(now_us, u64::from(self.settings.grace_ms) * 1_000);
        if heard != self.host_was_heard {
            self.host_was_heard = heard;
            let kind = if heard { EventKind::HostBack } else { EventKind::HostLost };
            self.journal.borrow_mut().event(now_us, kind);
        }
        let over_current = self.over_current_since_us.is_some_and(|since| now_us - since >= OVER_CURRENT_US);
        let live = |mv: i32| mv.abs() > LIVE_MV;
        let remains = self.released.is_some_and(|released| now_us > released.gone_us)
            && self.agreement.latest_mv().is_some_and(|(sense, cross)| live(sense) || live(cross));
        let mut causes = TripSet(self.standing.0 | self.agreement.trips().0);
        for (present, trip) in [
            (self.sense.is_silent(), Trip::SenseSilent),
            (self.cross.is_silent(), Trip::CrossSilent),
            (self.sense.is_frozen(), Trip::SenseFrozen),
            (self.cross.is_frozen(), Trip::CrossFrozen),
            (self.sense.is_over_range() || self.cross.is_over_range(), Trip::TapOverRange),
            (self.is_over_voltage(), Trip::OverVoltage),
            (inputs.optional.comparator == Some(true), Trip::Comparator),
            (over_current, Trip::OverCurrent),
            (remains, Trip::VoltageAfterOff),
            (!heard, Trip::HostLost),
            (self.certificate.is_none(), Trip::NoCertificate),
        ] {
            if present {
                causes.insert(trip);
            }
        }
        causes
    }

    fn tell(&mut self, now_us: u64, changes: &Changes) {
        let (sense_mv, cross_mv) = self.agreement.latest_mv().unzip();
        let journal = self.journal.borrow_mut();
        if changes.withdrawn {
            journal.event(now_us, EventKind::PermitWithdrawn);
        }
        for trip in changes.latched.iter() {
            journal.event(now_us, EventKind::Tripped { trip, sense_mv, cross_mv });
        }
        for trip in changes.cleared.iter() {
            journal.event(now_us, EventKind::Cleared { trip });
        }
        if changes.uncalibrated_start {
            journal.event(now_us, EventKind::UncalibratedStart);
        }
        if changes.given {
            journal.event(now_us, EventKind::PermitGiven);
        }
    }

    /// The square wave: one edge per completed poll at most, and none without the permit.
    fn turn_permit(&mut self, now_us: u64) {
        if !self.interlock.is_given() {
            self.permit_level = false;
        } else if now_us.saturating_sub(self.permit_edge_us) >= Self::POLL_INTERVAL_US {
            self.permit_level = !self.permit_level;
            self.permit_edge_us = now_us;
        }
    }

    fn turn_lamp(&mut self, now_us: u64) {
        let lamp = &mut self.lamp;
        if lamp.settings.on != lamp.running {
            lamp.running = lamp.settings.on;
            lamp.sequence = Sequence::new();
            lamp.next_us = now_us;
            lamp.lit = false;
            let kind = if lamp.running {
                EventKind::LampStarted { chip_us: lamp.settings.chip_us }
            } else {
                EventKind::LampStopped
            };
            self.journal.borrow_mut().event(now_us, kind);
        }
        // After a pause the sequence catches up, so that chip k always begins k chip lengths after the start.
        for _ in 0..MOST_WINDOWS {
            if !lamp.running || now_us < lamp.next_us {
                break;
            }
            lamp.lit = lamp.sequence.advance();
            lamp.next_us += u64::from(lamp.settings.chip_us);
        }
    }

    fn take_outcome(&mut self, inputs: &Inputs<'_>) {
        let (Some(outcome), Some(request)) = (inputs.stored, self.store) else { return };
        self.store = None;
        self.store_asked = false;
        let asked = request_of(&request);
        if outcome == StoreOutcome::Failed {
            return self.link.answer(ToHost::Refused { request: asked, why: Refusal::StoreFailed });
        }
        let time_us = self.last_poll_us.unwrap_or(0);
        match request {
            StoreRequest::Certificate(record) => {
                self.certificate = Some(record);
                self.agreement = Agreement::default();
                let journal = self.journal.borrow_mut();
                journal.hold_certificate(record.hash);
                let reading_seq = journal.next_reading();
                journal.event(time_us, EventKind::CertificateStored { hash: record.hash, reading_seq });
            }
            StoreRequest::Settings(record) => {
                self.settings = record;
                self.standing.remove(Trip::SettingsUnreadable);
                self.interlock.set_times(times(&record));
                self.acquisition.set_window(record.window_ns);
                self.lamp.settings = record.lamp;
                self.journal.borrow_mut().event(time_us, EventKind::SettingsStored);
            }
        }
        self.link.answer(ToHost::Done(asked));
    }

    fn take_messages(&mut self, now_us: u64, received: &[u8]) {
        if received.is_empty() {
            return;
        }
        // The link is lent out of `self` while its messages are carried out.
        let mut link = core::mem::take(&mut self.link);
        link.receive(received, now_us, |link, message| self.carry_out(link, now_us, message));
        self.link = link;
    }

    fn carry_out(&mut self, link: &mut Link, now_us: u64, message: ToDevice) {
        match message {
            ToDevice::Hello(hello) => self.greet(link, now_us, hello),
            ToDevice::Ack(ack) => self.journal.borrow_mut().acknowledge(&ack),
            ToDevice::Rewind => self.journal.borrow_mut().rewind(),
            ToDevice::Ask(request) => link.answer(match request {
                Request::ReadCertificate => ToHost::Certificate(self.certificate),
                Request::ReadSettings => ToHost::Settings(self.settings),
                request => ToHost::Refused { request, why: Refusal::Unsupported },
            }),
            ToDevice::WriteCertificate(record) => self.want_store(link, StoreRequest::Certificate(record)),
            ToDevice::WriteSettings(record) => self.want_store(link, StoreRequest::Settings(record)),
            ToDevice::Lamp(settings) => {
                let wanted = SettingsRecord { lamp: settings, ..SettingsRecord::default() };
                link.answer(if wanted.fault().is_some() {
                    ToHost::Refused { request: Request::Lamp, why: Refusal::OutOfRange }
                } else {
                    // A new chip length begins the sequence anew.
                    self.lamp.running &= self.lamp.settings == settings;
                    self.lamp.settings = settings;
                    ToHost::Done(Request::Lamp)
                });
            }
            _ => {}
        }
    }

    fn greet(&mut self, link: &mut Link, now_us: u64, hello: HostHello) {
        let journal = self.journal.borrow_mut();
        if hello.protocol == PROTOCOL_VERSION {
            journal.rewind();
        }
        link.answer(ToHost::Hello(ringvolt_protocol::Hello {
            protocol: PROTOCOL_VERSION,
            device: self.boot.device,
            kind: self.boot.kind,
            firmware: FIRMWARE,
            epoch: self.boot.epoch,
            reset_cause: self.boot.reset_cause,
            time_us: now_us,
            certificate: self.certificate.map_or(CertificateHash::NONE, |certificate| certificate.hash),
            first: journal.first(),
            next: journal.next(),
        }));
    }

    fn want_store(&mut self, link: &mut Link, request: StoreRequest) {
        let refusal = if self.interlock.is_given() {
            Some(Refusal::PermitGiven)
        } else if self.store.is_some() {
            Some(Refusal::Busy)
        } else {
            match &request {
                StoreRequest::Certificate(record) if record.device != self.boot.device => Some(Refusal::OtherDevice),
                // All zero is how "no certificate" is told.
                StoreRequest::Certificate(record) if record.hash == CertificateHash::NONE => Some(Refusal::OutOfRange),
                StoreRequest::Settings(record) if record.fault().is_some() => Some(Refusal::OutOfRange),
                _ => None,
            }
        };
        match refusal {
            Some(why) => link.answer(ToHost::Refused { request: request_of(&request), why }),
            None => self.store = Some(request),
        }
    }

    /// Hands a store request to the shell, once, and only while the permit is withdrawn.
    fn ask_store(&mut self) -> Option<StoreRequest> {
        if self.store_asked || self.interlock.is_given() {
            return None;
        }
        self.store_asked = self.store.is_some();
        self.store
    }

    fn report(&mut self, now_us: u64, inputs: &Inputs<'_>) {
        let contacts = self.lines.contacts();
        let trusted = self.certificate.is_some()
            && [&self.sense, &self.cross]
                .iter()
                .all(|watch| !(watch.is_silent() || watch.is_over_range() || watch.is_frozen()))
            && self.agreement.trips() == TripSet::EMPTY;
        let (sense_mv, cross_mv) = self.agreement.latest_mv().filter(|_| trusted).unzip();
        let below = |mv: Option<i32>| mv.is_some_and(|mv| mv.abs() < LIVE_MV);
        let dead = below(sense_mv) && below(cross_mv) && contacts.contactors_released && !self.interlock.is_given();
        self.status = Status {
            time_us: now_us,
            contacts,
            permit: self.interlock.permit_state(contacts),
            latched: self.interlock.latched(),
            present: self.interlock.present(),
            uncalibrated: self.certificate.is_none(),
            hv_present: !dead,
            sense_mv,
            cross_mv,
            comparator: inputs.optional.comparator,
            idle_per_mille: inputs.idle_per_mille.or(self.status.idle_per_mille),
            damaged_frames: self.link.damaged(),
        };
        let status = &self.status;
        self.link.fill(now_us, self.journal.borrow_mut(), || *status);
    }

    /// The LED: steady while the permit is given, a blink a second while waiting, four a second with a latched trip.
    fn led(&self, now_us: u64) -> bool {
        if self.interlock.is_given() {
            return true;
        }
        // Powers of two near a quarter and a full second: a shift instead of a division in every poll.
        let shift = if self.interlock.latched() == TripSet::EMPTY { 19 } else { 17 };
        (now_us >> shift) & 1 == 0
    }
}

fn over_range(min: i16, max: i16) -> bool {
    let end = crate::channel::SCALE_END;
    max >= end || min <= -end
}

fn times(settings: &SettingsRecord) -> InterlockTimes {
    InterlockTimes::new(u32::from(settings.discrepancy_ms) * 1_000, u32::from(settings.contactor_ms) * 1_000)
}

const fn request_of(request: &StoreRequest) -> Request {
    match request {
        StoreRequest::Certificate(_) => Request::WriteCertificate,
        StoreRequest::Settings(_) => Request::WriteSettings,
    }
}

/// Levels with everything closed and released, for tests and shells that begin.
pub const AT_REST: Contacts =
    Contacts { loop_a_closed: true, loop_b_closed: true, contactors_released: true, button_pressed: false };

#[cfg(test)]
mod tests;
