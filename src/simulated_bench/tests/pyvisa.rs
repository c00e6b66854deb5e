//! An independent client: pyvisa with pyvisa-py (PyPI), over sockets and the serial line, against the plain one here.

use crate::{client::TestBench, need::need_python};
use ringstep_simulated_bench::process::Options;
use serde_json::Value;
use std::{path::Path, process::Command};

#[test]
fn pyvisa_sees_the_same_instruments_and_the_same_bytes() {
    if !(need_python("pyvisa") && need_python("pyvisa_py") && need_python("serial")) {
        return;
    }
    for scope_bits in [8, 12] {
        let bench = TestBench::new(&Options { scope_bits, ..Options::default() });
        let addresses = bench.announcement();
        // Asked first: a serial library leaves the line in a mode that a plain file cannot read.
        let load_identity = bench.load().ask("*IDN?");
        let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/pyvisa_client.py");
        let output = Command::new("python3")
            .arg(script)
            .args([&addresses.scope, &addresses.load, &addresses.source])
            .output()
            .unwrap();
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let seen: Value = serde_json::from_slice(&output.stdout).unwrap();
        let identity = |name: &str| seen[name]["identity"].as_str().unwrap().to_owned();
        let (mut scope, mut source) = (bench.scope(), bench.source());
        assert_eq!(identity("scope"), scope.ask("*IDN?"));
        assert_eq!(identity("load"), load_identity);
        assert_eq!(identity("source"), source.ask("*IDN?"));
        for name in ["scope", "load", "source"] {
            assert_eq!(seen[name]["errors"], serde_json::json!([-113, -222, 0]), "{name}");
        }
        assert_eq!(seen["scope"]["settings"], serde_json::json!([2e-6, 5.0, 2e4]));
        assert_eq!(seen["load"]["settings"], serde_json::json!([0.25, 3.0, 1.0]));
        assert_eq!(seen["source"]["settings"], serde_json::json!([120.0, 60.0, 1.0]));
        for format in ["BYTE", "WORD"] {
            scope.send(&format!("WAV:FORM {format}"));
            let hexadecimal: String = scope.block("WAV:DATA?").iter().map(|byte| format!("{byte:02x}")).collect();
            assert!(seen["scope"][format] == hexadecimal.as_str(), "{format} differs from what pyvisa got");
        }
    }
}
