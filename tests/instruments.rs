//! The three dialects against the simulated bench over real sockets and a pseudo-terminal, and the way out of every fault.

use ringstep::{
    instrument::{Drivers, Horizontal, InstrumentErrorKind, SampleFormat, Slope, Trigger, Vertical},
    station::{Connected, OffState, Probe, Role, SafetyLimits, ScopeRole, Station, connect},
    transport::{CollectedExchanges, Direction, ExchangeLog},
};
use ringstep_analysis::{findings::Accuracy, quantity::Measured};
use ringstep_simulated_bench::process::{self, Options, RunningBench};
use std::{sync::Arc, time::Duration};
use tokio::time::{Instant, sleep};

struct Bench {
    running: RunningBench,
    exchanges: Arc<CollectedExchanges>,
}

impl Bench {
    async fn start(options: Options) -> Self {
        let running = process::start(&Options { speed: 50.0, ..options }).await.unwrap();
        Self { running, exchanges: Arc::default() }
    }

    async fn with_faults(faults: &[&str]) -> Self {
        let faults = faults.iter().map(|fault| fault.parse().unwrap()).collect();
        Self::start(Options { faults, ..Options::default() }).await
    }

    fn station(&self) -> Station {
        let role = |address: &str| Role::Instrument { address: address.to_owned(), driver: None };
        let announced = &self.running.announcement;
        Station {
            name: "Norrsund Harbour Works, bench 1".to_owned(),
            scope: ScopeRole { role: role(&announced.scope), channel: 1, earthed: true, input_rating_v: 300.0 },
            load: role(&announced.load),
            source: role(&announced.source),
            load_earthed: false,
            source_isolated: true,
            probe: Probe {
                factor: 100.0,
                capacitance_f: Measured::exact(5e-12),
                bandwidth_hz: 200e6,
                rating_v: 1500.0,
                derating_frequency_hz: 1e6,
                differential: false,
                serial_number: "P-1".to_owned(),
                calibrated: None,
                compensated: None,
            },
            limits: SafetyLimits { drain_v: 700.0, line_v: 265.0, line_current_a: 1.0, load_power_w: 60.0 },
            accuracy: Accuracy::default(),
        }
    }

    async fn connect(&self) -> Connected {
        let log = ExchangeLog::new(Instant::now(), self.exchanges.clone());
        connect(&self.station(), &Drivers::embedded().unwrap(), &log, None).await.unwrap()
    }
}

async fn captured(connected: &mut Connected, wanted: Horizontal) -> ringstep::instrument::RawWaveform {
    let scope = &mut connected.scope;
    scope.prepare(1, 100.0).await.unwrap();
    let range = scope.set_vertical(Vertical { bottom_v: -50.0, top_v: 600.0 }).await.unwrap();
    assert!(range.bottom_v <= -50.0 && range.top_v >= 600.0, "{range:?}");
    let timing = scope.set_horizontal(wanted).await.unwrap();
    scope.set_trigger(Trigger { level_v: 100.0, slope: Slope::Rising, holdoff_s: 0.0 }).await.unwrap();
    scope.arm().await.unwrap();
    let begun = Instant::now();
    while !scope.is_complete().await.unwrap() {
        assert!(begun.elapsed() < Duration::from_secs(20), "no acquisition");
        sleep(Duration::from_millis(5)).await;
    }
    let waveform = scope.read().await.unwrap();
    assert!((waveform.interval_s - timing.interval_s).abs() < 1e-4 * timing.interval_s);
    assert!(timing.points as f64 * timing.interval_s >= 0.98 * wanted.window_s);
    waveform
}

async fn energised(bench: &Bench) -> Connected {
    let mut connected = bench.connect().await;
    connected.source.prepare(1.0).await.unwrap();
    connected.load.prepare().await.unwrap();
    connected.source.set_line(230.0, 50.0).await.unwrap();
    connected.load.draw(0.5).await.unwrap();
    connected.source.on().await.unwrap();
    sleep(Duration::from_millis(100)).await;
    connected
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn every_role_is_recognised_and_says_that_it_is_simulated() {
    let connected = Bench::start(Options::default()).await.connect().await;
    for (role, identity) in connected.identities() {
        assert!(identity.simulated, "{role}: {identity:?}");
        assert!(identity.driver.starts_with(&role.to_string()), "{role}: {identity:?}");
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn an_eight_bit_scope_sends_bytes_with_the_scale_that_was_asked_for() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = energised(&bench).await;
    let waveform = captured(&mut connected, Horizontal { window_s: 40e-6, start_s: -4e-6, interval_s: None }).await;
    assert_eq!(waveform.format, SampleFormat::U8);
    assert_eq!(waveform.payload.len(), (10.0 * 5e-6 * 1e9) as usize, "5 us a division at a full 1 GS/s");
    assert!((waveform.time_origin_s + 4e-6).abs() < 2.0 * waveform.interval_s);
    let volts =
        |code: &u8| (f64::from(*code) - waveform.code_reference) * waveform.volts_per_code + waveform.volts_origin;
    let peak = waveform.payload.iter().map(volts).fold(f64::MIN, f64::max);
    // 230 V rms rectify to 325 V, and the drain of a flyback stands above its bulk while the secondary conducts.
    assert!((325.0..700.0).contains(&peak), "{peak}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn no_more_memory_is_used_than_the_interval_asked_for_takes() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = energised(&bench).await;
    // Depths come in steps of ten and windows in steps of 1, 2 and 5.
    for (longest_s, points) in [(50e-9, 10_000), (40e-9, 100_000), (1e-9, 500_000)] {
        let horizontal = Horizontal { window_s: 480e-6, start_s: -48e-6, interval_s: Some(longest_s) };
        let waveform = captured(&mut connected, horizontal).await;
        assert!(waveform.interval_s <= 1.001 * longest_s, "{} where {longest_s} was asked for", waveform.interval_s);
        assert_eq!(waveform.payload.len(), points, "for {longest_s} s");
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_twelve_bit_scope_sends_words() {
    let bench = Bench::start(Options { scope_bits: 12, ..Options::default() }).await;
    let mut connected = energised(&bench).await;
    let waveform = captured(&mut connected, Horizontal { window_s: 100e-6, start_s: -10e-6, interval_s: None }).await;
    assert_eq!(waveform.format, SampleFormat::U16Be);
    let codes: Vec<u16> = waveform.payload.chunks_exact(2).map(|pair| u16::from_be_bytes([pair[0], pair[1]])).collect();
    assert!(codes.iter().any(|code| code & 0x00F0 != 0), "the lower four bits of twelve are used");
    assert!(codes.iter().all(|code| f64::from(*code) <= waveform.clip_codes[1]));
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_record_that_is_not_new_is_refused() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = energised(&bench).await;
    captured(&mut connected, Horizontal { window_s: 40e-6, start_s: -4e-6, interval_s: None }).await;
    connected.source.off().await.unwrap();
    sleep(Duration::from_millis(500)).await;
    connected.scope.arm().await.unwrap();
    assert!(!connected.scope.is_complete().await.unwrap(), "a dead board triggers nothing in normal mode");
    assert_eq!(connected.scope.read().await.unwrap_err().kind, InstrumentErrorKind::NotNew);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_load_draws_in_the_smallest_range_and_the_source_reports_what_it_delivers() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = energised(&bench).await;
    for current_a in [0.5, 0.05, 1.0] {
        connected.load.draw(current_a).await.unwrap();
        let mut reading = connected.load.read().await.unwrap();
        for _ in 0..100 {
            if (reading.current_a - current_a).abs() < 0.01 {
                break;
            }
            sleep(Duration::from_millis(20)).await;
            reading = connected.load.read().await.unwrap();
        }
        assert!((reading.current_a - current_a).abs() < 0.01, "{current_a} A: {reading:?}");
    }
    let reading = connected.source.read().await.unwrap().unwrap();
    assert!((reading.voltage_v - 230.0).abs() < 2.0, "{reading:?}");
    assert!(!reading.limiting, "{reading:?}");
    let refused = connected.load.draw(31.0).await.unwrap_err();
    assert_eq!(refused.kind, InstrumentErrorKind::OutOfRange, "{refused}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_source_found_on_is_refused() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = energised(&bench).await;
    let refused = connected.source.prepare(1.0).await.unwrap_err();
    assert_eq!(refused.kind, InstrumentErrorKind::AlreadyOn, "{refused}");
    assert!(connected.safe_off.off().await.source.is_confirmed());
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn what_an_instrument_reports_names_the_command() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = bench.connect().await;
    // 500 VA at 300 V: the current limit can't be 3 A.
    let refused = connected.source.prepare(3.0).await.unwrap_err();
    assert_eq!(refused.kind, InstrumentErrorKind::Reported);
    let message = refused.to_string();
    assert!(message.contains("CURRent:LIMit 3") && message.contains("-222") && message.contains("SOCKET"), "{message}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn every_message_is_logged_and_a_block_by_its_checksum() {
    let bench = Bench::start(Options::default()).await;
    let mut connected = energised(&bench).await;
    let waveform = captured(&mut connected, Horizontal { window_s: 40e-6, start_s: -4e-6, interval_s: None }).await;
    let entries = bench.exchanges.take();
    let blocks: Vec<_> = entries.iter().filter_map(|entry| entry.block.as_ref()).collect();
    assert_eq!(blocks.len(), 1);
    assert_eq!(blocks[0].length, waveform.payload.len());
    assert_eq!(blocks[0].crc32, format!("{:08x}", crc32fast::hash(&waveform.payload)));
    assert!(entries.iter().any(|entry| entry.instrument == "load" && entry.text == "INPut ON"));
    assert!(entries.iter().all(|entry| entry.direction != Direction::Noted), "nothing had to be mended");
    let line = serde_json::to_string(&entries[0]).unwrap();
    assert_eq!(serde_json::from_str::<ringstep::transport::ExchangeEntry>(&line).unwrap(), entries[0]);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn safe_off_confirms_both_and_is_quick() {
    let bench = Bench::start(Options::default()).await;
    let connected = energised(&bench).await;
    let begun = Instant::now();
    let report = connected.safe_off.off().await;
    assert!(begun.elapsed() < Duration::from_secs(1));
    assert_eq!((report.source, report.load), (OffState::Confirmed, OffState::Confirmed));
    drop(connected);
    sleep(Duration::from_millis(50)).await;
    // A source that is on would refuse.
    bench.connect().await.source.prepare(1.0).await.unwrap();
}

/// Each fault strikes the source or the load while a step is under way; both must end switched off.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn safe_off_gets_past_every_fault_of_a_link() {
    for fault in [
        "source:drop@40",
        "source:silent@40",
        "source:garbage@40",
        "source:truncate@40",
        "load:silent@40",
        "load:garbage@40",
    ] {
        let bench = Bench::with_faults(&[fault]).await;
        let mut connected = energised(&bench).await;
        let struck = loop {
            let load = connected.load.read().await.map(|_| ());
            let source = connected.source.read().await.map(|_| ());
            if let Err(error) = load.and(source) {
                break error;
            }
        };
        assert_eq!(struck.kind, InstrumentErrorKind::Exchange, "{fault}: {struck}");
        let begun = Instant::now();
        let report = connected.safe_off.off().await;
        assert!(begun.elapsed() < Duration::from_secs(1), "{fault}: {:?}", begun.elapsed());
        assert!(report.source.is_confirmed() && report.load.is_confirmed(), "{fault}: {report:?}");
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn safe_off_says_what_it_could_not_confirm_within_a_second() {
    let bench = Bench::with_faults(&["source:gone@40"]).await;
    let mut connected = energised(&bench).await;
    while connected.source.read().await.is_ok() {}
    let begun = Instant::now();
    let report = connected.safe_off.off().await;
    assert!(begun.elapsed() < Duration::from_secs(1), "{:?}", begun.elapsed());
    assert!(matches!(report.source, OffState::Unconfirmed(_)), "{report:?}");
    assert!(report.load.is_confirmed(), "{report:?}");
}
