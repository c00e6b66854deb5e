//! Dialects against an instrument that keeps what it is told and may be made to misbehave: each refusal has its reason.

use ringstep::{
    instrument::{
        Dialect, DialectLoad, DialectScope, DialectSource, Drivers, Horizontal, InstrumentErrorKind as Kind, Load,
        Scope, Slope, Source, Trigger, Vertical, identity,
    },
    scpi::{Session, SessionOptions},
    transport::{
        CollectedExchanges, ExchangeLog,
        scripted::{Act, Scripted},
    },
};
use std::{
    collections::HashMap,
    sync::{Arc, Mutex},
    time::Duration,
};
use tokio::time::Instant;

const POINTS: usize = 1000;

/// Keeps settings by header and answers questions from them; `spoil` changes an answer.
fn instrument(who: &'static str, spoil: impl Fn(&str, String) -> Option<String> + Send + 'static) -> Scripted {
    let mut kept: HashMap<String, String> = [
        ("ACQuire:SRATe", "1E+08"),
        ("ACQuire:COMPlete", "100"),
        ("ACQuire:NUMBer", "0"),
        ("TRIGger:STATus", "WAIT"),
        ("OUTPut", "OFF"),
        ("SYSTem:ERRor", "0,\"No error\""),
        ("WAVeform:PREamble", "0,0,1000,1,1E-08,-1E-06,0,0.1,0,128"),
    ]
    .map(|(header, value)| (header.to_owned(), value.to_owned()))
    .into();
    Scripted::new(move |message| {
        if message == "*IDN?" {
            return Act::line(who);
        }
        if let Some((header, value)) = message.split_once(' ') {
            kept.insert(header.to_owned(), value.to_owned());
            return vec![];
        }
        let Some(header) = message.strip_suffix('?') else {
            if message == "SINGle" {
                kept.insert("ACQuire:NUMBer".to_owned(), "1".to_owned());
            }
            return vec![];
        };
        let honest = match header {
            "ACQuire:POINts" => POINTS.to_string(),
            "WAVeform:DATA" => format!("#41000{}", "A".repeat(POINTS)),
            _ => kept.get(header).cloned().unwrap_or_else(|| "0".to_owned()),
        };
        match spoil(message, honest) {
            Some(answer) => Act::line(answer),
            None => vec![],
        }
    })
}

fn honest(_: &str, answer: String) -> Option<String> {
    Some(answer)
}

/// Answers that question, and no other, with something else.
fn spoilt(question: &'static str, answer: &'static str) -> impl Fn(&str, String) -> Option<String> + Send {
    move |asked, honest| Some(if asked == question { answer.to_owned() } else { honest })
}

async fn dialect(driver: &str, peer: &Scripted) -> Dialect {
    let log = ExchangeLog::new(Instant::now(), Arc::new(CollectedExchanges::default()));
    let session = Session::open(Arc::new(peer.clone()), SessionOptions::new(driver), log).await.unwrap();
    let who = identity(&session.query("*IDN?").await.unwrap(), session.address()).unwrap();
    Dialect::new(session, Drivers::embedded().unwrap().named(driver).unwrap().clone(), who)
}

async fn scope(spoil: impl Fn(&str, String) -> Option<String> + Send + 'static) -> DialectScope {
    let peer = instrument("SIMULATED BENCH,SCOPE-8,S1,1.0", spoil);
    DialectScope::new(dialect("scope-preamble-block", &peer).await).unwrap()
}

const RANGE: Vertical = Vertical { bottom_v: -50.0, top_v: 550.0 };
const WINDOW: Horizontal = Horizontal { window_s: 10e-6, start_s: -1e-6, interval_s: None };
const TRIGGER: Trigger = Trigger { level_v: 100.0, slope: Slope::Rising, holdoff_s: 0.0 };

/// The kind of the first refusal on the way to a record; `None` where the record came.
async fn refusal(spoil: impl Fn(&str, String) -> Option<String> + Send + 'static) -> Option<Kind> {
    let mut scope = scope(spoil).await;
    let steps = async {
        scope.prepare(1, 100.0).await?;
        scope.set_vertical(RANGE).await?;
        scope.set_horizontal(WINDOW).await?;
        scope.set_trigger(TRIGGER).await?;
        scope.arm().await?;
        scope.read().await.map(|record| assert_eq!(record.payload.len(), POINTS))
    };
    steps.await.err().map(|error| error.kind)
}

#[tokio::test(start_paused = true)]
async fn an_honest_scope_gives_its_record() {
    assert_eq!(refusal(honest).await, None);
}

#[tokio::test(start_paused = true)]
async fn a_scope_that_does_not_do_as_it_says_is_refused_for_that() {
    for (question, answer, kind) in [
        ("CHANnel1:DISPlay?", "0", Kind::NotAsSet),
        ("CHANnel1:PROBe?", "10", Kind::NotAsSet),
        ("ACQuire:TYPE?", "AVER", Kind::NotAsSet),
        ("TRIGger:SWEep?", "AUTO", Kind::NotAsSet),
        ("TRIGger:EDGE:SOURce?", "CHAN2", Kind::NotAsSet),
        ("TRIGger:EDGE:LEVel?", "10", Kind::NotAsSet),
        ("TRIGger:STATus?", "AUTO", Kind::NotArmed),
        ("TRIGger:STATus?", "RUNNING", Kind::Unexpected),
        ("ACQuire:SRATe?", "9.9E+37", Kind::Unexpected),
        ("ACQuire:SRATe?", "1E+09", Kind::WrongRecord),
        ("ACQuire:NUMBer?", "0", Kind::NotNew),
        ("ACQuire:COMPlete?", "50", Kind::Incomplete),
        ("WAVeform:PREamble?", "0,2,1000,8,1E-08,-1E-06,0,0.1,0,128", Kind::WrongRecord),
        ("WAVeform:PREamble?", "1,0,1000,1,1E-08,-1E-06,0,0.1,0,128", Kind::WrongRecord),
        ("WAVeform:PREamble?", "0,0,500,1,1E-08,-1E-06,0,0.1,0,128", Kind::WrongRecord),
        ("WAVeform:PREamble?", "0,0,1000,1,2E-08,-1E-06,0,0.1,0,128", Kind::WrongRecord),
        ("WAVeform:PREamble?", "0,0,1000,1,1E-08,-1E-06,0,9.91E37,0,128", Kind::WrongRecord),
        ("WAVeform:PREamble?", "0,0,1000", Kind::WrongRecord),
        ("WAVeform:DATA?", "#15HELLO", Kind::WrongRecord),
        ("WAVeform:DATA?", "HELLO", Kind::Exchange),
        ("SYSTem:ERRor?", "-350,\"Queue overflow\"", Kind::Reported),
        ("SYSTem:ERRor?", "no entry", Kind::Exchange),
    ] {
        assert_eq!(refusal(spoilt(question, answer)).await, Some(kind), "{question} {answer}");
    }
}

#[tokio::test(start_paused = true)]
async fn a_scope_that_rounds_its_scale_down_is_asked_for_more() {
    // 1-2-5 steps, rounded down: 75 V a division becomes 50 V.
    let mut scope = scope(|asked, honest| {
        let value: f64 = match asked {
            "CHANnel1:SCALe?" => honest.parse().unwrap(),
            _ => return Some(honest),
        };
        let step = [200.0, 100.0, 50.0, 20.0].into_iter().find(|step| *step <= value).unwrap();
        Some(step.to_string())
    })
    .await;
    scope.prepare(1, 100.0).await.unwrap();
    let set = scope.set_vertical(RANGE).await.unwrap();
    assert_eq!(set, Vertical { bottom_v: -150.0, top_v: 650.0 }, "100 V a division around 250 V");
}

#[tokio::test(start_paused = true)]
async fn a_channel_or_model_that_is_not_there_is_refused() {
    let mut scope = scope(honest).await;
    assert_eq!(scope.prepare(3, 100.0).await.unwrap_err().kind, Kind::OutOfRange);
    assert_eq!(scope.read().await.unwrap_err().kind, Kind::NotNew);
    let peer = instrument("SIMULATED BENCH,SCOPE-10,S1,1.0", honest);
    let unknown = DialectScope::new(dialect("scope-preamble-block", &peer).await).err().unwrap();
    assert_eq!(unknown.kind, Kind::NoDriver, "{unknown}");
    let wrong_role = DialectLoad::new(dialect("scope-preamble-block", &peer).await).err().unwrap();
    assert_eq!(wrong_role.kind, Kind::NoDriver, "{wrong_role}");
}

#[tokio::test(start_paused = true)]
async fn a_silent_refusal_is_explained_by_the_error_queue() {
    let told = Mutex::new(false);
    let mut scope = scope(move |asked, honest| match asked {
        "WAVeform:PREamble?" => {
            *told.lock().unwrap() = true;
            None
        }
        "SYSTem:ERRor?" if std::mem::take(&mut *told.lock().unwrap()) => {
            Some("-230,\"Data corrupt or stale\"".to_owned())
        }
        _ => Some(honest),
    })
    .await;
    scope.prepare(1, 100.0).await.unwrap();
    scope.set_horizontal(WINDOW).await.unwrap();
    scope.arm().await.unwrap();
    let error = scope.read().await.unwrap_err();
    assert_eq!(error.kind, Kind::Reported);
    assert!(error.to_string().contains("WAVeform:PREamble?") && error.to_string().contains("-230"), "{error}");
}

#[tokio::test(start_paused = true)]
async fn a_load_never_holds_a_current_above_its_range() {
    let peer = instrument("SIMULATED BENCH,LOAD-150,L1,1.0", honest);
    let mut load = DialectLoad::new(dialect("load-serial-scpi", &peer).await).unwrap();
    load.prepare().await.unwrap();
    for current_a in [5.0, 0.5, 0.02, 12.0, 0.0, 2.9] {
        load.draw(current_a).await.unwrap();
    }
    let (mut range_a, mut set_a, mut on) = (f64::INFINITY, 0.0, true);
    let mut draws = Vec::new();
    for message in peer.received() {
        match message.split_once(' ') {
            Some(("CURRent:RANGe", value)) => range_a = value.parse().unwrap(),
            Some(("CURRent", value)) => set_a = value.parse().unwrap(),
            Some(("INPut", value)) => on = value == "ON",
            _ => continue,
        }
        assert!(set_a <= range_a, "{message}");
        draws.push((set_a, range_a, on));
    }
    assert!(draws.contains(&(0.02, 3.0, true)), "a small current is drawn in the small range: {draws:?}");
    assert!(draws[1..].iter().any(|(_, _, on)| !on), "no current is the input switched off: {draws:?}");
    assert_eq!(draws.last(), Some(&(2.9, 3.0, true)));
    assert_eq!(load.draw(30.5).await.unwrap_err().kind, Kind::OutOfRange);
}

#[tokio::test(start_paused = true)]
async fn a_reading_that_is_a_sentinel_is_no_reading() {
    let peer = instrument("SIMULATED BENCH,LOAD-150,L1,1.0", spoilt("MEASure:CURRent?", "9.91E+37"));
    let mut load = DialectLoad::new(dialect("load-serial-scpi", &peer).await).unwrap();
    let error = load.read().await.unwrap_err();
    assert_eq!(error.kind, Kind::Unexpected);
    assert!(error.to_string().contains("could not be measured"), "{error}");
}

#[tokio::test(start_paused = true)]
async fn a_source_is_taken_over_only_while_it_is_off_and_tells_when_it_limits() {
    let peer = instrument("SIMULATED BENCH,SOURCE-500,P1,1.0", spoilt("STATus:QUEStionable:CONDition?", "6"));
    let mut source = DialectSource::new(dialect("source-ac-scpi", &peer).await).unwrap();
    source.prepare(1.0).await.unwrap();
    source.set_line(230.0, 50.0).await.unwrap();
    assert_eq!(source.set_line(301.0, 50.0).await.unwrap_err().kind, Kind::OutOfRange);
    source.on().await.unwrap();
    assert!(source.read().await.unwrap().unwrap().limiting);
    assert_eq!(source.prepare(1.0).await.unwrap_err().kind, Kind::AlreadyOn);
    let sent = peer.received();
    let place = |text: &str| sent.iter().position(|message| message == text).unwrap();
    assert!(place("VOLTage 0") < place("VOLTage:RANGe 300"), "{sent:?}");
    assert!(place("CURRent:LIMit 1") < place("OUTPut ON"), "{sent:?}");
}

#[tokio::test(start_paused = true)]
async fn a_source_that_stays_on_when_told_off_is_an_error() {
    let peer = instrument("SIMULATED BENCH,SOURCE-500,P1,1.0", spoilt("OUTPut?", "1"));
    let mut source = DialectSource::new(dialect("source-ac-scpi", &peer).await).unwrap();
    let begun = Instant::now();
    assert_eq!(source.off().await.unwrap_err().kind, Kind::NotAsSet);
    assert!(begun.elapsed() < Duration::from_secs(1));
}
