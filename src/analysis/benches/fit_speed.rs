//! Times the fit of one damped sinusoid for `scripts/speed.sh`. Each line on standard input is a question: `detected` or
//! `baseline` instructions, repeats, start values of decay and angle over the record, samples. Each answer is a line: the median of
//! seconds a fit, then decay, angle, cosine, sine, offset and slope.

use ringstep_analysis::fit::{Base, Instructions, fit_damped_sinusoid_with};
use std::{hint::black_box, io, time::Instant};

fn answer(question: &str) -> Option<String> {
    let mut words = question.split_whitespace();
    let instructions = match words.next()? {
        "detected" => Instructions::Detected,
        "baseline" => Instructions::Baseline,
        _ => return None,
    };
    let repeats: usize = words.next()?.parse().ok()?;
    let numbers: Vec<f64> = words.map(str::parse).collect::<Result<_, _>>().ok()?;
    let (start, samples) = numbers.split_first_chunk::<2>()?;
    let fit = || fit_damped_sinusoid_with(instructions, black_box(samples), black_box(*start), Base::Straight);
    let mut times: Vec<f64> = (0..repeats)
        .map(|_| {
            let begun = Instant::now();
            black_box(fit());
            begun.elapsed().as_secs_f64()
        })
        .collect();
    times.sort_by(f64::total_cmp);
    let seconds = *times.get(times.len() / 2)?;
    let found = fit()?;
    let values = [found.decay, found.angle, found.cosine, found.sine, found.base[0], found.base[1]];
    Some(values.iter().fold(format!("{seconds:e}"), |line, value| format!("{line} {value:e}")))
}

fn main() {
    for line in io::stdin().lines().map_while(Result::ok) {
        println!("{}", answer(&line).unwrap_or_else(|| "no fit".to_owned()));
    }
}
