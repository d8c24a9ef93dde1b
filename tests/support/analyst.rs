//! A fast, deterministic stand-in for the science: the content of the "spectrum" says what happens.
//!
//! Lines: `object NAME` (one document each), `sleep_ms N`, `panic`, `hang`, `crash`, `until FILE` (waits until
//! FILE is there), `flaky N` (fails N times with a fault that may pass), `fault retry|reject|stop`;
//! the last line is `END`, without which the file counts as torn.

use std::collections::HashMap;
use std::path::Path;
use std::sync::{Arc, Mutex};
use std::time::Duration;

use emberline::codes::{Code, Effect};
use emberline::service::analyst::{Analyst, AnalystFactory, Document, Fault};
use emberline::service::config::Config;
use serde_json::json;

pub static TEST_FAULT: Code =
    Code { id: "test.fault", meaning: "ordered by the file", remedy: "none", effect: Effect::Reject };

pub struct TestAnalyst {
    fingerprint: String,
    failures: Mutex<HashMap<String, u32>>,
}

impl Analyst for TestAnalyst {
    fn fingerprint(&self) -> String {
        self.fingerprint.clone()
    }

    fn analyse(&self, path: &Path, bytes_blake3: &str) -> Result<Vec<Document>, Fault> {
        let bytes = std::fs::read(path).map_err(|error| Fault::retry(&TEST_FAULT, error.to_string()))?;
        if blake3::hash(&bytes).to_hex().as_str() != bytes_blake3 {
            return Err(Fault::retry(&TEST_FAULT, "the file changed"));
        }
        let text = String::from_utf8_lossy(&bytes);
        if text.lines().last() != Some("END") {
            return Err(Fault::retry(&TEST_FAULT, "the file is torn"));
        }
        let mut documents = Vec::new();
        for line in text.lines() {
            let (word, rest) = line.split_once(' ').unwrap_or((line, ""));
            match word {
                "object" => documents.push(self.document(rest, bytes_blake3)),
                "sleep_ms" => std::thread::sleep(Duration::from_millis(rest.parse().unwrap())),
                "panic" => panic!("ordered by the file"),
                "crash" => std::process::abort(),
                "hang" => loop {
                    std::thread::park();
                },
                "until" => {
                    while !Path::new(rest).exists() {
                        std::thread::sleep(Duration::from_millis(2));
                    }
                }
                "flaky" => {
                    let mut failures = self.failures.lock().unwrap();
                    let failed = failures.entry(bytes_blake3.to_owned()).or_insert(0);
                    if *failed < rest.parse().unwrap() {
                        *failed += 1;
                        return Err(Fault::retry(&TEST_FAULT, format!("failure {failed}")));
                    }
                }
                "fault" => {
                    return Err(match rest {
                        "retry" => Fault::retry(&TEST_FAULT, "ordered"),
                        "reject" => Fault::reject(&TEST_FAULT, "ordered"),
                        _ => Fault::stop(&TEST_FAULT, "ordered"),
                    });
                }
                _ => {}
            }
        }
        Ok(documents)
    }
}

impl TestAnalyst {
    fn document(&self, object_name: &str, bytes_blake3: &str) -> Document {
        let report = json!({
            "object": { "name": object_name },
            "source": { "blake3": bytes_blake3 },
            "verdict": "accepted",
            "provenance": { "config_fingerprint": self.fingerprint },
            // As large as a real report.
            "padding": "x".repeat(8_000),
        });
        Document {
            object_name: object_name.to_owned(),
            verdict: "accepted".to_owned(),
            json: report.to_string().into_bytes(),
            row: json!({ "object_name": object_name }),
        }
    }
}

/// Makes test analysts; their fingerprint covers what a real one's must.
pub fn factory() -> AnalystFactory {
    Arc::new(|config: &Config| {
        let text = format!("test {}", config.answer_fingerprint());
        let fingerprint = blake3::hash(text.as_bytes()).to_hex().to_string();
        Ok(Arc::new(TestAnalyst { fingerprint, failures: Mutex::default() }) as Arc<dyn Analyst>)
    })
}
