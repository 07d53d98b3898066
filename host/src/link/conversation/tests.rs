use ringvolt_protocol::{DeviceKind, EchoReply, ResetCause};

use super::*;

fn hello(protocol: u16, epoch: u32, first: Ack) -> Hello {
    Hello {
        protocol,
        device: [7; 8],
        kind: DeviceKind::Board,
        firmware: [0, 1, 0],
        epoch,
        reset_cause: ResetCause::PowerOn,
        time_us: 5,
        certificate: Default::default(),
        first,
        next: first,
    }
}

fn frame(message: ToHost) -> Vec<u8> {
    let mut frame = [0; MAX_FRAME];
    let length = encode(&message, &mut frame).unwrap();
    frame[..length].to_vec()
}

fn reading(seq: u32) -> ToHost {
    ToHost::Reading(Reading { seq, ..Reading::default() })
}

fn hear(conversation: &mut Conversation, messages: &[ToHost]) -> Vec<Heard> {
    let mut heard = Vec::new();
    for message in messages {
        conversation.receive(&frame(*message), 1, &mut heard);
    }
    heard
}

fn said(conversation: &mut Conversation) -> Vec<ToDevice> {
    let mut decoder = Decoder::new();
    let bytes = conversation.outgoing().to_vec();
    conversation.written(bytes.len());
    bytes.iter().filter_map(|byte| decoder.push(*byte)).collect()
}

fn seqs(heard: &[Heard]) -> Vec<u32> {
    heard
        .iter()
        .filter_map(|heard| if let Heard::Reading(reading) = heard { Some(reading.seq) } else { None })
        .collect()
}

fn talking() -> Conversation {
    let mut conversation = Conversation::new(1, 0);
    hear(&mut conversation, &[ToHost::Hello(hello(PROTOCOL_VERSION, 1, Ack::default()))]);
    said(&mut conversation);
    conversation
}

#[test]
fn the_hello_is_repeated_until_it_is_answered() {
    let mut conversation = Conversation::new(1, 0);
    for ms in 0..1_600 {
        conversation.tick(ms * MS);
    }
    let hellos = said(&mut conversation).iter().filter(|message| matches!(message, ToDevice::Hello(_))).count();
    assert_eq!(hellos, 4);
    hear(&mut conversation, &[ToHost::Hello(hello(PROTOCOL_VERSION, 1, Ack::default()))]);
    conversation.tick(9_000 * MS);
    assert!(!said(&mut conversation).iter().any(|message| matches!(message, ToDevice::Hello(_))));
}

#[test]
fn another_version_ends_it() {
    let mut conversation = Conversation::new(1, 0);
    let heard = hear(&mut conversation, &[ToHost::Hello(hello(PROTOCOL_VERSION + 1, 1, Ack::default())), reading(0)]);
    assert_eq!(heard, []);
    assert_eq!(conversation.phase(), Phase::WrongVersion(PROTOCOL_VERSION + 1));
}

#[test]
fn nothing_is_taken_before_the_hello() {
    let mut conversation = Conversation::new(1, 0);
    assert_eq!(hear(&mut conversation, &[reading(0), reading(1)]), []);
}

#[test]
fn a_missing_reading_is_asked_for_again_and_doubles_are_passed_over() {
    let mut conversation = talking();
    let heard = hear(&mut conversation, &[reading(0), reading(1), reading(3), reading(4)]);
    assert_eq!(seqs(&heard), [0, 1]);
    assert_eq!(said(&mut conversation), [ToDevice::Rewind]);
    let heard = hear(&mut conversation, &[reading(0), reading(1), reading(2), reading(3), reading(4)]);
    assert_eq!(seqs(&heard), [2, 3, 4]);
}

#[test]
fn a_gap_is_handed_on_for_the_part_that_is_missing_here() {
    let mut conversation = talking();
    hear(&mut conversation, &[reading(0), reading(1)]);
    let gap = |first, count| ToHost::Gap(Gap { stream: Stream::Readings, first, count });
    let heard = hear(&mut conversation, &[gap(0, 10), reading(10)]);
    assert_eq!(heard[0], Heard::Gap(Gap { stream: Stream::Readings, first: 2, count: 8 }));
    assert_eq!(seqs(&heard), [10]);
    // Old news, and a gap that begins beyond what is expected, change nothing.
    assert_eq!(hear(&mut conversation, &[gap(0, 5), gap(50, 5), gap(u32::MAX, 5)]), []);
    assert_eq!(conversation.expected().readings, 11);
}

#[test]
fn the_same_epoch_goes_on_and_a_new_one_starts_anew() {
    let mut conversation = talking();
    hear(&mut conversation, &[reading(0), reading(1)]);
    conversation.reopened(10);
    let heard =
        hear(&mut conversation, &[ToHost::Hello(hello(PROTOCOL_VERSION, 1, Ack::default())), reading(1), reading(2)]);
    assert!(matches!(heard[0], Heard::Hello { resumed: true, .. }));
    assert_eq!(seqs(&heard), [2]);
    conversation.reopened(20);
    let heard = hear(&mut conversation, &[ToHost::Hello(hello(PROTOCOL_VERSION, 2, Ack::default())), reading(0)]);
    assert!(matches!(heard[0], Heard::Hello { resumed: false, .. }));
    assert_eq!(seqs(&heard), [0]);
}

#[test]
fn a_clock_exchange_is_matched_by_its_token() {
    let mut conversation = talking();
    conversation.tick(1_000 * MS);
    let Some(ToDevice::Echo { token }) = said(&mut conversation).pop() else { panic!("no question") };
    let reply = |token| ToHost::EchoReply(EchoReply { token, received_us: 10, sent_us: 12 });
    let mut heard = Vec::new();
    conversation.receive(&frame(reply(token + 5)), 1_001 * MS, &mut heard);
    assert_eq!(heard, []);
    conversation.receive(&frame(reply(token)), 1_002 * MS, &mut heard);
    conversation.receive(&frame(reply(token)), 1_003 * MS, &mut heard);
    let echo = Echo { asked_mono_ns: 1_000 * MS, answered_mono_ns: 1_002 * MS, received_us: 10, sent_us: 12 };
    assert_eq!(heard, [Heard::Echo(echo)]);
}

#[test]
fn noise_is_counted_and_does_no_harm() {
    let mut conversation = talking();
    let mut heard = Vec::new();
    conversation.receive(&[1, 2, 3, 0, 9, 9, 0], 1, &mut heard);
    conversation.receive(&frame(reading(0)), 1, &mut heard);
    assert_eq!(seqs(&heard), [0]);
    assert_eq!(conversation.counts().damaged, 2);
}
