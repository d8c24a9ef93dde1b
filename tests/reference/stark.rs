//! Stark profiles: the microfield, the fold, and the published tables.

use std::f64::consts::PI;

use emberline::grid::profile_table::{PHYSICS_VERSION, ProfileTableError, compute_line, tabulated_lines};
use emberline::physics::hydrogen::Line;
use emberline::physics::stark::microfield::{Microfield, normal_field_esu};
use emberline::physics::stark::{
    Broadened, DENSITY_STEP, LineTable, ProfileTable, StaticLine, TableNodes, UnifiedLine,
    self_broadening_hwhm_aa,
};

/// Holtsmark's distribution W(beta), exact integral evaluated by Chandrasekhar (1943, Rev. Mod.
/// Phys. 15, 1, table III) (from memory; the sine integral is re-evaluated below by its series).
#[test]
fn validate_holtsmark_table() {
    let field = Microfield::compute(0.0);
    // Series W = (4/(3 pi)) sum (-1)^l beta^(2l+2) Gamma((4l+6)/3)/(2l+1)!, convergent for all beta.
    for beta in [0.01, 0.1, 0.5, 1.0, 1.5, 2.0, 3.0, 4.0] {
        let mut sum = 0.0;
        for l in 0..60 {
            let lf = f64::from(l);
            let ln = statrs::function::gamma::ln_gamma((4.0 * lf + 6.0) / 3.0)
                - statrs::function::gamma::ln_gamma(2.0 * lf + 2.0)
                + (2.0 * lf + 2.0) * f64::ln(beta);
            sum += if l % 2 == 0 { 1.0 } else { -1.0 } * ln.exp();
        }
        let exact = 4.0 / (3.0 * std::f64::consts::PI) * sum;
        let found = field.density(beta);
        println!("beta {beta} W {found:.6} exact {exact:.6}");
        assert!((found - exact).abs() < 1e-4 * exact.max(0.01), "{beta}: {found} {exact}");
    }
    // Asymptote (Chandrasekhar 1943, eq. 112): 1.496 beta^-5/2 (1 + 5.107 beta^-3/2 + 14.43 beta^-3).
    for beta in [20.0f64, 30.0, 60.0, 300.0] {
        let exact = 1.496_034 * beta.powf(-2.5) * (1.0 + 5.107 * beta.powf(-1.5) + 14.43 * beta.powi(-3));
        let found = field.density(beta);
        println!("beta {beta} W {found:.4e} asymptote {exact:.4e}");
        assert!((found / exact - 1.0).abs() < 2e-3, "{beta}: {found} {exact}");
    }
    for a in [0.0, 0.3, 0.6, 0.8, 1.0, 1.2] {
        assert!((Microfield::compute(a).cumulative(1e6) - 1.0).abs() < 1e-4, "a {a}");
    }
}

/// Hooper's (1968) distribution as fitted by Hummer & Mihalas (1988), in the form of Hubeny, Hummer &
/// Lanz (1994, A&A 282, 151, eqs. A.1 - A.6): the probability of a field below beta is f/(1 + f),
/// f = 0.1402 x beta^3/(1 + 0.1285 x beta^1.5), x = (1 + a)^3.15 (from memory). The fit itself is good to a few per cent.
#[test]
fn validate_microfield_against_hooper_fit() {
    for a in [0.0f64, 0.2, 0.4, 0.6, 0.8] {
        let field = Microfield::compute(a);
        for beta in [0.5f64, 1.0, 2.0, 4.0, 8.0, 16.0] {
            let x = (1.0 + a).powf(3.15);
            let f = 0.1402 * x * beta.powi(3) / (1.0 + 0.1285 * x * beta.powf(1.5));
            let (fit, found) = (f / (1.0 + f), field.cumulative(beta));
            println!("a {a} beta {beta} probability {found:.4} fit {fit:.4}");
            assert!((found - fit).abs() < 0.05, "a {a} beta {beta}: {found} {fit}");
        }
    }
}

#[test]
fn verify_profiles_integrate_to_one() {
    for (lower, upper) in [(1, 2), (2, 4), (2, 6), (3, 5), (4, 7)] {
        let line = StaticLine::new(lower, upper);
        for (t, ne, gamma) in
            [(6e3, 1e12, 1e-3), (1e4, 1e15, 0.0), (2e4, 1e17, 0.05), (5e4, 1e18, 0.0), (7e3, 1e15, 0.5)]
        {
            let profile = line.broadened(t, ne, gamma);
            let (mut total, mut x) = (profile.per_aa(0.0) * 1e-4, 1e-4f64);
            let step = 0.02f64;
            while x < 1e7 {
                let next = x * step.exp();
                let middle = (x * next).sqrt();
                let sum = profile.per_aa(x) * x
                    + 4.0 * profile.per_aa(middle) * middle
                    + profile.per_aa(next) * next;
                total += sum * step / 6.0;
                x = next;
            }
            assert!((2.0 * total - 1.0).abs() < 1e-3, "{lower}-{upper} {t} {ne}: {}", 2.0 * total);
        }
    }
}

/// The fold against a plain sum over the Stark profile with the Voigt function.
#[test]
fn verify_broadened_against_direct_sum() {
    let line = Line::new(2, 4);
    for (t, ne, gamma) in
        [(1e4, 1e13, 0.0), (1e4, 1e13, 0.02), (1e4, 1e15, 0.3), (2e4, 1e16, 0.05), (8e3, 1e14, 0.02)]
    {
        let stark = StaticLine::new(2, 4).stark(t, ne, true);
        let profile = Broadened::new(line, &stark, t, gamma);
        let sigma = line.wave_vac_aa() * (1.380_649e-16 * t / 1.673_533e-24f64).sqrt() / 2.997_924_58e10;
        for x in [0.0, 0.05, 0.2, 0.5, 1.0, 1.5, 3.0, 10.0, 40.0] {
            // Stark nodes on a fine logarithmic grid of both signs; the Voigt function by 240 Gaussian nodes.
            let voigt = |d: f64| -> f64 {
                if gamma == 0.0 {
                    return (-0.5 * (d / sigma).powi(2)).exp() / (sigma * (2.0 * PI).sqrt());
                }
                (0..240)
                    .map(|i| {
                        let y = -6.0 + 12.0 * (f64::from(i) + 0.5) / 240.0;
                        let weight = (-0.5 * y * y).exp() / (2.0 * PI).sqrt() * 12.0 / 240.0;
                        weight * gamma / PI / ((d - sigma * y).powi(2) + gamma * gamma)
                    })
                    .sum()
            };
            let (step, mut sum) = (2e-3, 0.0);
            for i in 0..9500 {
                let u = 1e-6 * (step * (f64::from(i) + 0.5)).exp();
                let s = stark.ln_value(u.ln()).exp();
                sum += step * u * s * (voigt(x - u) + voigt(x + u));
            }
            let found = profile.per_aa(x);
            println!(
                "T {t} ne {ne:.0e} gamma {gamma} x {x}: {found:.5e} direct {sum:.5e} {:.4}",
                found / sum
            );
            assert!((found / sum - 1.0).abs() < 5e-3, "{t} {ne} {gamma} {x}: {found} {sum}");
        }
    }
}

/// Values of the Barklem, Piskunov & O'Mara (2000) grid in pysme-astro 1.2.0 at 1e17 atoms: (upper level,
/// temperature in K, detuning in A, profile per A), away from the node the constants were taken from.
const BARKLEM: [(u32, f64, f64, f64); 6] = [
    (3, 5000.0, 15.26418, 1.08800e-5),
    (3, 10_000.0, 2.32995, 5.42002e-4),
    (4, 5000.0, 2.32995, 5.24147e-4),
    (4, 10_000.0, 47.14866, 1.60132e-6),
    (5, 5000.0, 15.26418, 2.13235e-5),
    (5, 10_000.0, 2.32995, 1.12384e-3),
];

#[test]
fn validate_self_broadening() {
    for (upper, t, x, expected) in BARKLEM {
        let hwhm = self_broadening_hwhm_aa(Line::new(2, upper), t, 1e17);
        let lorentz = hwhm / PI / (x * x + hwhm * hwhm);
        assert!((lorentz / expected - 1.0).abs() < 0.02, "2-{upper} {t} {x}: {lorentz} {expected}");
    }
    // Resonance of Lyman alpha: full width 8.6e-30 sqrt(1/3) wave^3 f n (Ali & Griem 1966, in the form of the
    // NIST atomic spectroscopy compendium).
    let expected = 0.5 * 8.6e-30 * (1.0f64 / 3.0).sqrt() * 1215.67f64.powi(3) * 0.4162 * 1e18;
    let found = self_broadening_hwhm_aa(Line::new(1, 2), 1e4, 1e18);
    assert!((found / expected - 1.0).abs() < 2e-3, "{found} {expected}");
}

/// The common far wing of VCS 1973, twice the ions' Holtsmark wing: log10 S at log10 alpha = 4.8 for H-alpha
/// to H-delta (`vcsbalmer.dat`; the electrons are static there).
const VCS_ASYMPTOTE: [(u32, f64); 4] = [(3, -14.5917), (4, -14.1517), (5, -13.9255), (6, -13.7119)];

#[test]
fn validate_far_wing() {
    for (upper, expected) in VCS_ASYMPTOTE {
        let ln_alpha = 4.8 * std::f64::consts::LN_10;
        let found = UnifiedLine::new(Line::new(2, upper)).profile(1e4, 1e15, false, &[ln_alpha])[0].log10();
        println!("2-{upper}: log S {found:.4}, VCS {expected}");
        // 1 %: what the quadrature and the interpolated kernel may add up to.
        assert!((found - expected).abs() < 0.0043, "2-{upper}: {found} {expected}");
    }
}

/// The static profile is the unified one where electrons are nearly static: the near wings of high lines
/// at high density.
#[test]
fn verify_static_against_unified() {
    for upper in [6, 8] {
        let line = Line::new(2, upper);
        let unified = UnifiedLine::new(line);
        let (t, ne) = (1e4, 1e16);
        let field = normal_field_esu(ne);
        let stark = StaticLine::new(2, upper).stark(t, ne, false);
        for alpha in [0.1f64, 0.3, 1.0, 3.0, 10.0, 30.0] {
            let s = unified.profile(t, ne, false, &[alpha.ln()])[0];
            let ratio = stark.ln_value((alpha * field).ln()).exp() * field / s;
            println!("2-{upper} alpha {alpha}: static/unified {ratio:.3}");
            assert!(
                (ratio - 1.0).abs() < if alpha < 0.5 { 0.35 } else { 0.12 },
                "2-{upper} {alpha}: {ratio}"
            );
        }
    }
}

fn small_nodes() -> TableNodes {
    TableNodes {
        log_temperature: vec![3.9, 4.2, 4.5, 4.8],
        log_density: (0..4).map(|i| 16.25 + DENSITY_STEP * f64::from(i)).collect(),
        ln_alpha_first: 1e-3f64.ln(),
        alpha_count: 91,
    }
}

#[test]
fn verify_table_interpolation() {
    let line = Line::new(2, 4);
    let nodes = small_nodes();
    let table = compute_line(line, &nodes);
    let (t, ne) = (10f64.powf(4.35), 10f64.powf(16.625));
    let field = normal_field_esu(ne);
    let step = std::f64::consts::LN_10 / 24.0;
    let ln_alpha: Vec<f64> = (0..121).map(|i| 1e-3f64.ln() + step * f64::from(i)).collect();
    let exact = UnifiedLine::new(line).profile(t, ne, true, &ln_alpha);
    let stark = table.stark(t, ne);
    let mut errors: Vec<f64> = ln_alpha
        .iter()
        .zip(&exact)
        .map(|(ln_alpha, s)| (stark.ln_value(ln_alpha + field.ln()).exp() * field / s - 1.0).abs())
        .collect();
    errors.sort_by(f64::total_cmp);
    let quantile = |q: f64| errors[((errors.len() - 1) as f64 * q) as usize];
    println!(
        "interpolation error: median {:.4} 90 % {:.4} largest {:.4}",
        quantile(0.5),
        quantile(0.9),
        quantile(1.0)
    );
    for gamma in [0.0, 0.01] {
        let best = (0..200)
            .map(|_| {
                let now = std::time::Instant::now();
                std::hint::black_box(table.broadened(t, ne, gamma));
                now.elapsed()
            })
            .min()
            .unwrap();
        println!("broadened with Lorentz width {gamma}: {best:?}");
    }
    // The largest errors sit on the edges that the cut of the ion field leaves in the far wing.
    assert!(quantile(0.5) < 1e-3 && quantile(0.9) < 0.01 && quantile(1.0) < 0.06);
    assert!((stark.integral() - 1.0).abs() < 1e-3);
}

#[test]
fn verify_profile_table_file() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("profiles.bin");
    let nodes = TableNodes {
        log_temperature: vec![4.0],
        log_density: vec![16.0],
        ln_alpha_first: -5.0,
        alpha_count: 40,
    };
    let line = LineTable::new(Line::new(2, 4), nodes, (0..40).map(|i| 1.0 - i as f32 * 0.3).collect());
    let table = ProfileTable { lines: vec![line] };
    table.write(&path).unwrap();
    let read = ProfileTable::read(&path).unwrap();
    assert_eq!(read.line(2, 4).unwrap().ln_s(), table.lines[0].ln_s());
    assert!(read.line(2, 5).is_none());
    // One flipped bit, a cut, and another physics version are refused.
    let bytes = std::fs::read(&path).unwrap();
    let mut flipped = bytes.clone();
    flipped[bytes.len() / 2] ^= 1;
    std::fs::write(&path, &flipped).unwrap();
    assert!(matches!(ProfileTable::read(&path), Err(ProfileTableError::Damaged { .. })));
    std::fs::write(&path, &bytes[..bytes.len() - 5]).unwrap();
    assert!(matches!(ProfileTable::read(&path), Err(ProfileTableError::Damaged { .. })));
    let text = String::from_utf8_lossy(&bytes[..bytes.len() - 32]).find(PHYSICS_VERSION).unwrap();
    let mut other = bytes[..bytes.len() - 32].to_vec();
    other[text] = b'X';
    let hash = blake3::hash(&other);
    other.extend(hash.as_bytes());
    std::fs::write(&path, &other).unwrap();
    assert!(matches!(ProfileTable::read(&path), Err(ProfileTableError::OtherPhysics { .. })));
    assert!(matches!(ProfileTable::read(&folder.path().join("none")), Err(ProfileTableError::Io { .. })));
}

/// The table in `grids/` is what the physics gives today: a few nodes computed anew.
#[test]
fn verify_bundled_table() {
    let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/stark_profiles.bin");
    let table = ProfileTable::read(&path).unwrap();
    let lines: Vec<Line> = table.lines.iter().map(LineTable::line).collect();
    assert_eq!(lines, tabulated_lines());
    for (line, t, d) in [(Line::new(1, 2), 2, 4), (Line::new(2, 4), 1, 18), (Line::new(2, 10), 2, 20)] {
        let stored = table.line(line.lower, line.upper).unwrap();
        let nodes = stored.nodes();
        let (log_t, log_d) = (nodes.log_temperature[t], nodes.log_density[d]);
        let start = (t * nodes.log_density.len() + d) * nodes.alpha_count;
        let chosen: Vec<usize> = (0..nodes.alpha_count).step_by(5).collect();
        let ln_alpha: Vec<f64> = chosen.iter().map(|i| nodes.ln_alpha()[*i]).collect();
        let made = UnifiedLine::new(line).profile(10f64.powf(log_t), 10f64.powf(log_d), true, &ln_alpha);
        for (i, made) in chosen.iter().zip(made) {
            let difference = made.ln() - f64::from(stored.ln_s()[start + i]);
            // Single precision of ln S up to 30.
            assert!(difference.abs() < 4e-6, "{line:?} alpha node {i}: {difference}");
        }
    }
}

/// Profiles from the bundled table integrate to 1, inside its nodes and beyond them.
#[test]
fn verify_bundled_profiles() {
    let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/stark_profiles.bin");
    let table = ProfileTable::read(&path).unwrap();
    for line in &table.lines {
        for (t, ne, gamma) in [
            (2e3, 1e8, 0.0),
            (6e3, 3e12, 0.01),
            (1e4, 2e14, 1e-4),
            (1.5e4, 4e15, 1e-4),
            (3e4, 7e16, 0.0),
            (8e4, 2e18, 0.0),
            (3e5, 1e20, 0.0),
        ] {
            let profile = line.broadened(t, ne, gamma);
            let (step, mut sum) = (0.01f64, 0.0);
            for i in 0..3000 {
                let x = 1e-5 * (step * (f64::from(i) + 0.5)).exp();
                sum += 2.0 * step * x * profile.per_aa(x);
            }
            assert!((sum - 1.0).abs() < 1e-3, "{:?} T {t} n_e {ne:.0e}: {sum}", line.line());
        }
    }
}
