//! Addresses, sockets, serial lines and the exchange log.

use proptest::prelude::*;
use ringstep::transport::{
    Address, BlockNote, CollectedExchanges, Direction, ExchangeLog, LinkErrorKind, Opener, Port, SerialOptions,
};
use std::{sync::Arc, time::Duration};
use tokio::{
    io::{AsyncReadExt, AsyncWriteExt},
    net::TcpListener,
    time::Instant,
};

fn soon() -> Instant {
    Instant::now() + Duration::from_secs(2)
}

fn port(address: &str) -> Port {
    Port::new(address, SerialOptions::default()).unwrap()
}

/// Forms of IVI VPP-4.3, section 4.3.1.1 (resource names).
#[test]
fn addresses_in_the_open_syntax_are_understood() {
    let socket = |host: &str, port| Address::Socket { host: host.to_owned(), port };
    let serial = |device: &str| Address::Serial { device: device.to_owned() };
    for (text, expected) in [
        ("TCPIP::192.0.2.7::5025::SOCKET", socket("192.0.2.7", 5025)),
        ("TCPIP0::scope.example::5025::SOCKET", socket("scope.example", 5025)),
        ("tcpip::host::1::socket", socket("host", 1)),
        ("TCPIP::[2001:db8::1]::5025::SOCKET", socket("2001:db8::1", 5025)),
        ("ASRL/dev/ttyUSB0::INSTR", serial("/dev/ttyUSB0")),
        ("ASRL/dev/pts/3::INSTR", serial("/dev/pts/3")),
        ("ASRLCOM3::INSTR", serial("COM3")),
        ("TCPIP::host::hislip0::INSTR", Address::Other { kind: "HiSLIP" }),
        ("TCPIP::host::inst0::INSTR", Address::Other { kind: "VXI-11" }),
        ("TCPIP::host::INSTR", Address::Other { kind: "VXI-11" }),
        ("USB::0x1234::0x5678::SERIAL::INSTR", Address::Other { kind: "USB instruments" }),
        ("GPIB0::7::INSTR", Address::Other { kind: "GPIB" }),
    ] {
        assert_eq!(text.parse::<Address>().unwrap(), expected, "{text}");
    }
}

#[test]
fn what_is_no_address_is_refused_with_the_reason() {
    for (text, reason) in [
        ("", "begins with none"),
        ("192.0.2.7:5025", "begins with none"),
        ("TCPIP::host::70000::SOCKET", "not a port"),
        ("TCPIP::host::0::SOCKET", "not a port"),
        ("TCPIP::host::SOCKET", "not a port"),
        ("TCPIP::::5025::SOCKET", "host is missing"),
        ("TCPIP::[2001:db8::1::5025::SOCKET", "not closed"),
        ("TCPIPx::host::5025::SOCKET", "not a board number"),
        ("TCPIP::host::5025::RAW", "instead of `SOCKET`"),
        ("ASRL::INSTR", "no device"),
        ("ASRL1::INSTR", "named by their device"),
        ("ASRL/dev/ttyUSB0::SOCKET", "`INSTR` was expected"),
        (" ASRL/dev/ttyUSB0::INSTR", "spaces"),
        ("GPIB0", "nothing stands after"),
    ] {
        let error = text.parse::<Address>().unwrap_err().to_string();
        assert!(error.contains(reason), "{text}: {error}");
    }
}

proptest! {
    #[test]
    fn a_parsed_address_reads_back_as_itself(host in "[a-z][a-z0-9.-]{0,20}", port in 1_u16..) {
        let address = Address::Socket { host, port };
        prop_assert_eq!(address.to_string().parse::<Address>().unwrap(), address);
    }

    #[test]
    fn no_text_upsets_the_parser(text in "\\PC{0,40}") {
        let _ = text.parse::<Address>();
        let _ = format!("TCPIP::{text}").parse::<Address>();
        let _ = format!("ASRL{text}").parse::<Address>();
    }
}

#[cfg(not(feature = "visa"))]
#[tokio::test]
async fn a_kind_that_this_build_does_not_reach_is_refused_by_name() {
    let error = port("TCPIP::host::hislip0::INSTR").open(soon()).await.err().unwrap();
    assert_eq!(error.kind, LinkErrorKind::NotSupported);
    assert!(error.to_string().contains("HiSLIP"), "{error}");
}

/// No VISA library is installed where the tests run.
#[cfg(feature = "visa")]
#[tokio::test]
async fn a_missing_visa_library_is_an_error_and_no_panic() {
    for address in ["GPIB0::7::INSTR", "TCPIP::host::hislip0::INSTR"] {
        let error = port(address).open(soon()).await.err().unwrap();
        assert_eq!(error.kind, LinkErrorKind::NotSupported);
        assert!(error.to_string().contains("VISA library"), "{error}");
    }
}

#[tokio::test]
async fn a_socket_carries_bytes_both_ways_and_tells_when_it_is_closed() {
    let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
    let port = port(&format!("TCPIP::127.0.0.1::{}::SOCKET", listener.local_addr().unwrap().port()));
    let peer = tokio::spawn(async move {
        let (mut stream, _) = listener.accept().await.unwrap();
        let mut question = [0; 6];
        stream.read_exact(&mut question).await.unwrap();
        stream.write_all(b"answer\n").await.unwrap();
        question
    });
    let mut link = port.open(soon()).await.unwrap();
    link.write(b"*IDN?\n", soon()).await.unwrap();
    let mut answer = Vec::new();
    while !answer.ends_with(b"\n") {
        let chunk = link.read(soon()).await.unwrap();
        assert!(!chunk.end, "a stream never signals the end of a message");
        answer.extend(chunk.bytes);
    }
    assert_eq!((answer.as_slice(), peer.await.unwrap()), (&b"answer\n"[..], *b"*IDN?\n"));
    assert_eq!(link.read(soon()).await.unwrap_err().kind, LinkErrorKind::Closed);
}

#[tokio::test]
async fn a_silent_socket_ends_at_the_deadline() {
    let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
    let port = port(&format!("TCPIP::127.0.0.1::{}::SOCKET", listener.local_addr().unwrap().port()));
    let mut link = port.open(soon()).await.unwrap();
    let begun = Instant::now();
    let error = link.read(begun + Duration::from_millis(50)).await.unwrap_err();
    assert_eq!(error.kind, LinkErrorKind::Timeout);
    assert!(begun.elapsed() < Duration::from_millis(500));
    assert!(link.take_arrived().await.unwrap().is_empty());
}

#[tokio::test]
async fn a_port_without_a_listener_refuses() {
    let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
    let address = format!("TCPIP::127.0.0.1::{}::SOCKET", listener.local_addr().unwrap().port());
    drop(listener);
    assert_eq!(port(&address).open(soon()).await.err().unwrap().kind, LinkErrorKind::Refused);
}

#[tokio::test]
async fn a_device_that_is_not_there_is_named() {
    let error = port("ASRL/dev/ttyNorrsund9::INSTR").open(soon()).await.err().unwrap();
    assert_eq!(error.kind, LinkErrorKind::NotFound, "{error}");
    assert!(error.to_string().contains("/dev/ttyNorrsund9"), "{error}");
}

#[tokio::test]
async fn a_pseudo_terminal_is_a_serial_line() {
    // The other end is tokio-serial's own pair: an implementation that is not ours.
    let (mut master, slave) = tokio_serial::SerialStream::pair().unwrap();
    let device = tokio_serial::SerialPort::name(&slave).unwrap();
    drop(slave);
    let mut link = port(&format!("ASRL{device}::INSTR")).open(soon()).await.unwrap();
    let second = port(&format!("ASRL{device}::INSTR")).open(soon()).await.err().unwrap();
    assert_eq!(second.kind, LinkErrorKind::Denied, "{second}");
    link.write(b"INPut?\n", soon()).await.unwrap();
    let mut question = [0; 7];
    master.read_exact(&mut question).await.unwrap();
    assert_eq!(&question, b"INPut?\n");
    master.write_all(b"0\n").await.unwrap();
    assert_eq!(link.read(soon()).await.unwrap().bytes, b"0\n");
    let error = link.read(Instant::now() + Duration::from_millis(50)).await.unwrap_err();
    assert_eq!(error.kind, LinkErrorKind::Timeout);
    link.close().await.unwrap();
}

/// Check value of CRC-32/ISO-HDLC in the catalogue of parametrised CRC algorithms: "123456789" gives cbf43926 [M].
#[test]
fn a_block_is_logged_by_header_length_and_checksum() {
    let collected = Arc::new(CollectedExchanges::default());
    let log = ExchangeLog::new(Instant::now(), collected.clone());
    log.block("scope", BlockNote::new(b"#19", b"123456789"));
    log.message("scope", Direction::Received, b"caf\xE9\x01\r\n");
    let entries = collected.take();
    let note = entries[0].block.as_ref().unwrap();
    assert_eq!((note.header.as_str(), note.length, note.crc32.as_str()), ("#19", 9, "cbf43926"));
    assert_eq!(entries[1].text, "caf\\xe9\\x01");
    let line = serde_json::to_string(&entries[1]).unwrap();
    assert!(!line.contains('\n') && !line.contains("block"), "{line}");
    assert!(collected.take().is_empty());
}
