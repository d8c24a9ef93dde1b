//! Real DA white dwarfs: what the whole program makes of them.

use emberline::fit::{FitSettings, Fitter};
use emberline::spectrum::ReadSettings;

use crate::support::published::{STANDARDS, bundled_grid, read_one};

/// How far a star may be from the literature.
const LARGEST_TEFF: f64 = 0.08;
const LARGEST_LOG_G: f64 = 0.25;

/// Stars that miss this, and why. GD 50 and HZ 4: optical data of Oke (1990), whose two arms join inside
/// H-beta's window with zero points up to 8 A apart (see `tests/data/SOURCES.md`); no width of the
/// line-spread function from 7 to 20 A and no offset per line brings them nearer. WD 1657+343: hotter than
/// 50 000 K, where LTE fits of published NLTE models come out 7 % hot (test `validate_fits_of_published_models`;
/// its own model, of the literature's parameters, gives 56 700 K, 7.87).
const EXCEPTIONS: [&str; 3] = ["GD 50", "HZ 4", "WD 1657+343"];

#[test]
fn validate_standard_stars() {
    let fitter = Fitter::new(bundled_grid(), FitSettings::default());
    println!(
        "{:>12} {:>16} {:>18} {:>8} {:>7} {:>6}  flags",
        "star", "published", "fitted", "dTeff %", "dlog g", "chi2/n"
    );
    let mut missed = Vec::new();
    let stars = STANDARDS.iter().map(|star| {
        let path = format!("tests/data/calspec/{}.fits.gz", star.file);
        (star.name, read_one(&path, &ReadSettings::default()), star.teff_k, star.log_g)
    });
    for (name, spectrum, teff_k, log_g) in stars {
        let fit = fitter.fit(&spectrum).unwrap();
        let chosen = fit.chosen();
        let (dteff, dlog_g) = (chosen.teff_k / teff_k - 1.0, chosen.log_g - log_g);
        let codes: Vec<&str> = fit.flags.iter().map(|flag| flag.code.as_str()).collect();
        println!(
            "{name:>12} {teff_k:>9} {log_g:>6} {:>10.0} {:>7.3} {:>+8.1} {:>+7.3} {:>6.1}  {}",
            chosen.teff_k,
            chosen.log_g,
            100.0 * dteff,
            dlog_g,
            chosen.reduced_chi2(),
            codes.join(" ")
        );
        if !(dteff.abs() < LARGEST_TEFF && dlog_g.abs() < LARGEST_LOG_G) {
            missed.push(name);
        }
    }
    println!("{} of {} within 8 % and 0.25 dex", STANDARDS.len() - missed.len(), STANDARDS.len());
    assert_eq!(missed, EXCEPTIONS, "stars off the literature");
}
