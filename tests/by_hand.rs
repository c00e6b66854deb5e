//! Roles filled by hand: asked, answered, held against what was asked for; refused where nobody attends.

use ringstep::{
    instrument::{Drivers, InstrumentErrorKind, Load, Source},
    station::{ByHandLoad, ByHandSource, Operator, Station, connect},
    transport::{CollectedExchanges, ExchangeLog},
};
use std::{
    future::{Future, ready},
    pin::Pin,
    sync::{Arc, Mutex},
};

/// Answers in turn, then calls it off.
#[derive(Default)]
struct Script {
    answers: Mutex<Vec<&'static str>>,
    prompts: Mutex<Vec<String>>,
}

impl Script {
    fn new(answers: &[&'static str]) -> Arc<Self> {
        Arc::new(Self { answers: Mutex::new(answers.iter().rev().copied().collect()), prompts: Mutex::default() })
    }

    fn prompts(&self) -> String {
        self.prompts.lock().unwrap().join("\n")
    }
}

impl Operator for Script {
    fn ask<'a>(&'a self, prompt: &'a str) -> Pin<Box<dyn Future<Output = Option<String>> + Send + 'a>> {
        self.prompts.lock().unwrap().push(prompt.to_owned());
        Box::pin(ready(self.answers.lock().unwrap().pop().map(str::to_owned)))
    }
}

fn variac(script: &Arc<Script>) -> ByHandSource {
    ByHandSource::new(script.clone(), "variac on bench 1".to_owned())
}

#[tokio::test]
async fn a_variac_is_set_when_the_meter_shows_what_was_asked_for() {
    let script = Script::new(&["done", "231.4 V", "115", "done"]);
    let mut source = variac(&script);
    source.prepare(0.5).await.unwrap();
    source.set_line(230.0, 50.0).await.unwrap();
    assert_eq!(script.prompts.lock().unwrap().len(), 1, "setting it while it is off asks for nothing yet");
    source.on().await.unwrap();
    source.set_line(115.0, 50.0).await.unwrap();
    source.off().await.unwrap();
    assert_eq!(source.read().await.unwrap(), None, "a number typed once is no reading");
    let prompts = script.prompts();
    for part in ["variac on bench 1", "0.5 A", "230 V", "115 V", "switch it off"] {
        assert!(prompts.contains(part), "{part}: {prompts}");
    }
}

#[tokio::test]
async fn a_voltage_that_is_off_is_asked_for_again_and_then_refused() {
    let script = Script::new(&["120", "two hundred", "200"]);
    let mut source = variac(&script);
    source.set_line(230.0, 50.0).await.unwrap();
    assert_eq!(source.on().await.unwrap_err().kind, InstrumentErrorKind::NotAsSet);
    let prompts = script.prompts();
    assert!(prompts.contains("120 V is not within 5 % of 230 V"), "{prompts}");
    assert!(prompts.contains("`two hundred` is not a number of V"), "{prompts}");
}

#[tokio::test]
async fn the_operator_may_call_it_off() {
    let script = Script::new(&[]);
    let error = variac(&script).off().await.unwrap_err();
    assert_eq!(error.kind, InstrumentErrorKind::CalledOff, "{error}");
}

#[tokio::test]
async fn a_resistor_draws_what_the_meter_confirms() {
    let script = Script::new(&["done", "done", "12.1", "0.5", "done", "12.2"]);
    let mut load = ByHandLoad::new(script.clone(), "24 ohm, 10 W".to_owned());
    load.prepare().await.unwrap();
    load.draw(0.5).await.unwrap();
    let reading = load.read().await.unwrap();
    assert_eq!((reading.voltage_v, reading.current_a), (12.1, 0.5));
    load.off().await.unwrap();
    assert_eq!(load.read().await.unwrap().current_a, 0.0, "nothing is connected");
}

#[tokio::test]
async fn unattended_a_role_filled_by_hand_is_refused() {
    let text = include_str!("../src/guide/examples/station.toml");
    let mut station = Station::read("station.toml", text).unwrap();
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let address = format!("TCPIP::127.0.0.1::{}::SOCKET", listener.local_addr().unwrap().port());
    tokio::spawn(async move {
        use tokio::io::{AsyncReadExt, AsyncWriteExt};
        while let Ok((mut stream, _)) = listener.accept().await {
            let mut question = [0; 64];
            let _ = stream.read(&mut question).await;
            let _ = stream.write_all(b"SIMULATED BENCH,SCOPE-8,S1,1.0\n").await;
        }
    });
    let by_hand = |what: &str| ringstep::station::Role::ByHand { description: what.to_owned() };
    station.scope.role = ringstep::station::Role::Instrument { address, driver: None };
    (station.load, station.source) = (by_hand("24 ohm, 10 W"), by_hand("variac on bench 1"));
    let log = ExchangeLog::new(tokio::time::Instant::now(), Arc::new(CollectedExchanges::default()));
    let error = connect(&station, &Drivers::embedded().unwrap(), &log, None).await.err().unwrap();
    assert_eq!(error.kind, InstrumentErrorKind::Unattended, "{error}");
    let connected = connect(&station, &Drivers::embedded().unwrap(), &log, Some(Script::new(&[]))).await.unwrap();
    assert_eq!(connected.source.identity().driver, "by_hand");
    station.scope.role = by_hand("an analogue scope");
    let error = connect(&station, &Drivers::embedded().unwrap(), &log, None).await.err().unwrap();
    assert!(error.to_string().contains("can't be read by hand"), "{error}");
}
