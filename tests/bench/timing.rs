//! Timing for ratios: the candidates take turns, so that a noisy moment hits them all; medians are compared.
#![allow(dead_code)]

use std::hint::black_box;
use std::time::Instant;

/// Median time (s) of each candidate over `rounds` rounds, after a tenth as many unmeasured ones.
pub fn interleaved(rounds: usize, candidates: &mut [&mut dyn FnMut() -> f64]) -> Vec<f64> {
    interleaved_at(0.5, rounds, candidates)
}

/// The same, another quantile than the median: a low one leaves out what other programs on the machine do.
pub fn interleaved_at(quantile: f64, rounds: usize, candidates: &mut [&mut dyn FnMut() -> f64]) -> Vec<f64> {
    let mut times = vec![Vec::with_capacity(rounds); candidates.len()];
    for round in 0..rounds + rounds / 10 {
        for (k, candidate) in candidates.iter_mut().enumerate() {
            let start = Instant::now();
            black_box(candidate());
            if round >= rounds / 10 {
                times[k].push(start.elapsed().as_secs_f64());
            }
        }
    }
    times.iter_mut().map(|t| at(quantile, t)).collect()
}

fn at(quantile: f64, times: &mut [f64]) -> f64 {
    times.sort_by(f64::total_cmp);
    times[((times.len() - 1) as f64 * quantile).round() as usize]
}

/// One line: a median, and its ratio to another.
pub fn report(what: &str, time: f64, beside: Option<(&str, f64)>) {
    match beside {
        Some((other, base)) => println!("{what:<48} {:>9.1} us   {:>6.2} x {other}", time * 1e6, time / base),
        None => println!("{what:<48} {:>9.1} us", time * 1e6),
    }
}
