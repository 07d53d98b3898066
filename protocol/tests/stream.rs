//! Whatever happens to a stream, what arrives is what was sent, in order, or a counted error.

use proptest::{collection::vec, prelude::*};
use ringvolt_protocol::{
    Ack, CertificateHash, Decoder, Event, EventKind, Gap, LampSettings, MAX_FRAME, Reading, ReadingFlags, Request,
    SettingsRecord, Slow, Status, Stream, Strobe, ToDevice, ToHost, Trip, TripSet, WindowCodes, encode,
};

fn codes() -> impl Strategy<Value = WindowCodes> {
    any::<(i32, i16, i16, u8)>().prop_map(|(sum, min, max, count)| WindowCodes { sum, min, max, count })
}

fn reading() -> impl Strategy<Value = ToHost> {
    (any::<(u32, u64, u16, u16, [u8; 8])>(), codes(), codes()).prop_map(|(plain, sense, cross)| {
        let (seq, time_us, duration_us, flags, hash) = plain;
        ToHost::Reading(Reading {
            seq,
            time_us,
            duration_us,
            sense,
            cross,
            flags: ReadingFlags(flags),
            certificate: CertificateHash(hash),
        })
    })
}

fn tripped() -> impl Strategy<Value = ToHost> {
    (any::<(u32, u64, Option<i32>, Option<i32>)>(), 0..Trip::ALL.len()).prop_map(|(plain, trip)| {
        let (seq, time_us, sense_mv, cross_mv) = plain;
        ToHost::Event(Event { seq, time_us, kind: EventKind::Tripped { trip: Trip::ALL[trip], sense_mv, cross_mv } })
    })
}

fn to_host() -> impl Strategy<Value = ToHost> {
    prop_oneof![
        4 => reading(),
        2 => tripped(),
        1 => any::<(u32, u64, bool)>().prop_map(|(seq, time_us, rising)| ToHost::Strobe(Strobe { seq, time_us, rising })),
        1 => any::<(u32, u64, Option<i32>, Option<i16>)>().prop_map(|(seq, time_us, beam_na, enclosure_centicelsius)| {
            ToHost::Slow(Slow { seq, time_us, beam_na, enclosure_centicelsius })
        }),
        1 => any::<(u32, u32)>().prop_map(|(first, count)| ToHost::Gap(Gap { stream: Stream::Readings, first, count })),
        1 => any::<(u64, u32, Option<i32>)>().prop_map(|(time_us, trips, sense_mv)| {
            ToHost::Status(Status { time_us, latched: TripSet(trips), sense_mv, ..Status::default() })
        }),
        1 => Just(ToHost::Busy),
        1 => Just(ToHost::Done(Request::Lamp)),
    ]
}

fn to_device() -> impl Strategy<Value = ToDevice> {
    prop_oneof![
        any::<(u32, u32, u32, u32)>()
            .prop_map(|(readings, events, slow, strobes)| { ToDevice::Ack(Ack { readings, events, slow, strobes }) }),
        any::<u32>().prop_map(|token| ToDevice::Echo { token }),
        any::<(bool, u32)>().prop_map(|(on, chip_us)| ToDevice::Lamp(LampSettings { on, chip_us })),
        any::<(u32, i32)>().prop_map(|(window_ns, limit_mv)| {
            ToDevice::WriteSettings(SettingsRecord { window_ns, limit_mv, ..SettingsRecord::default() })
        }),
        Just(ToDevice::Heartbeat),
    ]
}

fn frame(message: &impl serde::Serialize) -> Vec<u8> {
    let mut frame = [0; MAX_FRAME];
    let length = encode(message, &mut frame).unwrap();
    frame[..length].to_vec()
}

/// What was done to one frame on its way.
#[derive(Clone, Debug)]
enum Harm {
    None,
    Flip { at: usize, bit: u8 },
    Lose { at: usize, count: usize },
    Insert { at: usize, bytes: Vec<u8> },
    Repeat,
    Drop,
    NoiseBefore(Vec<u8>),
}

fn harm() -> impl Strategy<Value = Harm> {
    prop_oneof![
        4 => Just(Harm::None),
        1 => any::<(usize, u8)>().prop_map(|(at, bit)| Harm::Flip { at, bit: bit % 8 }),
        1 => (any::<usize>(), 1usize..40).prop_map(|(at, count)| Harm::Lose { at, count }),
        1 => (any::<usize>(), vec(any::<u8>(), 1..40)).prop_map(|(at, bytes)| Harm::Insert { at, bytes }),
        1 => Just(Harm::Repeat),
        1 => Just(Harm::Drop),
        1 => vec(any::<u8>(), 1..600).prop_map(Harm::NoiseBefore),
    ]
}

fn apply(harm: &Harm, frame: &[u8], stream: &mut Vec<u8>) {
    let mut frame = frame.to_vec();
    match harm {
        Harm::None => {}
        Harm::Flip { at, bit } => {
            let at = at % frame.len();
            frame[at] ^= 1 << bit;
        }
        Harm::Lose { at, count } => {
            let at = at % frame.len();
            frame.drain(at..(at + count).min(frame.len()));
        }
        Harm::Insert { at, bytes } => {
            let at = at % frame.len();
            frame.splice(at..at, bytes.iter().copied());
        }
        Harm::Repeat => stream.extend_from_slice(&frame),
        Harm::Drop => frame.clear(),
        Harm::NoiseBefore(bytes) => stream.extend_from_slice(bytes),
    }
    stream.extend_from_slice(&frame);
}

/// Every message of `got` in the order of `sent`; a repeated frame gives its message twice.
fn is_in_order(got: &[ToHost], sent: &[ToHost]) -> bool {
    let mut at = 0;
    got.iter().all(|message| {
        // The same place again is a repeated frame.
        let found = sent[at..].iter().position(|candidate| candidate == message);
        found.inspect(|offset| at += offset).is_some()
    })
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(2_000))]

    #[test]
    fn a_whole_stream_arrives_whole_in_whatever_pieces(messages in vec(to_host(), 1..20)) {
        let stream: Vec<u8> = messages.iter().flat_map(frame).collect();
        let mut decoder = Decoder::new();
        let got: Vec<ToHost> = stream.iter().filter_map(|byte| decoder.push(*byte)).collect();
        prop_assert_eq!(&got, &messages);
        prop_assert_eq!(decoder.counts().damaged, 0);
        prop_assert_eq!(decoder.counts().messages as usize, messages.len());
    }

    #[test]
    fn what_arrives_of_a_harmed_stream_was_sent_and_every_loss_is_counted(
        sent in vec((to_host(), harm()), 1..20),
    ) {
        let mut stream = Vec::new();
        let mut unharmed = 0;
        for (index, (message, harm)) in sent.iter().enumerate() {
            apply(harm, &frame(message), &mut stream);
            // A frame whose own bytes and whose neighbour before are whole must arrive.
            let neighbour_ends = index == 0 || matches!(sent[index - 1].1, Harm::None | Harm::Repeat);
            unharmed += usize::from(matches!(harm, Harm::None) && neighbour_ends);
        }
        let mut decoder = Decoder::new();
        let got: Vec<ToHost> = stream.iter().filter_map(|byte| decoder.push(*byte)).collect();
        let messages: Vec<ToHost> = sent.iter().map(|(message, _)| *message).collect();
        prop_assert!(is_in_order(&got, &messages), "{got:?} of {messages:?}");
        prop_assert!(got.len() >= unharmed, "{} of {unharmed}", got.len());
        let zeros = stream.iter().filter(|byte| **byte == 0).count();
        prop_assert!(got.len() + decoder.counts().damaged as usize <= zeros);
        prop_assert_eq!(got.len(), decoder.counts().messages as usize);
    }

    #[test]
    fn noise_alone_gives_nothing(noise in vec(any::<u8>(), 0..4_000)) {
        let mut decoder = Decoder::new();
        prop_assert!(noise.iter().all(|byte| decoder.push::<ToHost>(*byte).is_none()));
        let mut decoder = Decoder::new();
        prop_assert!(noise.iter().all(|byte| decoder.push::<ToDevice>(*byte).is_none()));
    }

    #[test]
    fn frames_cut_by_a_zero_anywhere_are_damaged_and_counted(message in to_host(), at: usize) {
        let whole = frame(&message);
        let at = 1 + at % (whole.len() - 2);
        let mut decoder = Decoder::new();
        let cut = whole[..at].iter().chain([&0]).chain(&whole);
        let got: Vec<ToHost> = cut.filter_map(|byte| decoder.push(*byte)).collect();
        prop_assert_eq!(got, [message]);
        prop_assert_eq!((decoder.counts().damaged, decoder.counts().damaged_bytes as usize), (1, at));
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(300))]

    /// Every single bit of the frame, not a sample of them.
    #[test]
    fn no_flipped_bit_gives_another_message(message in to_host(), request in to_device()) {
        let (answers, requests) = (frame(&message), frame(&request));
        for bit in 0..answers.len() * 8 {
            let mut harmed = answers.clone();
            harmed[bit / 8] ^= 1 << (bit % 8);
            harmed.push(0);
            let mut decoder = Decoder::new();
            let got: Vec<ToHost> = harmed.iter().filter_map(|byte| decoder.push(*byte)).collect();
            prop_assert!(got.is_empty(), "bit {} of {:?} gave {:?}", bit, message, got);
            prop_assert!(decoder.counts().damaged > 0);
        }
        for bit in 0..requests.len() * 8 {
            let mut harmed = requests.clone();
            harmed[bit / 8] ^= 1 << (bit % 8);
            harmed.push(0);
            let mut decoder = Decoder::new();
            let got: Vec<ToDevice> = harmed.iter().filter_map(|byte| decoder.push(*byte)).collect();
            prop_assert!(got.is_empty(), "bit {} of {:?} gave {:?}", bit, request, got);
        }
    }
}
