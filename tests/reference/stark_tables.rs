//! The unified theory, uncut, against the published tables of Stark profiles.
//!
//! VCS: Vidal, Cooper & Smith 1973 (ApJS 25, 37), Balmer alpha to delta, file `vcsbalmer.dat`.
//! Stehle: Stehle & Hutcheon 1999 (A&AS 140, 93), file `stehle_long.dat.INTEL`. Both lie in the package
//! pysme-astro 1.2.0 and both include thermal broadening, so ours is folded with it too.

use emberline::physics::hydrogen::Line;
use emberline::physics::stark::{Broadened, StarkProfile, UnifiedLine, microfield::normal_field_esu};
use rayon::prelude::*;
use std::path::PathBuf;

/// One published profile.
struct Published {
    temperature_k: f64,
    log_density: f64,
    /// (log10 alpha, log10 S).
    points: Vec<(f64, f64)>,
}

/// Largest log n_e at which VCS computed each line (the file repeats the last one above).
const VCS_LIMIT: [(u32, f64); 4] = [(3, 18.0), (4, 17.0), (5, 16.5), (6, 16.0)];

fn tables_folder() -> PathBuf {
    PathBuf::from(
        std::env::var_os("EMBERLINE_STARK_TABLES").expect("EMBERLINE_STARK_TABLES names the folder"),
    )
}

/// The VCS file: per line 40 alpha (log alpha = -3 + 0.2 i) x 6 temperatures (2 500 K x 2^i) x 17
/// densities (log n_e = 10 + 0.5 i, running fastest), fixed columns of 8 characters.
fn read_vcs(upper: u32) -> Vec<Published> {
    let text = std::fs::read_to_string(tables_folder().join("vcsbalmer.dat")).unwrap();
    let name = ["HALPHA", "HBETA", "HGAMMA", "HDELTA"][upper as usize - 3];
    let lines = text.lines().skip_while(|line| line.split_whitespace().next() != Some(name)).skip(1);
    let values: Vec<f64> = lines
        .flat_map(|line| (0..10).filter_map(move |i| line.get(8 * i..8 * i + 8)))
        .map_while(|field| field.trim().parse().ok())
        .take(40 * 6 * 17)
        .collect();
    assert_eq!(values.len(), 40 * 6 * 17);
    let limit = VCS_LIMIT[upper as usize - 3].1;
    let mut found = Vec::new();
    // The sixth, 80 000 K, is not in the paper, and its profiles integrate to as much as 1.12.
    for t in 0..5 {
        for d in 4..17 {
            let log_density = 10.0 + 0.5 * d as f64;
            if log_density <= limit {
                let points = (0..40).map(|a| (-3.0 + 0.2 * a as f64, values[(a * 6 + t) * 17 + d])).collect();
                found.push(Published { temperature_k: 2500.0 * 2f64.powi(t as i32), log_density, points });
            }
        }
    }
    found
}

/// The Stehle file: Fortran records; line list, temperatures, densities, then two records per line with
/// alpha and S, 60 alpha (fastest) x 10 temperatures x 13 densities.
fn read_stehle(line: Line) -> Vec<Published> {
    let bytes = std::fs::read(tables_folder().join("stehle_long.dat.INTEL")).unwrap();
    let (mut rest, mut records) = (&bytes[..], Vec::new());
    while rest.len() >= 8 {
        let length = u32::from_le_bytes(rest[..4].try_into().unwrap()) as usize;
        records.push(&rest[4..4 + length]);
        rest = &rest[length + 8..];
    }
    let floats = |i: usize| -> Vec<f64> {
        records[i].chunks_exact(4).map(|b| f64::from(f32::from_le_bytes(b.try_into().unwrap()))).collect()
    };
    let names: Vec<u32> =
        records[1].chunks_exact(4).map(|b| u32::from_le_bytes(b.try_into().unwrap())).collect();
    let index = names.chunks_exact(2).position(|pair| pair == [line.lower, line.upper]).unwrap();
    let (temperatures, densities) = (floats(2), floats(3));
    let (alpha, s) = (floats(8 + 2 * index), floats(9 + 2 * index));
    let mut found = Vec::new();
    for (d, log_density) in densities.iter().enumerate().filter(|(_, d)| **d >= 12.0) {
        for (t, temperature_k) in temperatures.iter().enumerate().filter(|(_, t)| (4e3..1.7e5).contains(*t)) {
            let start = (d * temperatures.len() + t) * 60;
            let points = (start..start + 60)
                .filter(|i| alpha[*i] > 0.0 && s[*i] > 0.0)
                .map(|i| (alpha[i].log10(), s[i].log10()))
                .collect();
            found.push(Published { temperature_k: *temperature_k, log_density: *log_density, points });
        }
    }
    found
}

/// Ours on a fine grid, ready to be folded.
fn unified(line: &UnifiedLine, name: Line, temperature_k: f64, log_density: f64) -> Broadened {
    let density = 10f64.powf(log_density);
    // Centres of Lyman lines are narrow, the others flat inside 1e-4.
    let decades = if name.lower == 1 { 8 } else { 6 };
    let step = 10f64.ln() / 10.0;
    let ln_alpha: Vec<f64> = (-10 * decades + 20..21).map(|i| step * f64::from(i)).collect();
    let ln_field = normal_field_esu(density).ln();
    let s = line.profile(temperature_k, density, false, &ln_alpha);
    let stark = StarkProfile {
        ln_detuning_first: ln_alpha[0] + ln_field,
        ln_detuning_step: step,
        ln_s: s.iter().map(|s| s.ln() - ln_field).collect(),
        lorentz_hwhm: 0.0,
        centre: 0.0,
    };
    let lost = 1.0 - stark.integral();
    Broadened::new(name, &StarkProfile { centre: lost.max(0.0), ..stark }, temperature_k, 0.0)
}

/// Ratios ours / published with where they are: (log T, log n_e, log alpha, ratio).
fn ratios(line: Line, published: &[Published]) -> Vec<(f64, f64, f64, f64)> {
    let unified_line = UnifiedLine::new(line);
    published
        .par_iter()
        .flat_map_iter(|table| {
            let ours = unified(&unified_line, line, table.temperature_k, table.log_density);
            let field = normal_field_esu(10f64.powf(table.log_density));
            table
                .points
                .iter()
                .filter(|(log_alpha, _)| (-3.1..2.1).contains(log_alpha))
                .map(|(log_alpha, log_s)| {
                    let s = field * ours.per_aa(10f64.powf(*log_alpha) * field);
                    (table.temperature_k.log10(), table.log_density, *log_alpha, s / 10f64.powf(*log_s))
                })
                .collect::<Vec<_>>()
        })
        .collect()
}

fn quantile(sorted: &[f64], q: f64) -> f64 {
    sorted[((sorted.len() - 1) as f64 * q).round() as usize]
}

fn print_quantiles(label: &str, ratios: impl Iterator<Item = f64>) -> (f64, f64) {
    let mut sorted: Vec<f64> = ratios.collect();
    if sorted.is_empty() {
        return (1.0, 1.0);
    }
    sorted.sort_by(f64::total_cmp);
    let within = sorted.iter().filter(|r| (*r - 1.0).abs() < 0.08).count() as f64 / sorted.len() as f64;
    println!(
        "{label:28} {:5} points  min {:.3}  2.5% {:.3}  25% {:.3}  50% {:.3}  75% {:.3}  97.5% {:.3}  max {:.3}  within 8%: {:.3}",
        sorted.len(),
        sorted[0],
        quantile(&sorted, 0.025),
        quantile(&sorted, 0.25),
        quantile(&sorted, 0.5),
        quantile(&sorted, 0.75),
        quantile(&sorted, 0.975),
        sorted[sorted.len() - 1],
        within
    );
    (quantile(&sorted, 0.5), within)
}

fn print_breakdown(label: &str, ratios: &[(f64, f64, f64, f64)]) {
    print_quantiles(label, ratios.iter().map(|r| r.3));
    for density in 12..=18 {
        let density = f64::from(density);
        let chosen = ratios.iter().filter(|r| (r.1 - density).abs() < 0.3);
        print_quantiles(&format!("  log n_e {density}"), chosen.map(|r| r.3));
    }
    for (from, to) in
        [(-3.1, -2.1), (-2.1, -1.5), (-1.5, -1.0), (-1.0, -0.5), (-0.5, 0.0), (0.0, 1.0), (1.0, 2.1)]
    {
        let chosen = ratios.iter().filter(|r| r.2 >= from && r.2 < to);
        print_quantiles(&format!("  log alpha {from} .. {to}"), chosen.map(|r| r.3));
    }
}

/// The committed extract of both tables, by source and line.
fn read_extract(source: &str) -> Vec<(Line, Vec<Published>)> {
    let text = include_str!("../data/stark_published.csv");
    let mut found: Vec<(Line, Vec<Published>)> = Vec::new();
    for row in text.lines().filter(|row| row.starts_with(source)) {
        let fields: Vec<f64> = row.split(',').skip(1).map(|field| field.parse().unwrap()).collect();
        let [lower, upper, temperature_k, log_density, log_alpha, log_s] = fields[..] else {
            panic!("{row}")
        };
        let line = Line::new(lower as u32, upper as u32);
        if found.last().is_none_or(|last| last.0 != line) {
            found.push((line, Vec::new()));
        }
        let tables = &mut found.last_mut().unwrap().1;
        let is_same = |t: &Published| t.temperature_k == temperature_k && t.log_density == log_density;
        if !tables.last().is_some_and(is_same) {
            tables.push(Published { temperature_k, log_density, points: Vec::new() });
        }
        tables.last_mut().unwrap().points.push((log_alpha, log_s));
    }
    found
}

/// Where ions in motion change the profile (Stehle & Hutcheon compute them, this theory and VCS do not):
/// inside log alpha = -0.5 for Balmer lines, -2 for Lyman lines.
fn is_wing(line: Line, log_alpha: f64) -> bool {
    log_alpha > if line.lower == 1 { -2.0 } else { -0.5 }
}

#[test]
fn validate_extract_of_vcs() {
    for (line, published) in read_extract("vcs") {
        let ratios = ratios(line, &published);
        let label = format!("VCS {}-{}", line.lower, line.upper);
        let (median, _) = print_quantiles(&label, ratios.iter().map(|r| r.3));
        assert!((median - 1.0).abs() < 0.02, "{label}: median {median}");
        // Centres and near wings: 95 % within 8 %. In the wings VCS are up to a fifth higher than we
        // and Stehle & Hutcheon, see `validate_against_stehle`.
        let core = ratios.iter().filter(|r| !is_wing(line, r.2)).map(|r| r.3);
        let (_, within) = print_quantiles(&format!("{label} inside"), core);
        assert!(within > 0.95, "{label}: {within} within 8 % inside");
    }
}

#[test]
fn validate_extract_of_stehle() {
    for (line, published) in read_extract("stehle") {
        let ratios = ratios(line, &published);
        let label = format!("Stehle {}-{}", line.lower, line.upper);
        print_quantiles(&label, ratios.iter().map(|r| r.3));
        let wing = ratios.iter().filter(|r| is_wing(line, r.2)).map(|r| r.3);
        let (median, within) = print_quantiles(&format!("{label} wing"), wing);
        assert!(
            (median - 1.0).abs() < 0.02 && within > 0.95,
            "{label}: median {median}, {within} within 8 %"
        );
    }
}

#[test]
#[ignore = "half a minute; EMBERLINE_STARK_TABLES=folder cargo test -- --ignored --nocapture validate_against_vcs"]
fn validate_against_vcs() {
    for upper in 3..=6 {
        let line = Line::new(2, upper);
        let ratios = ratios(line, &read_vcs(upper));
        print_breakdown(&format!("VCS 2-{upper}"), &ratios);
        let (median, _) = print_quantiles("  all", ratios.iter().map(|r| r.3));
        assert!((median - 1.0).abs() < 0.02, "2-{upper}: median {median}");
        let core = ratios.iter().filter(|r| !is_wing(line, r.2)).map(|r| r.3);
        let (_, within) = print_quantiles("  inside the wings", core);
        assert!(within > 0.95, "2-{upper}: {within} within 8 % inside");
    }
}

/// Balmer lines above H7 are another kind of calculation in the file: they integrate to 0.987 - 0.995, their
/// wings are 8 % above the trend of the lower lines and grow by (1 + detuning/wavelength)^2 besides. Printed only.
#[test]
#[ignore = "minutes; EMBERLINE_STARK_TABLES=folder cargo test -- --ignored --nocapture print_stehle_high"]
fn print_stehle_high_lines() {
    for upper in [8, 10] {
        let line = Line::new(2, upper);
        print_breakdown(&format!("Stehle 2-{upper}"), &ratios(line, &read_stehle(line)));
    }
}

#[test]
#[ignore = "minutes; EMBERLINE_STARK_TABLES=folder cargo test -- --ignored --nocapture validate_against_stehle"]
fn validate_against_stehle() {
    for (lower, upper) in [(1, 2), (1, 3), (1, 4), (1, 5), (2, 3), (2, 4), (2, 5), (2, 6), (2, 7)] {
        let line = Line::new(lower, upper);
        let ratios = ratios(line, &read_stehle(line));
        print_breakdown(&format!("Stehle {lower}-{upper}"), &ratios);
        let wing = ratios.iter().filter(|r| is_wing(line, r.2)).map(|r| r.3);
        let (median, within) = print_quantiles("  wing", wing);
        assert!(
            (median - 1.0).abs() < 0.02 && within > 0.98,
            "{lower}-{upper}: median {median}, {within} within 8 %"
        );
    }
}

/// Builds the table at the place that EMBERLINE_PROFILE_TABLE names, and says what it took.
#[test]
#[ignore = "ten minutes; EMBERLINE_PROFILE_TABLE=file cargo test -- --ignored --nocapture build_whole"]
fn verify_build_whole_table() {
    let start = std::time::Instant::now();
    let path = PathBuf::from(std::env::var_os("EMBERLINE_PROFILE_TABLE").expect("EMBERLINE_PROFILE_TABLE"));
    let report = |done, total| println!("{done}/{total} lines after {:?}", start.elapsed());
    let table = emberline::grid::profile_table::build_profile_table(&path, &report).unwrap();
    let size = std::fs::metadata(&path).unwrap().len();
    println!("{} lines, {size} bytes", table.lines.len());
    assert!(size < 4_000_000);
    for table in &table.lines {
        let name = table.line();
        let (mut made, mut evaluated, mut worst) =
            (std::time::Duration::ZERO, std::time::Duration::ZERO, 0.0f64);
        for (t, ne) in [(7e3, 3e13), (1.2e4, 1e15), (2.2e4, 2e16), (4e4, 3e17)] {
            let now = std::time::Instant::now();
            let profile = table.broadened(t, ne, 1e-3);
            made = made.max(now.elapsed());
            let now = std::time::Instant::now();
            let (step, mut sum) = (0.005f64, 0.0);
            for i in 0..5000 {
                let x = 1e-5 * (step * (f64::from(i) + 0.5)).exp();
                sum += 2.0 * step * x * profile.per_aa(x);
            }
            evaluated = evaluated.max(now.elapsed() / 5000);
            worst = worst.max((sum - 1.0).abs());
        }
        println!(
            "{}-{}: made in {made:?}, evaluated in {evaluated:?}, integral off by {worst:.1e}",
            name.lower, name.upper
        );
        assert!(worst < 1e-3);
    }
}
