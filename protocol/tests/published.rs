//! The framing against what others have published.

use ringvolt_protocol::{Decoder, MAX_FRAME, ToHost, encode};
use serde::{Serialize, de::DeserializeOwned};

/// CRC-32 bit by bit, apart from the crate that the framing uses.
fn crc32(bytes: &[u8]) -> u32 {
    !bytes.iter().fold(!0u32, |crc, byte| {
        (0..8).fold(crc ^ u32::from(*byte), |crc, _| if crc & 1 == 1 { (crc >> 1) ^ 0xedb8_8320 } else { crc >> 1 })
    })
}

/// COBS by the description in the paper, apart from the crate that the framing uses.
fn unstuff(frame: &[u8]) -> Vec<u8> {
    let mut content = Vec::new();
    let mut rest = frame;
    while let Some((code, tail)) = rest.split_first() {
        let (block, next) = tail.split_at(usize::from(*code) - 1);
        content.extend_from_slice(block);
        rest = next;
        if *code != 0xff && !rest.is_empty() {
            content.push(0);
        }
    }
    content
}

/// Check value of CRC-32/ISO-HDLC for "123456789": ITU-T V.42 and the common catalogues of CRCs.
#[test]
fn the_crc_has_its_published_check_value() {
    assert_eq!(crc32(b"123456789"), 0xcbf4_3926);
    let ours = crc::Crc::<u32, crc::Table<1>>::new(&crc::CRC_32_ISO_HDLC);
    assert_eq!(ours.checksum(b"123456789"), 0xcbf4_3926);
}

/// S. Cheshire and M. Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Transactions on Networking 7 (1999): the
/// example of the text (the head of an IP packet), and the rules for one zero and for none. Quoted from memory.
#[test]
fn byte_stuffing_gives_the_examples_of_its_paper() {
    let examples: [(&[u8], &[u8]); 3] = [
        (
            &[0x45, 0x00, 0x00, 0x2c, 0x4c, 0x79, 0x00, 0x00, 0x40, 0x06, 0x4f, 0x37],
            &[0x02, 0x45, 0x01, 0x04, 0x2c, 0x4c, 0x79, 0x01, 0x05, 0x40, 0x06, 0x4f, 0x37],
        ),
        (&[0x00], &[0x01, 0x01]),
        (b"Hello", &[0x06, b'H', b'e', b'l', b'l', b'o']),
    ];
    for (content, stuffed) in examples {
        let mut out = [0; 32];
        let length = cobs::encode(content, &mut out);
        assert_eq!(&out[..length], stuffed);
        assert_eq!(unstuff(stuffed), content);
    }
}

/// A frame is COBS of message and CRC, low byte first, taken apart here by other code than what put it together.
#[test]
fn a_frame_is_what_its_description_says() {
    let mut frame = [0; MAX_FRAME];
    let length = encode(&ToHost::Busy, &mut frame).unwrap();
    let (zero, stuffed) = frame[..length].split_last().unwrap();
    assert_eq!(*zero, 0);
    assert!(!stuffed.contains(&0));
    let content = unstuff(stuffed);
    let (body, crc) = content.split_at(content.len() - 4);
    assert_eq!(body, [12]);
    assert_eq!(crc, crc32(body).to_le_bytes());
}

fn passes<M: Serialize + DeserializeOwned + PartialEq + std::fmt::Debug>(message: M, frame_length: usize) {
    let mut frame = [0; MAX_FRAME];
    let length = encode(&message, &mut frame).unwrap();
    assert_eq!(length, frame_length);
    let mut decoder = Decoder::new();
    // Twice, so that what the first leaves behind would show.
    for _ in 0..2 {
        let (last, before) = frame[..length].split_last().unwrap();
        assert!(before.iter().all(|byte| decoder.push::<M>(*byte).is_none()));
        assert_eq!(decoder.push::<M>(*last).as_ref(), Some(&message));
    }
    assert_eq!(decoder.counts().damaged, 0);
}

/// Sizes at which packets of 64 bytes and their multiples begin and end, and the largest of all.
#[test]
fn frames_of_awkward_sizes_pass() {
    for fill in [0u8, 1, 0x7f, 0xff] {
        let block = [fill; 32];
        passes((block, [fill; 25]), 63);
        passes((block, [fill; 26]), 64);
        passes((block, [fill; 27]), 65);
        passes((block, block, block, [fill; 25]), 127);
        passes((block, block, block, [fill; 26]), 128);
        passes((block, block, block, [fill; 27]), 129);
        passes((block, block, block, block, block, block, (block, [fill; 25])), 255);
    }
}

#[test]
fn an_overlong_frame_is_thrown_away_whole_and_the_next_one_is_taken() {
    let mut frame = [0; MAX_FRAME];
    let length = encode(&ToHost::Busy, &mut frame).unwrap();
    for junk in [257, 300, 1_000, 5_000] {
        let mut decoder = Decoder::new();
        // The tail of the junk is a whole good frame but for its beginning: it must not pass for one.
        let stream = std::iter::repeat_n(0x55, junk).chain(frame[..length].iter().copied());
        assert!(stream.map(|byte| decoder.push::<ToHost>(byte)).all(|message| message.is_none()));
        assert_eq!((decoder.counts().damaged, decoder.counts().damaged_bytes as usize), (1, junk + length - 1));
        let good: Vec<ToHost> = frame[..length].iter().filter_map(|byte| decoder.push(*byte)).collect();
        assert_eq!(good, [ToHost::Busy]);
    }
}

/// postcard passes over what follows a message; the framing does not.
#[test]
fn bytes_left_over_make_a_frame_invalid() {
    let mut frame = [0; MAX_FRAME];
    let length = encode(&(ToHost::Busy, 7u8), &mut frame).unwrap();
    let mut decoder = Decoder::new();
    assert!(frame[..length].iter().all(|byte| decoder.push::<ToHost>(*byte).is_none()));
    assert_eq!(decoder.counts().damaged, 1);
}
