//! Quantities as people write them, read and printed.

use proptest::prelude::*;
use ringstep_analysis::quantity::{Measured, Unit, parse_quantity};

fn read(text: &str, unit: Unit) -> (f64, f64) {
    let got = parse_quantity(text, unit).unwrap_or_else(|error| panic!("{text}: {error}"));
    (got.value, got.standard_uncertainty)
}

#[test]
fn quantities_are_read_as_people_write_them() {
    let root3 = 3f64.sqrt();
    for (text, unit, value, half_width) in [
        ("1.2 mH +- 5 %", Unit::Henry, 1.2e-3, 60e-6),
        ("1.2 mH ± 60 uH", Unit::Henry, 1.2e-3, 60e-6),
        ("1.2mH±60µH", Unit::Henry, 1.2e-3, 60e-6),
        ("1.2 mH +/- 60 \u{3bc}H", Unit::Henry, 1.2e-3, 60e-6),
        ("100 V", Unit::Volt, 100.0, 0.0),
        ("-0.5 V +- 10%", Unit::Volt, -0.5, 0.05),
        ("82 pF", Unit::Farad, 82e-12, 0.0),
        ("3.3kohm", Unit::Ohm, 3300.0, 0.0),
        ("1e-3 s", Unit::Second, 1e-3, 0.0),
        ("2E3 Hz", Unit::Hertz, 2000.0, 0.0),
        ("65 kHz +- 3 kHz", Unit::Hertz, 65e3, 3e3),
        (".5 W", Unit::Watt, 0.5, 0.0),
        ("25 degC", Unit::DegreeCelsius, 25.0, 0.0),
        ("80 %", Unit::Percent, 0.8, 0.0),
        ("80 % +- 5 %", Unit::Percent, 0.8, 0.05),
        ("250 mA", Unit::Ampere, 0.25, 0.0),
    ] {
        let (got, uncertainty) = read(text, unit);
        assert!((got - value).abs() <= 1e-12 * value.abs(), "{text}: {got}");
        // JCGM 100:2008, 4.3.7: a half-width a of a rectangular distribution has the standard uncertainty a / sqrt(3).
        assert!((uncertainty - half_width / root3).abs() <= 1e-9 * half_width, "{text}: {uncertainty}");
    }
}

#[test]
fn a_mistake_says_what_was_expected_and_where() {
    for (text, unit, character, expected, found) in [
        ("", Unit::Volt, 1, "a number", "nothing"),
        ("abc", Unit::Volt, 1, "a number", "`abc`"),
        ("1.2", Unit::Henry, 4, "the unit H", "nothing"),
        ("1.2 mV", Unit::Henry, 5, "the unit H", "`mV`"),
        ("1,2 mH", Unit::Henry, 2, "the unit H", "`,2`"),
        ("1.2 mH 5 %", Unit::Henry, 8, "+-", "`5`"),
        ("1.2 µH ± x", Unit::Henry, 10, "a tolerance", "`x`"),
        ("1.2 mH +- -5 %", Unit::Henry, 11, "not negative", "`-5`"),
        ("1.2 mH +- 5 V", Unit::Henry, 13, "or %", "`V`"),
        ("1.2 mH +- 5 % x", Unit::Henry, 15, "the end", "`x`"),
        ("1e999 V", Unit::Volt, 1, "a number", "`1e999`"),
        ("inf V", Unit::Volt, 1, "a number", "`inf`"),
        ("5 k%", Unit::Percent, 3, "the unit %", "`k%`"),
    ] {
        let error = parse_quantity(text, unit).expect_err(text);
        assert_eq!((error.character, error.found.as_str()), (character, found), "{text}: {error}");
        assert!(error.expected.contains(expected), "{text}: {error}");
        assert!(text.is_char_boundary(error.position), "{text}: {error:?}");
    }
}

#[test]
fn values_are_printed_with_as_many_digits_as_are_known() {
    let text = |value, standard_uncertainty, unit| {
        Measured { value, standard_uncertainty }.text_with_standard_uncertainty(unit)
    };
    assert_eq!(text(82.412e-12, 0.91e-12, Unit::Farad), "82.4 pF +- 0.9 pF");
    assert_eq!(text(82.412e-12, 0.123e-12, Unit::Farad), "82.41 pF +- 0.12 pF");
    assert_eq!(text(526_012.3, 45.0, Unit::Hertz), "526.01 kHz +- 0.04 kHz");
    assert_eq!(text(375.2, 0.0, Unit::Volt), "375.2 V");
    assert_eq!(text(0.0, 0.0, Unit::Volt), "0 V");
    assert_eq!(text(0.8, 0.05, Unit::Percent), "80 % +- 5 %");
    assert_eq!(text(999.9999e3, 0.0, Unit::Hertz), "1 MHz");
    let interval = Measured { value: 100.0, standard_uncertainty: 5.0 }.text_with_95_percent_interval(Unit::Volt);
    assert_eq!(interval, "100 V +- 10 V");
}

proptest! {
    /// What is printed reads back to the same value within the digits shown, and never to less uncertainty than a fifth off.
    #[test]
    fn printed_quantities_read_back(mantissa in 1.0f64..10.0, exponent in -12i32..9, relative in 1e-5f64..0.3) {
        let value = mantissa * 10f64.powi(exponent);
        let measured = Measured { value, standard_uncertainty: value * relative };
        let text = measured.text_with_standard_uncertainty(Unit::Volt);
        let back = parse_quantity(&text, Unit::Volt).unwrap();
        let half_width = back.standard_uncertainty * 3f64.sqrt();
        prop_assert!((back.value - value).abs() <= 0.2 * measured.standard_uncertainty + 1e-9 * value, "{text}");
        prop_assert!((half_width / measured.standard_uncertainty - 1.0).abs() < 0.2, "{text}");
    }

    /// No text whatever upsets the reader.
    #[test]
    fn any_text_is_read_or_refused(text in "\\PC{0,24}") {
        let _ = parse_quantity(&text, Unit::Farad);
        let _ = parse_quantity(&format!("1 pF {text}"), Unit::Farad);
    }
}
