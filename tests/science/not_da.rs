//! Real stars that are no DA white dwarfs: none may be accepted, and each for its own reason.

use emberline::codes::{self, Effect};
use emberline::fit::{FitSettings, Fitter};
use emberline::spectrum::ReadSettings;

use crate::support::published::{bundled_grid, read_one};

/// File under `tests/data/not_da` (`SOURCES.md` says what each is), and codes of which one must be raised:
/// subdwarfs and ordinary stars have narrow lines or helium, the DO and the DB helium or no Balmer lines.
const STARS: [(&str, &[&str]); 11] = [
    ("agk_81d266_stisnic_002", &["screen.narrow-lines"]),
    ("bd_17d4708_stisnic_002", &["screen.narrow-lines"]),
    ("bd_33d2642_fos_003", &["screen.helium-lines"]),
    ("bd_75d325_stis_001", &["screen.helium-lines"]),
    ("feige110_stisnic_002", &["screen.narrow-lines"]),
    ("feige34_stis_001", &["screen.helium-lines"]),
    ("gd108_005", &["screen.narrow-lines"]),
    ("hd93521_stis_001", &["screen.helium-lines"]),
    ("hz21_stis_001", &["screen.helium-lines"]),
    ("hz44_stis_001", &["screen.helium-lines"]),
    ("lds749b_stisnic_002", &["screen.no-balmer-lines"]),
];

#[test]
fn validate_what_is_no_da_is_not_accepted() {
    let fitter = Fitter::new(bundled_grid(), FitSettings::default());
    for (file, reasons) in STARS {
        let spectrum = read_one(&format!("tests/data/not_da/{file}.fits.gz"), &ReadSettings::default());
        let fit = fitter.fit(&spectrum).unwrap();
        let raised: Vec<&str> = fit.flags.iter().map(|flag| flag.code.as_str()).collect();
        println!("{file:>24} {:>7.0} K {:.2}  {}", fit.chosen().teff_k, fit.chosen().log_g, raised.join(" "));
        let is_held = raised.iter().any(|code| codes::find(code).unwrap().effect != Effect::Note);
        assert!(is_held, "{file}: accepted with {raised:?}");
        assert!(raised.iter().any(|code| reasons.contains(code)), "{file}: {raised:?}, need {reasons:?}");
    }
}

/// The same search finds no helium and no calcium in real DA white dwarfs whose flags are otherwise clean.
#[test]
fn validate_no_foreign_lines_in_da_standards() {
    let fitter = Fitter::new(bundled_grid(), FitSettings::default());
    for file in
        ["gd71_stisnic_002", "gd153_stisnic_002", "hz43_stis_001", "grw_70d5824_stisnic_002", "hz2_005"]
    {
        let spectrum = read_one(&format!("tests/data/calspec/{file}.fits.gz"), &ReadSettings::default());
        let fit = fitter.fit(&spectrum).unwrap();
        assert!(fit.flags.iter().all(|flag| !flag.code.starts_with("screen.")), "{file}: {:?}", fit.flags);
    }
}
