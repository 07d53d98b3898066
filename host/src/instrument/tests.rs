//! A meter played by a thread, over TCP and over a pseudo-terminal.

use std::{
    io::{BufRead, BufReader, Write},
    net::{TcpListener, TcpStream},
    os::fd::AsFd,
    thread,
    time::Duration,
};

use super::*;

/// Serves one connection: every command is answered by `answer`, an empty answer is none.
fn meter_on(answer: impl Fn(&str) -> Vec<u8> + Send + 'static) -> Meter {
    let listener = TcpListener::bind("127.0.0.1:0").unwrap();
    let address = format!("tcp:{}", listener.local_addr().unwrap());
    thread::spawn(move || {
        let (stream, _) = listener.accept().unwrap();
        serve(stream, answer);
    });
    Meter::open(&address.parse().unwrap(), Duration::from_millis(400)).unwrap()
}

fn serve(stream: TcpStream, answer: impl Fn(&str) -> Vec<u8>) {
    let mut out = stream.try_clone().unwrap();
    for line in BufReader::new(stream).lines().map_while(Result::ok) {
        if out.write_all(&answer(&line)).is_err() {
            return;
        }
    }
}

#[test]
fn a_meter_tells_who_it_is_and_what_it_reads() {
    let mut meter = meter_on(|command| match command {
        "*IDN?" => b"Invented,Meter,1,0\n".to_vec(),
        "MEAS:VOLT:DC?" => b"+2.19987000E+00\r\n".to_vec(),
        "READ?" => b"-1.5\n".to_vec(),
        _ => Vec::new(),
    });
    assert_eq!(meter.identity().unwrap(), "Invented,Meter,1,0");
    assert_eq!(meter.read_volts(Question::Measure).unwrap(), 2.19987);
    assert_eq!(meter.read_volts(Question::Read).unwrap(), -1.5);
}

#[test]
fn silence_is_told_and_a_late_answer_is_not_taken_for_the_next() {
    // The first answer comes after the timeout, while nobody waits for it any more.
    let mut meter = meter_on(|command| match command {
        "*IDN?" => {
            thread::sleep(Duration::from_millis(450));
            b"999\n".to_vec()
        }
        _ => b"2.5\n".to_vec(),
    });
    let error = meter.identity().unwrap_err();
    assert!(matches!(error, MeterError::Silent { .. }) && error.to_string().contains("*IDN?"), "{error}");
    thread::sleep(Duration::from_millis(200));
    assert_eq!(meter.read_volts(Question::Read).unwrap(), 2.5);
}

#[test]
fn answers_that_are_no_reading_are_told() {
    let replies: [(&[u8], &str); 7] = [
        (b"9.90000000E+37\n", "overload"),
        (b"-9.9E37\n", "overload"),
        (b"9.91E37\n", "not a number"),
        (b"nan\n", "not a number"),
        (b"1.0,2.0\n", "single number"),
        (b"\n", "single number"),
        (&[b'7'; 300], "does not end"),
    ];
    for (reply, wanted) in replies {
        let error = meter_on(move |_| reply.to_vec()).read_volts(Question::Measure).unwrap_err().to_string();
        assert!(error.contains(wanted) && !error.contains('\n'), "{error}");
    }
}

#[test]
fn a_reply_that_trickles_past_the_limit_ends() {
    let listener = TcpListener::bind("127.0.0.1:0").unwrap();
    let address = format!("tcp:{}", listener.local_addr().unwrap());
    thread::spawn(move || {
        let (mut stream, _) = listener.accept().unwrap();
        while stream.write_all(b"1").is_ok() {
            thread::sleep(Duration::from_millis(20));
        }
    });
    let mut meter = Meter::open(&address.parse().unwrap(), Duration::from_millis(200)).unwrap();
    assert!(meter.read_volts(Question::Read).is_err());
}

#[test]
fn a_meter_that_hangs_up_is_told_as_gone() {
    let listener = TcpListener::bind("127.0.0.1:0").unwrap();
    let address = format!("tcp:{}", listener.local_addr().unwrap());
    thread::spawn(move || drop(listener.accept().unwrap()));
    let mut meter = Meter::open(&address.parse().unwrap(), Duration::from_millis(400)).unwrap();
    assert!(matches!(meter.identity(), Err(MeterError::Lost { .. })));
}

#[test]
fn nobody_there_is_told() {
    let free = TcpListener::bind("127.0.0.1:0").unwrap().local_addr().unwrap();
    for address in [format!("tcp:{free}"), "serial:no-such-line".to_owned(), "tcp:no host:5025".to_owned()] {
        let error = Meter::open(&address.parse().unwrap(), Duration::from_millis(200)).unwrap_err();
        assert!(error.to_string().starts_with("cannot reach a meter at"), "{error}");
    }
}

#[test]
fn addresses_are_read_and_refused() {
    assert_eq!("serial:ttyX@115200".parse::<Address>().unwrap().to_string(), "serial:ttyX@115200");
    assert_eq!("serial:ttyX".parse::<Address>().unwrap().to_string(), "serial:ttyX@9600");
    for wrong in
        ["", "tcp:", "tcp:host", "tcp::5025", "tcp:host:0", "tcp:host:99999", "serial:", "serial:x@fast", "meter"]
    {
        assert!(matches!(wrong.parse::<Address>(), Err(MeterError::Address(_))), "{wrong}");
    }
}

#[test]
fn a_meter_answers_over_a_serial_line() {
    use rustix::pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt};
    let far = openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY).unwrap();
    grantpt(far.as_fd()).unwrap();
    unlockpt(far.as_fd()).unwrap();
    let near = ptsname(far.as_fd(), Vec::new()).unwrap().into_string().unwrap();
    let address = format!("serial:{near}@19200").parse().unwrap();
    let mut meter = Meter::open(&address, Duration::from_millis(1000)).unwrap();
    thread::spawn(move || {
        let mut out = std::fs::File::from(far);
        for _ in BufReader::new(out.try_clone().unwrap()).lines().map_while(Result::ok) {
            if out.write_all(b"0.00012\n").is_err() {
                return;
            }
        }
    });
    assert_eq!(meter.read_volts(Question::Measure).unwrap(), 0.00012);
}
