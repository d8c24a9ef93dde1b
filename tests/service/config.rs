//! The configuration: the sample, unknown keys, overrides, instruments.

use std::path::Path;
use std::process::ExitCode;

use emberline::cli::check::{self, CheckArgs};
use emberline::service::config::{Config, ConfigError, known_keys};
use emberline::spectrum::Medium;
use emberline::spectrum::fits::Header;

const SAMPLE: &str = include_str!("../../config/emberline.toml");

fn parse(text: &str) -> Result<Config, ConfigError> {
    Config::parse(text, Path::new("test.toml"), |_| None)
}

fn refusal(text: &str) -> String {
    emberline::service::daemon::chain(&parse(text).unwrap_err())
}

/// The sample with the commented section of an instrument made live.
fn sample_with_instrument() -> String {
    let (head, tail) = SAMPLE.split_once("# [[instrument]]\n").unwrap();
    let tail: String = tail.lines().map(|line| line.strip_prefix("# ").unwrap().to_owned() + "\n").collect();
    format!("{head}[[instrument]]\n{tail}")
}

#[test]
fn the_sample_equals_the_defaults() {
    assert_eq!(parse(SAMPLE).unwrap(), Config::default());
    assert_eq!(parse("").unwrap(), Config::default());
}

#[test]
fn the_sample_has_every_key_once_with_a_comment_above() {
    let text = sample_with_instrument();
    parse(&text).unwrap();
    let mut section = String::new();
    let mut found = Vec::new();
    let mut above = "";
    for line in text.lines() {
        let plain = line.strip_prefix("# ").filter(|l| l.starts_with("resolution_fwhm_aa")).unwrap_or(line);
        if plain.starts_with('[') {
            section = plain.trim_matches(['[', ']']).to_owned();
        } else if let Some((key, _)) = plain.split_once(" = ").filter(|_| !plain.starts_with('#')) {
            let shares_comment = ["resolution_fwhm_aa", "external_log_g"].contains(&key);
            assert!(above.starts_with('#') || shares_comment, "{section}.{key} has no comment");
            found.push(format!("{section}.{key}"));
        }
        above = line;
    }
    found.sort();
    let keys: Vec<String> = known_keys().into_iter().filter(|key| key.contains('.')).collect();
    assert_eq!(found, keys);
}

#[test]
fn an_unknown_key_is_refused_with_the_nearest_known_name() {
    assert_eq!(
        refusal("[inbox]\nfoldrs = []"),
        "cannot use the configuration: unknown key `inbox.foldrs` (did you mean `inbox.folders`?)"
    );
    assert_eq!(
        refusal("[inbocks]\nfolders = []"),
        "cannot use the configuration: unknown key `inbocks` (did you mean `inbox`?)"
    );
    assert_eq!(
        refusal("[[instrument]]\nname = \"A\"\nmatch = { X = \"1\" }\nmedia = \"air\""),
        "cannot use the configuration: unknown key `instrument.media` (did you mean `instrument.medium`?)"
    );
    assert_eq!(refusal("zzz = 1"), "cannot use the configuration: unknown key `zzz`");
}

#[test]
fn values_out_of_range_and_of_wrong_type_are_refused_with_their_key() {
    assert_eq!(
        refusal("workers.time_limit_s = -1.0"),
        "cannot use the configuration: `workers.time_limit_s` is -1, need 0.01 s to a day"
    );
    assert!(refusal("inbox.still_s = nan").contains("`inbox.still_s` is NaN"));
    assert!(refusal("inbox.include = [\"a[\"]").contains("`inbox.include`"));
    assert!(refusal("log.level = \"emberline=loud\"").contains("`log.level`"));
    let message = refusal("[inbox]\nstill_s = \"soon\"");
    assert!(message.contains("test.toml") && message.contains("line 2"), "{message}");
}

#[test]
fn the_environment_overrides_paths_only() {
    let environment = |name: &str| match name {
        "EMBERLINE_INBOX_FOLDERS" => Some("/a:/b c".to_owned()),
        "EMBERLINE_OUTPUT_LEDGER" => Some("/l.sqlite".to_owned()),
        _ => None,
    };
    let config = Config::parse("output.ledger = \"/other\"", Path::new("t"), environment).unwrap();
    assert_eq!(config.inbox.folders, [Path::new("/a"), Path::new("/b c")]);
    assert_eq!(config.output.ledger, Path::new("/l.sqlite"));
    assert_eq!(config.socket_path(), Path::new("/l.sqlite.socket"));
}

#[test]
fn check_shows_a_configuration_that_parses_to_itself() {
    for text in [SAMPLE.to_owned(), sample_with_instrument()] {
        let config = parse(&text).unwrap();
        let shown = check::render(Path::new("test.toml"), &config).unwrap();
        assert_eq!(parse(&shown).unwrap(), config);
    }
    let site = crate::support::site::Site::new();
    let args = CheckArgs { config: Some(site.config_path.clone()), for_daemon: true, layouts: false };
    assert_eq!(check::run(&args).unwrap(), ExitCode::SUCCESS);
    std::fs::remove_dir(&site.inbox).unwrap();
    let refusal = check::run(&args).unwrap_err().to_string();
    assert!(refusal.contains("no folder there") && refusal.contains("`inbox.folders`"), "{refusal}");
}

#[test]
fn an_instrument_is_chosen_by_its_header() {
    let instrument = parse(&sample_with_instrument()).unwrap().instrument.remove(0);
    assert_eq!(instrument.medium, Some(Medium::Air));
    let header = |cards: &[&str]| {
        let text: String = cards.iter().map(|card| format!("{card:80}")).collect();
        Header::parse(text.as_bytes())
    };
    let blue = header(&["INSTRUME= 'kfs-1b '", "ARM     = 'BLUE'"]);
    let red = header(&["INSTRUME= 'KFS-1'", "ARM     = 'red'"]);
    let only_arm = header(&["ARM     = 'Blue'"]);
    assert!(instrument.is_match(&[&blue]));
    assert!(!instrument.is_match(&[&red]), "all keywords must match");
    assert!(!instrument.is_match(&[&only_arm]), "a missing keyword matches nothing");
    assert!(instrument.is_match(&[&only_arm, &red]), "the spectrum's own header goes before the general one");
    assert!(!instrument.is_match(&[&red, &only_arm]));
}

#[test]
fn an_instrument_section_that_cannot_be_meant_is_refused_with_its_name() {
    let section = |line: &str| format!("[[instrument]]\nname = \"A\"\nmatch = {{ X = \"1\" }}\n{line}");
    parse(&section("")).unwrap();
    for (line, words) in [
        ("error_scale = 0.0", "`error_scale` is 0, need a positive number"),
        ("assume_snr = nan", "`assume_snr` is NaN, need a positive number"),
        ("masks_vac_aa = [[5000.0, 4000.0]]", "`masks_vac_aa` is [5000, 4000], need [low, high]"),
        ("resolving_power = 900.0\nresolution_fwhm_aa = 3.0", "need only one of"),
        ("velocity_frame = \"unknown\"", "need topocentric, heliocentric or barycentric"),
    ] {
        let message = refusal(&section(line));
        assert!(message.contains("section \"A\"") && message.contains(words), "{message}");
    }
    assert!(refusal("[[instrument]]\nname = \"A\"").contains("need at least one header keyword"));
    assert!(refusal(&section("medium = \"water\"")).contains("water"));
}

#[test]
fn fit_settings_that_cannot_be_meant_are_refused() {
    for (line, words) in [
        ("lines = []", "`fit.lines (their number)` is 0, need at least one line"),
        ("lines = [\"H-beta\", \"H-beta\"]", "`fit.lines` is a list with one line twice"),
        ("lines = [\"H-omega\"]", "cannot fit the line H-omega: known are H-alpha, H-beta"),
        ("fewest_windows = 6", "`fit.fewest_windows` is 6, need 1 to the number of lines"),
        ("core_mask_half_width_aa = -1.0", "need 0 to 20 A"),
        ("largest_velocity_km_s = 2000.0", "need 100 to 1500 km/s"),
        ("outlier_sigma = nan", "`fit.outlier_sigma` is NaN"),
        ("tilt_sigma = 0.0", "need 0.005 to 100"),
        ("external_teff_relative = 1.0", "need 0 to 0.5"),
        ("external_log_g = -0.1", "need 0 to 1 dex"),
    ] {
        let message = refusal(&format!("[fit]\n{line}"));
        assert!(message.contains(words), "{message}");
    }
    assert_eq!(parse("[fit]\nlines = [\"H8\", \"H9\"]").unwrap().fit.lines.len(), 2);
}

#[test]
fn the_fingerprint_covers_only_what_can_change_an_answer() {
    let plain = parse("").unwrap().answer_fingerprint();
    let other = "log.level = \"debug\"\nworkers.threads = 7\ninbox.still_s = 1.0\nretry.attempts = 9";
    assert_eq!(parse(other).unwrap().answer_fingerprint(), plain);
    for line in ["fit.lines = [\"H-beta\", \"H8\"]", "fit.outlier_sigma = 6.0", "fit.external_log_g = 0.04"] {
        assert_ne!(parse(line).unwrap().answer_fingerprint(), plain, "{line}");
    }
    assert_eq!(parse("fit.outlier_sigma = 5.0").unwrap().answer_fingerprint(), plain);
    let text = sample_with_instrument();
    let with_instrument = parse(&text).unwrap().answer_fingerprint();
    assert_ne!(with_instrument, plain);
    let changed = parse(&text.replace("resolving_power = 1800.0", "resolving_power = 1801.0")).unwrap();
    assert_ne!(changed.answer_fingerprint(), with_instrument);
}
