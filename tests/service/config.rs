//! The configuration: the sample, unknown keys, overrides, instruments.

use std::path::Path;
use std::process::ExitCode;

use emberline::cli::check::{self, CheckArgs};
use emberline::service::config::{Config, ConfigError, Medium, known_keys};

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
            let shares_comment = key == "resolution_fwhm_aa";
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
    let config = parse(&sample_with_instrument()).unwrap();
    let header = |instrume: &'static str, arm: &'static str| {
        move |keyword: &str| match keyword {
            "INSTRUME" => Some(instrume.to_owned()),
            "ARM" => Some(arm.to_owned()),
            _ => None,
        }
    };
    let found = config.instrument_for(header("kfs-1b ", "BLUE")).unwrap();
    assert_eq!(found.medium, Some(Medium::Air));
    assert_eq!(found.masks_vac_aa, [[5575.0, 5583.0]]);
    assert!(config.instrument_for(header("KFS-1", "red")).is_none());
    assert!(config.instrument_for(|_| None).is_none());
}

#[test]
fn the_fingerprint_covers_only_what_can_change_an_answer() {
    let plain = parse("").unwrap().answer_fingerprint();
    let other = "log.level = \"debug\"\nworkers.threads = 7\ninbox.still_s = 1.0\nretry.attempts = 9";
    assert_eq!(parse(other).unwrap().answer_fingerprint(), plain);
    let text = sample_with_instrument();
    let with_instrument = parse(&text).unwrap().answer_fingerprint();
    assert_ne!(with_instrument, plain);
    let changed = parse(&text.replace("resolving_power = 1800.0", "resolving_power = 1801.0")).unwrap();
    assert_ne!(changed.answer_fingerprint(), with_instrument);
}
