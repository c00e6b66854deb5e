//! What a test needs from outside: a program, a Python module, a folder of recordings. Its absence skips the test by name,
//! and fails it where `CI` is set. Shared by the tests of all three packages.

use std::{env, ffi::OsStr, io::Write, path::PathBuf, process::Command};

/// Variable that names the folder of real recordings.
pub const CAPTURES_VARIABLE: &str = "RINGSTEP_CAPTURES";

/// Variable that names the file in which skips are noted.
const SKIPS_VARIABLE: &str = "RINGSTEP_SKIPS";

/// Whether the program can be started; notes the skip otherwise.
#[allow(dead_code)]
pub fn need(program: &str) -> bool {
    found(Command::new(program).arg("--version").output().is_ok(), program)
}

/// Whether `python3` can import the module; notes the skip otherwise.
#[allow(dead_code)]
pub fn need_python(module: &str) -> bool {
    let import = format!("import {module}");
    let ok = Command::new("python3").args(["-c", &import]).output().is_ok_and(|output| output.status.success());
    found(ok, &format!("python module {module}"))
}

/// The recording of that name in the folder of real recordings; `None` notes the skip.
#[allow(dead_code)]
pub fn need_capture(name: &str) -> Option<PathBuf> {
    let path = env::var_os(CAPTURES_VARIABLE).map(|folder| PathBuf::from(folder).join(name));
    let path = path.filter(|path| path.exists());
    found(path.is_some(), &format!("recording {name} (set {CAPTURES_VARIABLE})"));
    path
}

fn found(present: bool, what: &str) -> bool {
    if present {
        return true;
    }
    let test = std::thread::current().name().unwrap_or("unnamed test").to_owned();
    if env::var_os("CI").is_some_and(|value| value != OsStr::new("")) {
        panic!("{test} needs {what}, and nothing may be skipped here");
    }
    println!("skipped: {test}: needs {what}");
    if let Some(file) = env::var_os(SKIPS_VARIABLE) {
        let opened = std::fs::OpenOptions::new().create(true).append(true).open(file);
        if let Ok(mut file) = opened {
            let _ = writeln!(file, "{test}: needs {what}");
        }
    }
    false
}
