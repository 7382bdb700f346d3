//! Speed of the posterior kernel on one core: medians of repeated runs over a survey-like mix of rows.
//!
//! The mix: distances from the exponentially decreasing density of L = 1.35 kpc, errors log-uniform in 0.01..1 mas, and a
//! fifth of the rows drawn nearby so that parallax/error reaches beyond 100; photometric errors log-uniform in
//! 0.001..0.05 mag. Invented numbers; they only set the balance of easy and hard rows.

use std::time::Instant;

use tenparsec::posterior::{BAND_OUTPUTS, MODULUS_OUTPUTS, Photometry, Prior, Workspace, summarise};

/// Minimal generator (SplitMix64), uniform in (0, 1).
struct Uniform(u64);

impl Uniform {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64 + f64::EPSILON / 4.0
    }

    fn log_between(&mut self, a: f64, b: f64) -> f64 {
        (a.ln() + (b / a).ln() * self.next()).exp()
    }

    fn normal(&mut self) -> f64 {
        (-2.0 * self.next().ln()).sqrt() * (std::f64::consts::TAU * self.next()).cos()
    }
}

/// Time that this thread has spent on a core, s: Linux's own account, so that other processes do not count; elsewhere
/// the clock on the wall.
fn core_seconds(since: Instant) -> f64 {
    std::fs::read_to_string("/proc/thread-self/schedstat")
        .ok()
        .and_then(|text| text.split_whitespace().next()?.parse::<f64>().ok())
        .map_or_else(|| since.elapsed().as_secs_f64(), |nanoseconds| nanoseconds * 1e-9)
}

fn median_rate(rows: usize, runs: usize, mut run: impl FnMut()) -> f64 {
    let clock = Instant::now();
    let mut rates: Vec<f64> = (0..runs)
        .map(|_| {
            let start = core_seconds(clock);
            run();
            rows as f64 / (core_seconds(clock) - start)
        })
        .collect();
    rates.sort_by(f64::total_cmp);
    rates[runs / 2]
}

/// Largest error of the modulus quantiles, mean and mode, mag, against the 40-digit values of the tests.
fn worst_error() -> f64 {
    let mut worst = 0.0_f64;
    let mut scratch = Workspace::new();
    for line in include_str!("../tests/reference/posterior_exponential.csv").lines() {
        let fields: Vec<f64> = line.split(',').map(|field| field.parse().unwrap_or(f64::NAN)).collect();
        if !line.starts_with("exponentially") {
            continue;
        }
        let prior = Prior::ExponentiallyDecreasingDensity { length_kpc: fields[1] };
        let mut columns = [[0.0]; MODULUS_OUTPUTS];
        let mut out: Vec<&mut [f64]> = columns.iter_mut().map(|column| &mut column[..]).collect();
        summarise(&prior, &fields[4..5], &fields[5..6], &[], &mut out, &mut scratch);
        for (column, truth) in columns.iter().zip(&fields[9..14]) {
            worst = worst.max((column[0] - truth).abs());
        }
    }
    worst
}

fn main() {
    println!("worst error against 40-digit values: {:.1e} mag", worst_error());
    let rows = 200_000;
    let mut random = Uniform(7);
    let (mut parallax, mut error) = (Vec::new(), Vec::new());
    let mut photometry = vec![(Vec::new(), Vec::new()); 3];
    for _ in 0..rows {
        let sigma = random.log_between(0.01, 1.0);
        let mut distance = -1.35 * (random.next() * random.next() * random.next()).ln();
        if random.next() < 0.2 {
            distance *= 0.05;
        }
        parallax.push(1.0 / distance + sigma * random.normal());
        error.push(sigma);
        for (apparent, sigma) in &mut photometry {
            apparent.push(10.0 + 8.0 * random.next());
            sigma.push(random.log_between(0.001, 0.05));
        }
    }
    let bands: Vec<Photometry> = photometry.iter().map(|(apparent, error)| Photometry { apparent, error }).collect();
    let mut columns = vec![vec![0.0; rows]; MODULUS_OUTPUTS + 3 * BAND_OUTPUTS];
    let priors = [
        Prior::ExponentiallyDecreasingDensity { length_kpc: 1.35 },
        Prior::GeneralizedGamma { alpha: 0.9, beta: 2.2, length_kpc: 1.1 },
        Prior::UniformDensity { limit_kpc: 20.0 },
    ];
    for prior in &priors {
        for used in [0, 3] {
            for (path, mut scratch) in [("vector", Workspace::new()), ("scalar", Workspace::scalar())] {
                let mut out: Vec<&mut [f64]> = columns.iter_mut().map(|c| &mut c[..]).collect();
                let rate = median_rate(rows, 7, || {
                    summarise(prior, &parallax, &error, &bands[..used], &mut out, &mut scratch);
                });
                println!("{:70} {used} bands, {path}: {:6.2} M rows/s", prior.describe(), rate / 1e6);
            }
        }
    }
}
