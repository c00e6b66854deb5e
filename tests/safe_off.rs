//! The way out on a paused clock: bounded whatever the other side does, source before load, off before any question.

use ringstep::{
    instrument::{Dialect, Drivers, OffSwitch, identity},
    scpi::{Session, SessionOptions},
    station::{OffState, SafeOff},
    transport::{
        CollectedExchanges, ExchangeLog,
        scripted::{Act, Scripted},
    },
};
use std::{
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
    },
    time::Duration,
};
use tokio::time::Instant;

const BOUND: Duration = Duration::from_secs(1);

async fn switch(
    driver: &str,
    key: &'static str,
    who: &str,
    peer: &Scripted,
    log: &ExchangeLog,
) -> (Session, OffSwitch) {
    let session = Session::open(Arc::new(peer.clone()), SessionOptions::new(key), log.clone()).await.unwrap();
    let answer = session.query("*IDN?").await.unwrap();
    assert_eq!(answer, who);
    let definition = Drivers::embedded().unwrap().named(driver).unwrap().clone();
    let switch = Dialect::new(session.clone(), definition, identity(&answer, "").unwrap()).off_switch(key);
    (session, switch)
}

fn log() -> (Arc<CollectedExchanges>, ExchangeLog) {
    let exchanges = Arc::new(CollectedExchanges::default());
    (exchanges.clone(), ExchangeLog::new(Instant::now(), exchanges))
}

const SOURCE: &str = "SIMULATED BENCH,SOURCE-500,P1,1.0";
const LOAD: &str = "SIMULATED BENCH,LOAD-150,L1,1.0";

/// A source that is on until it is told otherwise, with a closure that may spoil its answers.
fn source(spoil: impl Fn(&str) -> Option<Vec<Act>> + Send + 'static) -> (Scripted, Arc<AtomicBool>) {
    let on = Arc::new(AtomicBool::new(true));
    let state = on.clone();
    let peer = Scripted::new(move |message| {
        if message == "OUTPut OFF" {
            state.store(false, Ordering::SeqCst);
        }
        if let Some(acts) = spoil(message) {
            return acts;
        }
        match message {
            "*IDN?" => Act::line(SOURCE),
            "OUTPut?" => Act::line(if state.load(Ordering::SeqCst) { "1" } else { "0" }),
            question if question.ends_with('?') => Act::line("0"),
            _ => vec![],
        }
    });
    (peer, on)
}

async fn off(peer: &Scripted) -> (OffState, Duration) {
    let (_, log) = log();
    let (_session, source) = switch("source-ac-scpi", "output", SOURCE, peer, &log).await;
    let begun = Instant::now();
    let report = SafeOff::new(Some(source), None).off().await;
    assert_eq!(report.load, OffState::ByHand);
    (report.source, begun.elapsed())
}

#[tokio::test(start_paused = true)]
async fn a_source_that_answers_is_confirmed() {
    let (peer, on) = source(|_| None);
    assert_eq!(off(&peer).await.0, OffState::Confirmed);
    assert!(!on.load(Ordering::SeqCst));
    assert_eq!(peer.opened(), 1);
}

#[tokio::test(start_paused = true)]
async fn a_source_that_no_longer_answers_is_still_told_to_switch_off() {
    let (peer, on) = source(|message| (message == "OUTPut?").then(Vec::new));
    let (state, elapsed) = off(&peer).await;
    assert!(matches!(state, OffState::Unconfirmed(_)), "{state:?}");
    assert!(!on.load(Ordering::SeqCst));
    assert!(elapsed < BOUND, "{elapsed:?}");
}

#[tokio::test(start_paused = true)]
async fn a_source_that_does_not_obey_is_told_apart_from_one_that_does() {
    let (peer, _) = source(|message| (message == "OUTPut?").then(|| Act::line("1")));
    let (state, elapsed) = off(&peer).await;
    let OffState::Unconfirmed(why) = state else { panic!("confirmed") };
    assert!(why.contains("OUTPut OFF") && why.contains("read back `1`"), "{why}");
    assert!(elapsed < BOUND, "{elapsed:?}");
}

#[tokio::test(start_paused = true)]
async fn a_long_exchange_under_way_does_not_hold_it_up() {
    let (peer, on) = source(|message| (message == "MEASure:POWer?").then(Vec::new));
    let (_, log) = log();
    let (session, source) = switch("source-ac-scpi", "output", SOURCE, &peer, &log).await;
    let busy = session.clone();
    let busy = tokio::spawn(async move { busy.query_within("MEASure:POWer?", Duration::from_secs(60)).await });
    tokio::time::sleep(Duration::from_millis(10)).await;
    let begun = Instant::now();
    let report = SafeOff::new(Some(source), None).off().await;
    assert!(report.source.is_confirmed(), "{report:?}");
    assert!(begun.elapsed() < BOUND);
    assert!(!on.load(Ordering::SeqCst));
    assert!(busy.await.unwrap().is_err());
    assert_eq!(peer.opened(), 2);
}

#[tokio::test(start_paused = true)]
async fn a_broken_link_is_replaced_and_a_refusing_one_is_told() {
    let (peer, on) = source(|message| (message == "BREAK").then(|| vec![Act::Break(Duration::ZERO)]));
    let (_, log) = log();
    let (session, source) = switch("source-ac-scpi", "output", SOURCE, &peer, &log).await;
    session.write("BREAK").await.unwrap();
    let safe_off = SafeOff::new(Some(source), None);
    assert!(safe_off.off().await.source.is_confirmed());
    assert!(!on.load(Ordering::SeqCst));
    peer.refuse(usize::MAX);
    let begun = Instant::now();
    let OffState::Unconfirmed(why) = safe_off.off().await.source else { panic!("confirmed") };
    assert!(begun.elapsed() < BOUND);
    assert!(why.contains("output"), "{why}");
}

#[tokio::test(start_paused = true)]
async fn the_source_goes_off_before_the_load_and_a_hanging_source_does_not_keep_the_load_on() {
    for hangs in [false, true] {
        let (peer, _) = source(move |message| (hangs && message == "OUTPut?").then(Vec::new));
        let load = Scripted::new(|message| match message {
            "*IDN?" => Act::line(LOAD),
            "INPut?" => Act::line("0"),
            _ => vec![],
        });
        let (exchanges, log) = log();
        let (_one, source) = switch("source-ac-scpi", "output", SOURCE, &peer, &log).await;
        let (_two, input) = switch("load-serial-scpi", "input", LOAD, &load, &log).await;
        let report = SafeOff::new(Some(source), Some(input)).off().await;
        assert_eq!((report.source.is_confirmed(), report.load), (!hangs, OffState::Confirmed));
        let texts: Vec<String> = exchanges.take().into_iter().map(|entry| entry.text).collect();
        let place = |text: &str| texts.iter().position(|sent| sent == text).unwrap();
        assert!(place("OUTPut OFF") < place("INPut OFF"), "{texts:?}");
        assert!(place("SYSTem:REMote") < place("INPut OFF"), "{texts:?}");
    }
}
