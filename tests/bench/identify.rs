//! Samples per second of the recursion alone: regression rows, whitening and update of one sole, k, b and the rest height
//! unknown. `tests/bench/identify.py` sets numpy's batch solution beside it.

#[path = "../identify_support/mod.rs"]
mod identify_support;

use std::time::Instant;

use identify_support::*;
use underfoot::identify::Follower;
use underfoot::identify::setup::{Forgetting, Setup};

fn main() {
    let mut random = Random(1);
    let samples: Vec<_> = (0..20_000)
        .map(|i| {
            let t = 0.001 * f64::from(i);
            let motion = stance_motion(t, 0.0, 0.008);
            let wrench = wrench(&rectangle(), &isotropic(2e6, 2e4), &motion, 0.0);
            sample(&mut random, t, motion, &wrench, (2.0, 0.1))
        })
        .collect();
    for (name, forgetting) in [("nothing forgotten", Forgetting::None), ("forgetting", Forgetting::Factor(0.999))] {
        let setup = Setup { forgetting, ..setup(rectangle()) };
        let frame = frame(&setup);
        let mut rates: Vec<f64> = (0..15)
            .map(|_| {
                let mut follower = Follower::new(&setup, &frame, setup.lags[0]);
                let start = Instant::now();
                for sample in &samples {
                    follower.push(&setup, 0, &frame, sample);
                }
                assert!((follower.estimator().value().unwrap()[0] / 2e6 - 1.0).abs() < 0.05);
                samples.len() as f64 / start.elapsed().as_secs_f64()
            })
            .collect();
        rates.sort_by(f64::total_cmp);
        println!("{name}: {:.0} samples/s", rates[rates.len() / 2]);
    }
}
