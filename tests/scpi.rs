//! Parsing over bytes, whole and on every split, and sessions that stay in step whatever the other side does.

use proptest::prelude::*;
use ringstep::{
    scpi::{
        ScpiErrorKind, Session, SessionOptions,
        block::{Parsed, parse_block, parse_header},
        response::{NumberError, error_entry, integer, is_word, number, parse_line, quoted},
        status::{EventStatus, StatusByte},
    },
    transport::{
        CollectedExchanges, ExchangeLog,
        scripted::{Act, Scripted},
    },
};
use std::{sync::Arc, time::Duration};
use tokio::time::Instant;

// Worked blocks of IEEE 488.2: 7.7.6 and 8.7.9.

#[test]
fn blocks_of_the_standard_are_parsed() {
    for (bytes, payload, used) in [
        (&b"#15HELLO"[..], &b"HELLO"[..], 8),
        (b"#211X1234567890\n", b"X1234567890", 15),
        (b"#13a\r\n", b"a\r\n", 6),
        (b"#204ABCD", b"ABCD", 8),
        (b"#10", b"", 3),
    ] {
        assert_eq!(parse_block(bytes), Parsed::Complete { value: payload, used }, "{}", bytes.escape_ascii());
    }
}

#[test]
fn what_is_no_definite_block_is_malformed() {
    for bytes in [&b"#0abc\n"[..], b"HELLO", b"#A", b"#2x1", b"#21x", b"##"] {
        assert!(matches!(parse_block(bytes), Parsed::Malformed(_)), "{}", bytes.escape_ascii());
    }
}

proptest! {
    #[test]
    fn a_block_is_incomplete_on_every_split_and_whole_at_its_end(
        payload in prop::collection::vec(any::<u8>(), 0..40),
        zeros in 0_usize..4,
        tail in prop::collection::vec(any::<u8>(), 0..4),
    ) {
        let length = format!("{}{}", "0".repeat(zeros), payload.len());
        let mut bytes = format!("#{}{length}", length.len()).into_bytes();
        bytes.extend(&payload);
        for end in 0..bytes.len() {
            prop_assert_eq!(parse_block(&bytes[..end]), Parsed::Incomplete);
        }
        let used = bytes.len();
        bytes.extend(tail);
        prop_assert_eq!(parse_block(&bytes), Parsed::Complete { value: payload.as_slice(), used });
    }

    #[test]
    fn a_line_is_incomplete_on_every_split(text in "[ -~]{0,40}", carriage in any::<bool>(), tail in "[ -~\n]{0,5}") {
        let bytes = format!("{text}{}\n", if carriage { "\r" } else { "" }).into_bytes();
        for end in 0..bytes.len() {
            prop_assert_eq!(parse_line(&bytes[..end]), Parsed::Incomplete);
        }
        let whole = [bytes.as_slice(), tail.as_bytes()].concat();
        prop_assert_eq!(parse_line(&whole), Parsed::Complete { value: text.as_bytes(), used: bytes.len() });
    }

    #[test]
    fn malformed_stays_malformed_whatever_follows(bytes in prop::collection::vec(any::<u8>(), 0..12), tail in any::<[u8; 4]>()) {
        if let Parsed::Malformed(_) = parse_header(&bytes) {
            let longer = [bytes.as_slice(), &tail].concat();
            prop_assert!(matches!(parse_header(&longer), Parsed::Malformed(_)));
        }
    }

    #[test]
    fn numbers_are_read_as_written(value in -1e30_f64..1e30) {
        prop_assert_eq!(number(&format!("{value:E}")), Ok(value));
        prop_assert_eq!(number(&format!(" {value:+e} ")), Ok(value));
    }

    #[test]
    fn a_quoted_string_gives_back_its_text(text in "[ -~]{0,20}", rest in "[a-z,]{0,4}") {
        let written = format!("\"{}\"{rest}", text.replace('"', "\"\""));
        prop_assert_eq!(quoted(&written), Some((text, rest.as_str())));
    }

    #[test]
    fn no_bytes_upset_a_parser(text in "\\PC{0,30}") {
        let _ = (number(&text).is_ok(), quoted(&text), error_entry(&text), is_word(&text, &text), integer(&text).is_ok());
    }
}

/// SCPI-99, volume 1, 7.2.1.4: infinity 9.9E37, not a number 9.91E37.
#[test]
fn sentinels_are_never_values() {
    for text in ["9.9E37", "+9.90000E+37", "-9.9E37", "9.91E37", "NAN", "INF", "NINF", "9.9e40"] {
        assert!(matches!(number(text), Err(NumberError::Sentinel(_))), "{text}");
    }
    for text in ["", "abc", "0x10", "1,2", "inf0", "1_000", "nanV", "1 2", "E5"] {
        assert!(matches!(number(text), Err(NumberError::NotANumber(_))), "{text}");
    }
    assert_eq!(number("+4.0E+00"), Ok(4.0));
    assert_eq!(integer("1.00E+06"), Ok(1_000_000));
    assert!(integer("1.5").is_err());
}

/// Entries as SCPI-99, volume 2, 21.8 writes them.
#[test]
fn error_entries_are_read_in_every_form_met() {
    for (line, code, message) in [
        ("-113,\"Undefined header\"", -113, "Undefined header"),
        ("-222,\"Data out of range;the \"\"limit\"\" is 1\"", -222, "Data out of range;the \"limit\" is 1"),
        ("0,\"No error\"", 0, "No error"),
        ("+0,\"No error\"", 0, "No error"),
        ("+0", 0, ""),
        ("42,plain words", 42, "plain words"),
    ] {
        let entry = error_entry(line).unwrap();
        assert_eq!((entry.code, entry.message.as_str()), (code, message), "{line}");
    }
    for line in ["", "no number", "-113,\"unclosed", "-113,\"closed\" and more", "1e30,\"x\""] {
        assert_eq!(error_entry(line), None, "{line}");
    }
}

/// Short and long forms of IEEE 488.2 7.6.1 as SCPI-99, volume 1, 6.2.1 writes them.
#[test]
fn words_are_known_in_their_short_and_long_form() {
    for (pattern, answer) in
        [("POSitive", "POS"), ("POSitive", "positive"), ("CHANnel1", "CHAN1"), ("ON", "on"), ("1", "1")]
    {
        assert!(is_word(pattern, answer), "{pattern} {answer}");
    }
    for (pattern, answer) in
        [("POSitive", "POSI"), ("CHANnel1", "CHAN2"), ("CHANnel1", "CHAN"), ("ON", "1"), ("ON", "")]
    {
        assert!(!is_word(pattern, answer), "{pattern} {answer}");
    }
}

/// Bits of IEEE 488.2 11.2.1 and 11.5.1.
#[test]
fn status_bits_stand_where_the_standard_puts_them() {
    assert!(StatusByte(0x44).has(StatusByte::ERROR_QUEUE | StatusByte::MASTER_SUMMARY));
    assert!(!StatusByte(0x44).has(StatusByte::MESSAGE_AVAILABLE));
    assert!(EventStatus(0x21).has(EventStatus::COMMAND_ERROR | EventStatus::OPERATION_COMPLETE));
}

// Sessions on a paused clock: waiting costs nothing, and elapsed times are exact.

const WHO: &str = "NORRSUND,GAUGE,7,1.0";
const REPLY: Duration = Duration::from_millis(500);

async fn session(peer: &Scripted) -> (Session, Arc<CollectedExchanges>) {
    let exchanges = Arc::new(CollectedExchanges::default());
    let log = ExchangeLog::new(Instant::now(), exchanges.clone());
    let options = SessionOptions { reply_timeout: REPLY, stall_timeout: REPLY, ..SessionOptions::new("gauge") };
    let session = Session::open(Arc::new(peer.clone()), options, log).await.unwrap();
    assert_eq!(session.query("*IDN?").await.unwrap(), WHO);
    (session, exchanges)
}

/// A peer that names itself, and leaves the rest to the closure.
fn peer(mut rest: impl FnMut(&str) -> Vec<Act> + Send + 'static) -> Scripted {
    Scripted::new(move |message| match message {
        "*IDN?" => Act::line(WHO),
        other => rest(other),
    })
}

/// A strictly serial instrument: what it is asked while it is busy waits for its turn.
fn serial_peer(mut delay: impl FnMut(&str) -> Duration + Send + 'static) -> Scripted {
    let (mut free, mut enabled) = (None, String::from("0"));
    Scripted::new(move |message| {
        let now = Instant::now();
        let start = free.filter(|free| *free > now).unwrap_or(now);
        let done = start + delay(message);
        free = Some(done);
        match message {
            "*IDN?" => Act::late(done - now, WHO),
            "*OPC?" => Act::late(done - now, "1"),
            "*ESE?" => Act::late(done - now, &enabled),
            set if set.starts_with("*ESE ") => {
                enabled = set[5..].to_owned();
                vec![]
            }
            question if question.ends_with('?') => Act::late(done - now, format!("<{question}>")),
            _ => vec![],
        }
    })
}

#[tokio::test(start_paused = true)]
async fn a_late_answer_is_never_paired_with_the_next_question() {
    let mut first = true;
    let peer = serial_peer(move |message| {
        let slow = message == "SLOW?" && std::mem::take(&mut first);
        Duration::from_millis(if slow { 700 } else { 1 })
    });
    let (session, _) = session(&peer).await;
    assert_eq!(session.query("SLOW?").await.unwrap_err().kind, ScpiErrorKind::NoAnswer);
    assert_eq!(session.query("FAST?").await.unwrap(), "<FAST?>");
    assert_eq!(session.query("SLOW?").await.unwrap(), "<SLOW?>");
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(200))]

    /// Whatever the delays, an answer that is given belongs to its question.
    #[test]
    fn answers_belong_to_their_questions_whatever_the_delays(delays in prop::collection::vec(0_u64..1500, 1..20)) {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().start_paused(true).build().unwrap();
        runtime.block_on(async {
            let mut upcoming = delays.clone().into_iter();
            let peer = serial_peer(move |message| {
                let slow = message.starts_with('Q') || message == "*IDN?" || message == "*ESE?";
                Duration::from_millis(if slow { upcoming.next().unwrap_or(0) } else { 0 })
            });
            let exchanges = Arc::new(CollectedExchanges::default());
            let log = ExchangeLog::new(Instant::now(), exchanges.clone());
            let options = SessionOptions { reply_timeout: REPLY, ..SessionOptions::new("gauge") };
            let session = Session::open(Arc::new(peer.clone()), options, log).await.unwrap();
            let _ = session.query("*IDN?").await;
            for index in 0..30 {
                if let Ok(answer) = session.query(&format!("Q{index}?")).await {
                    assert_eq!(answer, format!("<Q{index}?>"));
                }
            }
            // Once the instrument keeps up, so does the session.
            let mut attempts = 0;
            while session.query("LAST?").await.is_err() {
                attempts += 1;
                assert!(attempts < 100);
            }
        });
    }
}

#[tokio::test(start_paused = true)]
async fn an_exchange_runs_to_its_end_though_its_caller_stopped_waiting() {
    let peer = serial_peer(|message| Duration::from_millis(if message == "SLOW?" { 300 } else { 1 }));
    let (session, exchanges) = session(&peer).await;
    let dropped = tokio::time::timeout(Duration::from_millis(100), session.query("SLOW?")).await;
    assert!(dropped.is_err());
    assert_eq!(session.query("NEXT?").await.unwrap(), "<NEXT?>");
    let received: Vec<String> = exchanges.take().into_iter().map(|entry| entry.text).collect();
    assert!(received.contains(&"<SLOW?>".to_owned()), "{received:?}");
}

#[tokio::test(start_paused = true)]
async fn a_command_that_was_called_off_while_it_waited_is_not_sent() {
    let peer = serial_peer(|message| Duration::from_millis(if message == "SLOW?" { 300 } else { 1 }));
    let (session, _) = session(&peer).await;
    let slow = tokio::spawn({
        let session = session.clone();
        async move { session.query("SLOW?").await }
    });
    tokio::time::sleep(Duration::from_millis(10)).await;
    assert!(tokio::time::timeout(Duration::from_millis(50), session.write("OUTPut ON")).await.is_err());
    slow.await.unwrap().unwrap();
    session.query("NEXT?").await.unwrap();
    assert!(!peer.received().contains(&"OUTPut ON".to_owned()));
}

#[tokio::test(start_paused = true)]
async fn a_block_that_keeps_moving_may_take_longer_than_any_answer() {
    let peer = peer(|message| match message {
        "DATA?" => {
            let pieces = (0..10).map(|index| Act::Answer(REPLY / 2 * index, vec![b'\n'; 10]));
            let header = std::iter::once(Act::Answer(Duration::ZERO, b"#3100".to_vec()));
            header.chain(pieces).chain([Act::Answer(REPLY / 2 * 9 + REPLY / 4, b"\n".to_vec())]).collect()
        }
        _ => Act::line("next"),
    });
    let (session, _) = session(&peer).await;
    let begun = Instant::now();
    assert_eq!(session.query_block("DATA?").await.unwrap(), vec![b'\n'; 100]);
    assert!(begun.elapsed() > 4 * REPLY);
    assert_eq!(session.query("NEXT?").await.unwrap(), "next", "the newline after a block is no answer");
}

#[tokio::test(start_paused = true)]
async fn a_block_that_stalls_ends_and_its_rest_is_dropped() {
    let peer = peer(|message| match message {
        "DATA?" => vec![Act::Answer(Duration::ZERO, b"#15HE".to_vec()), Act::Answer(REPLY * 3 / 2, b"LLO\n".to_vec())],
        _ => Act::line("next"),
    });
    let (session, _) = session(&peer).await;
    let error = session.query_block("DATA?").await.unwrap_err();
    assert_eq!((error.kind, error.reply.as_deref()), (ScpiErrorKind::NoAnswer, Some("#15HE")));
    tokio::time::sleep(REPLY).await;
    assert_eq!(session.query("NEXT?").await.unwrap(), "next");
}

#[tokio::test(start_paused = true)]
async fn an_answer_that_is_no_block_is_told_and_mended() {
    let peer = peer(|message| match message {
        "DATA?" => Act::line("-230,\"Data corrupt or stale\""),
        _ => Act::line("next"),
    });
    let (session, _) = session(&peer).await;
    let error = session.query_block("DATA?").await.unwrap_err();
    assert_eq!(error.kind, ScpiErrorKind::Garbled);
    assert!(error.to_string().contains("Data corrupt or stale"), "{error}");
    assert_eq!(session.query("NEXT?").await.unwrap(), "next");
}

#[tokio::test(start_paused = true)]
async fn an_error_queue_that_never_empties_is_read_to_its_bound() {
    let storm = peer(|_| Act::line("-350,\"Queue overflow\""));
    let (session_, _) = session(&storm).await;
    let drained = session_.drain_errors().await.unwrap();
    assert_eq!((drained.entries.len(), drained.emptied), (Session::ERROR_BOUND, false));
    let mut left = 3;
    let quiet = peer(move |_| {
        left -= 1;
        Act::line(if left >= 0 { "-113,\"Undefined header\"" } else { "+0,\"No error\"" })
    });
    let (session_, _) = session(&quiet).await;
    let drained = session_.drain_errors().await.unwrap();
    assert_eq!((drained.entries.len(), drained.emptied), (3, true));
}

#[tokio::test(start_paused = true)]
async fn completion_may_be_given_more_time_than_an_answer() {
    let peer = serial_peer(|message| if message == "*OPC?" { 10 * REPLY } else { Duration::ZERO });
    let (session, _) = session(&peer).await;
    session.opc(20 * REPLY).await.unwrap();
}

#[tokio::test(start_paused = true)]
async fn an_error_names_instrument_address_command_and_time() {
    let peer = peer(|_| vec![]);
    let (session, _) = session(&peer).await;
    let error = session.query("MEASure:VOLTage?").await.unwrap_err();
    assert_eq!(error.elapsed, REPLY);
    let text = error.to_string();
    for part in ["gauge", "TCPIP::scripted::1::SOCKET", "`MEASure:VOLTage?`", "after 0.500 s", "; check"] {
        assert!(text.contains(part), "{text}");
    }
}

#[tokio::test(start_paused = true)]
async fn a_lost_link_is_told_at_once_and_opened_again_when_asked_for() {
    let mut broken = false;
    let peer = peer(move |message| match message {
        "BREAK?" if !std::mem::replace(&mut broken, true) => vec![Act::Break(Duration::from_millis(1))],
        other => Act::line(format!("<{other}>")),
    });
    let (session, _) = session(&peer).await;
    assert_eq!(session.query("BREAK?").await.unwrap_err().kind, ScpiErrorKind::Lost);
    assert_eq!(session.query("NEXT?").await.unwrap_err().kind, ScpiErrorKind::Lost);
    peer.refuse(3);
    session.reconnect(Duration::from_secs(5)).await.unwrap();
    assert_eq!(peer.opened(), 2);
    assert_eq!(session.query("NEXT?").await.unwrap(), "<NEXT?>");
}

#[tokio::test(start_paused = true)]
async fn connecting_again_ends_within_its_bound() {
    let peer = peer(|_| vec![]);
    let (session, _) = session(&peer).await;
    peer.refuse(usize::MAX);
    let begun = Instant::now();
    let error = session.reconnect(Duration::from_secs(3)).await.unwrap_err();
    assert_eq!(error.kind, ScpiErrorKind::Unreachable);
    assert!(begun.elapsed() <= Duration::from_secs(3));
}

#[tokio::test(start_paused = true)]
async fn another_instrument_at_the_address_is_refused() {
    let mut asked = 0;
    let peer = Scripted::new(move |_| {
        asked += 1;
        Act::line(if asked == 1 { WHO } else { "NORRSUND,GAUGE,8,1.0" })
    });
    let (session, _) = session(&peer).await;
    let error = session.reconnect(Duration::from_secs(3)).await.unwrap_err();
    assert_eq!(error.kind, ScpiErrorKind::OtherInstrument);
    assert_eq!(session.query("NEXT?").await.unwrap_err().kind, ScpiErrorKind::Lost, "and nothing is sent to it");
}

#[tokio::test(start_paused = true)]
async fn giving_the_link_up_ends_the_exchange_under_way() {
    let peer = peer(|_| vec![]);
    let (session, _) = session(&peer).await;
    let waiting = tokio::spawn({
        let session = session.clone();
        async move { session.query_within("NEVER?", Duration::from_secs(3600)).await }
    });
    tokio::time::sleep(Duration::from_millis(10)).await;
    let begun = Instant::now();
    session.abandon();
    assert_eq!(waiting.await.unwrap().unwrap_err().kind, ScpiErrorKind::Lost);
    assert!(begun.elapsed() < Duration::from_millis(100));
}

#[tokio::test(start_paused = true)]
async fn a_command_with_a_newline_is_never_sent() {
    let peer = peer(|_| vec![]);
    let (session, _) = session(&peer).await;
    assert_eq!(session.write("INPut OFF\nINPut ON").await.unwrap_err().kind, ScpiErrorKind::Unsendable);
    assert_eq!(peer.received(), ["*IDN?"]);
}
