//! The distance-modulus posterior against 40-digit arithmetic, published values, and itself (order, reflection, bits).

use tenparsec::posterior::{
    BAND_OUTPUTS, MODULUS_OUTPUTS, Photometry, Prior, Priors, Workspace, summarise, summarise_each,
};

/// Rows of a reference file as fields, without comments and the heading.
fn table(text: &'static str) -> impl Iterator<Item = Vec<&'static str>> {
    text.lines().filter(|line| !line.starts_with('#')).skip(1).map(|line| line.split(',').collect())
}

fn number(field: &str) -> f64 {
    field.parse().unwrap_or(f64::NAN)
}

/// All outputs for a set of rows, photometry of apparent magnitude 0 in one band a column of errors.
fn run(prior: &Prior, parallax: &[f64], error: &[f64], bands: &[Vec<f64>], scratch: &mut Workspace) -> Vec<Vec<f64>> {
    let zero = vec![0.0; parallax.len()];
    let photometry: Vec<Photometry> = bands.iter().map(|error| Photometry { apparent: &zero, error }).collect();
    let mut columns = vec![vec![0.0; parallax.len()]; MODULUS_OUTPUTS + BAND_OUTPUTS * bands.len()];
    let mut out: Vec<&mut [f64]> = columns.iter_mut().map(|column| &mut column[..]).collect();
    summarise(prior, parallax, error, &photometry, &mut out, scratch);
    columns
}

fn prior_of(fields: &[&str]) -> Prior {
    match fields[0] {
        "exponentially-decreasing-density" => Prior::ExponentiallyDecreasingDensity { length_kpc: number(fields[1]) },
        "generalized-gamma" => {
            Prior::GeneralizedGamma { alpha: number(fields[1]), beta: number(fields[2]), length_kpc: number(fields[3]) }
        }
        "uniform-density" => Prior::UniformDensity { limit_kpc: number(fields[1]) },
        other => panic!("no such prior: {other}"),
    }
}

/// Compares every output with a file of `posterior_values.py`; the worst error must stay below 1e-6.
fn against(text: &'static str, at_least: usize) {
    const NAMES: [&str; 10] = ["p16", "p50", "p84", "mode", "mean", "sd", "share", "m16", "m50", "m84"];
    let mut scratch = Workspace::new();
    let mut values = 0;
    for fields in table(text) {
        let got = run(
            &prior_of(&fields),
            &[number(fields[4])],
            &[number(fields[5])],
            &[vec![number(fields[8])]],
            &mut scratch,
        );
        for (k, name) in NAMES.iter().enumerate() {
            let error = (got[k][0] - number(fields[9 + k])).abs();
            assert!(error < 1e-6, "{name} is off by {error:e}: {fields:?}");
            values += 1;
        }
    }
    assert!(values >= at_least, "only {values} values");
}

/// Source: posterior_values.py (mpmath, 40 digits).
#[test]
fn exponentially_decreasing_density_agrees_with_forty_digits() {
    against(include_str!("../reference/posterior_exponential.csv"), 4500);
}

/// Source: posterior_values.py (mpmath, 40 digits).
#[test]
fn uniform_density_agrees_with_forty_digits() {
    against(include_str!("../reference/posterior_uniform.csv"), 2300);
}

/// Source: posterior_values.py (mpmath, 40 digits).
#[test]
fn generalized_gamma_agrees_with_forty_digits() {
    against(include_str!("../reference/posterior_gamma.csv"), 1800);
}

/// Source: edsd_checks.csv; distances there have 8 digits and quantile levels 6.
#[test]
fn quantiles_and_modes_agree_with_independent_values() {
    for fields in table(include_str!("../reference/edsd_checks.csv")) {
        let v: Vec<f64> = fields.iter().map(|f| number(f)).collect();
        let prior = Prior::ExponentiallyDecreasingDensity { length_kpc: v[2] };
        let got = run(&prior, &[v[0]], &[v[1]], &[], &mut Workspace::new());
        for (output, kpc, tolerance) in [(3, v[3], 2e-7), (0, v[4], 4e-6), (1, v[5], 2e-6), (2, v[6], 4e-6)] {
            let modulus = 5.0 * kpc.log10() + 10.0;
            assert!((got[output][0] - modulus).abs() < tolerance, "{fields:?} {output}: {} {modulus}", got[output][0]);
        }
    }
}

/// Source: edsd_mode_roots.csv, the root of highest density (10 digits).
#[test]
fn mode_is_the_highest_root_of_the_cubic() {
    for fields in table(include_str!("../reference/edsd_mode_roots.csv")) {
        let prior = Prior::ExponentiallyDecreasingDensity { length_kpc: number(fields[2]) };
        let got = run(&prior, &[number(fields[0])], &[number(fields[1])], &[], &mut Workspace::new());
        let modulus = 5.0 * number(fields[6]).log10() + 10.0;
        assert!((got[3][0] - modulus).abs() < 1e-8, "{fields:?}: {} {modulus}", got[3][0]);
    }
}

/// Lutz & Kelker 1973, PASP 85, 573, Table 1: their lower end of the true parallax is a limit of distance here.
#[test]
fn lutz_and_kelker_table_is_reproduced() {
    let mut rows = 0;
    for fields in table(include_str!("../reference/lutz_kelker.csv")) {
        let ratio = number(fields[0]);
        if ratio == 0.0 {
            continue;
        }
        let nearest = (1.0 - (1.0 - 16.0 * ratio * ratio).sqrt()) / 2.0;
        let prior = Prior::UniformDensity { limit_kpc: 1.0 / nearest };
        let got = run(&prior, &[1.0], &[ratio], &[], &mut Workspace::new());
        let correction = 10.0 - got[4][0];
        assert!((correction - number(fields[3])).abs() < 6e-5, "{fields:?}: {correction}");
        assert!((correction - number(fields[1])).abs() < 0.0051, "{fields:?}: {correction}");
        rows += 1;
    }
    assert_eq!(rows, 7);
}

/// SplitMix64, uniform in [0, 1).
struct Uniform(u64);

impl Uniform {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64
    }

    fn log_between(&mut self, a: f64, b: f64) -> f64 {
        a * (b / a).powf(self.next())
    }
}

/// Rows over the whole domain, hard corners included.
fn rows(count: usize, seed: u64) -> (Vec<f64>, Vec<f64>, Vec<f64>) {
    let mut random = Uniform(seed);
    let (mut parallax, mut error, mut photometric) = (Vec::new(), Vec::new(), Vec::new());
    for _ in 0..count {
        let sigma = random.log_between(1e-3, 10.0);
        let ratio = match (random.next() * 3.0) as u32 {
            0 => -5.0 + 15.0 * random.next(),
            1 => random.log_between(0.1, 300.0),
            _ => -20.0 + 40.0 * random.next(),
        };
        parallax.push(ratio * sigma);
        error.push(sigma);
        photometric.push(if random.next() < 0.1 { 0.0 } else { random.log_between(1e-3, 0.3) });
    }
    (parallax, error, photometric)
}

const PRIORS: [Prior; 3] = [
    Prior::ExponentiallyDecreasingDensity { length_kpc: 1.35 },
    Prior::GeneralizedGamma { alpha: 0.7, beta: 1.6, length_kpc: 0.4 },
    Prior::UniformDensity { limit_kpc: 5.0 },
];

/// Error of a quantile of x + Gaussian(0, sd), in x, found by plain quadrature of the formula on 6001 nodes.
fn quantile_error(prior: &Prior, w: f64, sigma: f64, sd: f64, quantile: f64, level: f64) -> f64 {
    let s = w / sigma;
    let log_prior = |x: f64| match *prior {
        Prior::ExponentiallyDecreasingDensity { length_kpc } => 3.0 * x - libm::exp(x) / length_kpc,
        Prior::GeneralizedGamma { alpha, beta, length_kpc } => {
            (beta + 1.0) * x - libm::exp(alpha * (x - libm::log(length_kpc)))
        }
        Prior::UniformDensity { .. } => 3.0 * x,
    };
    let end = match *prior {
        Prior::ExponentiallyDecreasingDensity { length_kpc } => libm::log(60.0 * length_kpc),
        Prior::GeneralizedGamma { alpha, length_kpc, .. } => libm::log(length_kpc) + libm::log(60.0) / alpha,
        Prior::UniformDensity { limit_kpc } => libm::log(limit_kpc),
    };
    let low = -libm::log(sigma * (s.max(0.0) + 9.0));
    let high = if s > 12.0 { end.min(-libm::log(sigma * (s - 9.0))) } else { end };
    let nodes = 6001;
    let step = (high - low) / f64::from(nodes - 1);
    let y = |x: f64| log_prior(x) - 0.5 * (s - libm::exp(-x) / sigma) * (s - libm::exp(-x) / sigma);
    let logs: Vec<f64> = (0..nodes).map(|j| y(low + step * f64::from(j))).collect();
    let top = logs.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let (mut total, mut below, mut density) = (0.0, 0.0, 0.0);
    for (j, log) in logs.iter().enumerate() {
        // Simpson's rule
        let rule = if j == 0 || j + 1 == nodes as usize {
            1.0
        } else if j % 2 == 1 {
            4.0
        } else {
            2.0
        };
        let weight = rule * libm::exp(log - top);
        let v = (quantile - low - step * j as f64) / sd;
        total += weight;
        below += weight * 0.5 * libm::erfc(-v / std::f64::consts::SQRT_2);
        density += weight * libm::exp(-0.5 * v * v) / (sd * 2.506_628_274_631_000_5);
    }
    (below / total - level) / (density / total)
}

/// Convolved magnitudes of a survey-like mix against plain quadrature, whichever of its three routes the kernel takes.
#[test]
fn convolved_magnitudes_agree_with_plain_quadrature() {
    let mut random = Uniform(21);
    for prior in &PRIORS {
        let (mut parallax, mut error, mut photometric) = (Vec::new(), Vec::new(), Vec::new());
        for _ in 0..1500 {
            let sigma = random.log_between(0.02, 1.0);
            let distance = random.log_between(0.1, 4.9);
            parallax.push(1.0 / distance + sigma * (random.next() + random.next() + random.next() - 1.5) * 2.0);
            error.push(sigma);
            photometric.push(random.log_between(0.01, 0.5));
        }
        let got = run(prior, &parallax, &error, std::slice::from_ref(&photometric), &mut Workspace::new());
        for i in 0..parallax.len() {
            for (k, level) in [(9, 0.158_655_253_931_457_07), (8, 0.5), (7, 0.841_344_746_068_542_9)] {
                let x = (-got[k][i] - 10.0) * 0.2 * std::f64::consts::LN_10;
                let sd = photometric[i] * 0.2 * std::f64::consts::LN_10;
                let off = quantile_error(prior, parallax[i], error[i], sd, x, level) * 5.0 / std::f64::consts::LN_10;
                assert!(off.abs() < 1e-6, "{prior:?} {} {} {} {k}: {off:e}", parallax[i], error[i], photometric[i]);
            }
        }
    }
}

#[test]
fn simd_and_scalar_paths_give_the_same_bits() {
    for prior in &PRIORS {
        let (parallax, error, photometric) = rows(350_000, 11);
        let bands = [photometric];
        let wide = run(prior, &parallax, &error, &bands, &mut Workspace::new());
        let narrow = run(prior, &parallax, &error, &bands, &mut Workspace::scalar());
        for (a, b) in wide.iter().zip(&narrow) {
            assert!(a.iter().zip(b).all(|(a, b)| a.to_bits() == b.to_bits()));
        }
    }
}

#[test]
fn a_row_does_not_depend_on_its_neighbours() {
    for prior in &PRIORS {
        let (parallax, error, photometric) = rows(3_000, 12);
        let bands = [photometric.clone()];
        let whole = run(prior, &parallax, &error, &bands, &mut Workspace::new());
        for (start, end) in [(0, 1), (1, 700), (700, 703), (703, 2999), (2999, 3000)] {
            let bands = [photometric[start..end].to_vec()];
            let piece = run(prior, &parallax[start..end], &error[start..end], &bands, &mut Workspace::new());
            for (a, b) in whole.iter().zip(&piece) {
                assert!(a[start..end].iter().zip(b).all(|(a, b)| a.to_bits() == b.to_bits()));
            }
        }
    }
}

#[test]
fn summaries_are_ordered_finite_and_within_bounds() {
    for prior in &PRIORS {
        let (parallax, error, photometric) = rows(100_000, 13);
        let got = run(prior, &parallax, &error, &[photometric], &mut Workspace::new());
        for i in 0..parallax.len() {
            let row: Vec<f64> = got.iter().map(|column| column[i]).collect();
            assert!(row.iter().all(|v| v.is_finite()), "{} {}: {row:?}", parallax[i], error[i]);
            assert!(row[0] < row[1] && row[1] < row[2], "{row:?}");
            assert!(row[5] > 0.0 && row[6] > 0.0 && row[6] <= 1.0, "{row:?}");
            assert!(row[7] < row[8] && row[8] < row[9], "{row:?}");
            assert!(row[4] > row[0] - 5.0 * row[5] && row[4] < row[2] + 5.0 * row[5], "{row:?}");
        }
    }
}

#[test]
fn larger_parallax_means_smaller_modulus() {
    for prior in &PRIORS {
        for sigma in [0.003, 0.1, 2.0] {
            let parallax: Vec<f64> = (0..4000).map(|i| sigma * (-20.0 + 0.02 * f64::from(i))).collect();
            let error = vec![sigma; parallax.len()];
            let got = run(prior, &parallax, &error, &[], &mut Workspace::new());
            for column in &got[..3] {
                for (i, pair) in column.windows(2).enumerate() {
                    assert!(pair[1] < pair[0] + 1e-9, "{sigma} {}: {pair:?}", parallax[i]);
                }
            }
        }
    }
}

#[test]
fn without_photometric_error_magnitudes_are_reflected_moduli() {
    for prior in &PRIORS {
        let (parallax, error, _) = rows(10_000, 14);
        let got = run(prior, &parallax, &error, &[vec![0.0; parallax.len()]], &mut Workspace::new());
        for level in 0..3 {
            let moduli = &got[2 - level];
            assert!(moduli.iter().zip(&got[MODULUS_OUTPUTS + level]).all(|(modulus, m)| (modulus + m).abs() < 1e-12));
        }
    }
}

#[test]
fn missing_input_gives_missing_output_and_nothing_else() {
    let nan = f64::NAN;
    let parallax = [1.0, nan, f64::INFINITY, 1.0, 1.0, 1.0, 1.0, 1.0, 1e-300, -1e30, 1e30];
    let error = [0.1, 0.1, 0.1, nan, 0.0, -0.1, f64::INFINITY, 0.1, 1e-300, 1e-5, 1e-5];
    let photometric = vec![nan, 0.1, 0.1, 0.1, 0.1, 0.1, 0.1, -0.1, 0.1, 0.1, 0.1];
    for prior in &PRIORS {
        let got = run(prior, &parallax, &error, std::slice::from_ref(&photometric), &mut Workspace::new());
        for (i, known) in [true, false, false, false, false, false, false, true, true, true, true].iter().enumerate() {
            assert!(got[..MODULUS_OUTPUTS].iter().all(|c| c[i].is_finite() == *known), "{i} {:?}", got[0][i]);
            let band = *known && photometric[i] >= 0.0;
            assert!(got[MODULUS_OUTPUTS..].iter().all(|c| c[i].is_finite() == band), "{i}");
        }
    }
}

/// Rows with priors of their own give the bits that each prior alone gives.
#[test]
fn a_prior_a_row_equals_each_prior_alone() {
    let tables: [Vec<Prior>; 3] = [
        (1..40).map(|i| Prior::ExponentiallyDecreasingDensity { length_kpc: 0.1 * f64::from(i) }).collect(),
        (1..40)
            .map(|i| Prior::GeneralizedGamma {
                alpha: 0.4 + 0.05 * f64::from(i),
                beta: 0.1 * f64::from(i),
                length_kpc: 0.1 * f64::from(i),
            })
            .collect(),
        (1..40).map(|i| Prior::UniformDensity { limit_kpc: 0.5 * f64::from(i) }).collect(),
    ];
    let (parallax, error, photometric) = rows(4_000, 15);
    let which: Vec<u32> = (0..4_000).map(|i| (i * 7 + i / 13) % 40).collect();
    let zero = vec![0.0; 4_000];
    for table in &tables {
        let bands = [Photometry { apparent: &zero, error: &photometric }];
        let mut columns = vec![vec![0.0; 4_000]; MODULUS_OUTPUTS + BAND_OUTPUTS];
        let mut out: Vec<&mut [f64]> = columns.iter_mut().map(|column| &mut column[..]).collect();
        let priors = Priors::new(table).unwrap();
        summarise_each(&priors, &which, &parallax, &error, &bands, &mut out, &mut Workspace::new());
        for (k, prior) in table.iter().enumerate() {
            let alone = run(prior, &parallax, &error, std::slice::from_ref(&photometric), &mut Workspace::new());
            for i in (0..4_000).filter(|&i| which[i] as usize == k) {
                assert!(columns.iter().zip(&alone).all(|(a, b)| a[i].to_bits() == b[i].to_bits()), "{prior:?} {i}");
            }
        }
        // number 39 does not exist
        assert!((0..4_000).filter(|&i| which[i] == 39).all(|i| columns.iter().all(|c| c[i].is_nan())));
    }
}

#[test]
fn tables_of_priors_are_checked() {
    let good = Prior::UniformDensity { limit_kpc: 1.0 };
    let other = Prior::ExponentiallyDecreasingDensity { length_kpc: 1.0 };
    assert!(Priors::new(&[]).is_err());
    assert!(Priors::new(&[good.clone(), other]).is_err());
    assert!(Priors::new(&[good.clone(), Prior::UniformDensity { limit_kpc: f64::NAN }]).is_err());
    assert!(Priors::new(&[good]).is_ok());
}

/// Distances drawn from the prior, then observed: the truth must fall below p16, p50 and p84 as often as they claim
/// (simulation-based calibration, Talts et al. 2018, arXiv 1804.06788), here on the four classes that they bound.
#[test]
fn quantiles_cover_what_they_claim() {
    let mut random = Uniform(31);
    for prior in [
        Prior::ExponentiallyDecreasingDensity { length_kpc: 1.35 },
        Prior::GeneralizedGamma { alpha: 2.0, beta: 3.0, length_kpc: 2.0 },
        Prior::UniformDensity { limit_kpc: 3.0 },
    ] {
        let count = 100_000;
        let (mut truth, mut parallax, mut error) = (Vec::new(), Vec::new(), Vec::new());
        for _ in 0..count {
            let mut uniform = || 1.0 - random.next();
            let distance = match prior {
                Prior::ExponentiallyDecreasingDensity { length_kpc } => {
                    -length_kpc * (uniform() * uniform() * uniform()).ln()
                }
                // shape (beta + 1)/alpha = 2
                Prior::GeneralizedGamma { length_kpc, .. } => length_kpc * (-(uniform() * uniform()).ln()).sqrt(),
                Prior::UniformDensity { limit_kpc } => limit_kpc * uniform().cbrt(),
            };
            let sigma = 0.02 * 50.0_f64.powf(uniform());
            let normal = (-2.0 * uniform().ln()).sqrt() * (std::f64::consts::TAU * uniform()).cos();
            truth.push(5.0 * distance.log10() + 10.0);
            parallax.push(1.0 / distance + sigma * normal);
            error.push(sigma);
        }
        let got = run(&prior, &parallax, &error, &[], &mut Workspace::new());
        let mut seen = [0.0; 4];
        for (i, mu) in truth.iter().enumerate() {
            seen[got[..3].iter().filter(|column| column[i] < *mu).count()] += 1.0;
        }
        let side = 0.158_655_253_931_457_07 * f64::from(count);
        let middle = 0.5 * f64::from(count) - side;
        let chi2: f64 = seen.iter().zip([side, middle, middle, side]).map(|(n, e)| (n - e) * (n - e) / e).sum();
        // 99.9 % point of chi-square with 3 degrees of freedom
        assert!(chi2 < 16.27, "{prior:?}: {seen:?} {chi2}");
    }
}
