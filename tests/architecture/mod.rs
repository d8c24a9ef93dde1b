//! Layers look downward, tables agree, and what the style asks for is there.

use std::fs;
use std::path::{Path, PathBuf};

use emberline::codes::TABLE;

fn sources() -> Vec<(PathBuf, String)> {
    fn collect(folder: &Path, found: &mut Vec<PathBuf>) {
        for entry in fs::read_dir(folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                collect(&path, found);
            } else if path.extension().is_some_and(|extension| extension == "rs") {
                found.push(path);
            }
        }
    }
    let root = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let mut found = Vec::new();
    collect(&root, &mut found);
    found.sort();
    found
        .into_iter()
        .map(|path| (path.strip_prefix(&root).unwrap().to_owned(), fs::read_to_string(&path).unwrap()))
        .collect()
}

/// The modules of `lib.rs` in layer order.
fn layers(lib: &str) -> Vec<&str> {
    lib.lines().filter_map(|line| line.strip_prefix("pub mod ")?.strip_suffix(';')).collect()
}

/// Names that follow `crate::`, also those of a braced list right behind it.
fn imported(source: &str) -> Vec<String> {
    let mut names = Vec::new();
    for part in source.split("crate::").skip(1) {
        let word = |text: &str| -> String {
            text.chars().take_while(|c| c.is_ascii_alphanumeric() || *c == '_').collect()
        };
        if let Some(list) = part.strip_prefix('{') {
            let list = list.split_once("};").map_or(list, |(list, _)| list);
            names.extend(list.split(',').map(|item| word(item.trim())).filter(|name| !name.is_empty()));
        } else {
            names.push(word(part));
        }
    }
    names
}

/// A line that looks upward: which file imports what.
fn upward_imports(files: &[(PathBuf, String)], layers: &[&str]) -> Vec<String> {
    let mut found = Vec::new();
    for (path, source) in files {
        let own = path
            .components()
            .next()
            .unwrap()
            .as_os_str()
            .to_string_lossy()
            .trim_end_matches(".rs")
            .to_owned();
        let Some(own_layer) = layers.iter().position(|layer| *layer == own) else { continue };
        for name in imported(source) {
            if let Some(layer) = layers.iter().position(|layer| *layer == name)
                && layer > own_layer
            {
                found.push(format!("{} imports {name}", path.display()));
            }
        }
    }
    found
}

#[test]
fn a_module_imports_only_those_above_it() {
    let files = sources();
    let lib = &files.iter().find(|(path, _)| path == Path::new("lib.rs")).unwrap().1;
    let layers = layers(lib);
    assert!(layers.len() >= 10 && layers[0] == "codes" && layers[layers.len() - 1] == "cli", "{layers:?}");
    let upward = upward_imports(&files, &layers);
    assert!(upward.is_empty(), "{upward:#?}");
}

#[test]
fn the_check_of_layers_can_fail() {
    let layers = ["codes", "physics", "fit", "report"];
    let file = |source: &str| vec![(PathBuf::from("physics/constants.rs"), source.to_owned())];
    assert!(upward_imports(&file("use crate::codes::Flag;"), &layers).is_empty());
    assert_eq!(upward_imports(&file("use crate::report::Report;"), &layers).len(), 1);
    assert_eq!(upward_imports(&file("use crate::{codes, fit::Fit};"), &layers).len(), 1);
    assert_eq!(upward_imports(&file("let x = crate::fit::Fit::new();"), &layers).len(), 1);
}

#[test]
fn codes_are_unique_well_formed_and_have_a_remedy() {
    for (index, code) in TABLE.iter().enumerate() {
        assert!(TABLE[..index].iter().all(|other| other.id != code.id), "{} is there twice", code.id);
        let (area, words) = code.id.split_once('.').unwrap_or_else(|| panic!("{} has no area", code.id));
        for part in [area, words] {
            let is_plain = part.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '-');
            assert!(
                is_plain && !part.is_empty() && !part.starts_with('-') && !part.ends_with('-'),
                "{}",
                code.id
            );
        }
        for sentence in [code.meaning, code.remedy] {
            assert!(!sentence.is_empty(), "{} lacks words", code.id);
            assert!(!sentence.ends_with('.') && !sentence.contains('\n'), "{}: {sentence}", code.id);
            assert!(
                !sentence.starts_with(|c: char| c.is_ascii_uppercase()) || sentence.starts_with("FITS"),
                "{sentence}"
            );
        }
    }
}

#[test]
fn every_code_is_raised_somewhere() {
    let files = sources();
    let table = &files.iter().find(|(path, _)| path == Path::new("codes.rs")).unwrap().1;
    let names: Vec<&str> = table
        .lines()
        .filter_map(|line| line.split_once(" = \"")?.0.trim().into())
        .filter(|name: &&str| {
            !name.is_empty() && name.chars().all(|c| c.is_ascii_uppercase() || c.is_ascii_digit() || c == '_')
        })
        .collect();
    assert_eq!(names.len(), TABLE.len(), "the table is written in a way that this test cannot read");
    let mentions = |name: &&str| {
        files.iter().filter(|(path, _)| path != Path::new("codes.rs")).any(|(_, source)| {
            source.match_indices(*name).any(|(at, _)| {
                let is_word = |c: char| c.is_ascii_alphanumeric() || c == '_';
                !source[..at].ends_with(is_word) && !source[at + name.len()..].starts_with(is_word)
            })
        })
    };
    let dead: Vec<&str> = names.iter().filter(|name| !mentions(name)).copied().collect();
    assert!(dead.is_empty(), "never raised: {dead:?}");
}

#[test]
fn unsafe_code_is_in_one_file_and_every_file_says_what_it_is() {
    let mut with_unsafe = Vec::new();
    for (path, source) in sources() {
        assert!(source.starts_with("//!"), "{} has no head", path.display());
        if source.contains("unsafe {") || source.contains("unsafe fn") || source.contains("unsafe impl") {
            with_unsafe.push(path.display().to_string());
        }
    }
    assert_eq!(with_unsafe, ["spectrum/fits/cfitsio.rs"]);
}

#[test]
fn the_main_function_stays_small() {
    let files = sources();
    let main = &files.iter().find(|(path, _)| path == Path::new("main.rs")).unwrap().1;
    assert!(main.lines().count() < 60);
}

#[test]
fn every_data_file_has_a_source() {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data");
    let sources = fs::read_to_string(folder.join("SOURCES.md")).unwrap();
    let mut bytes = 0;
    for part in ["calspec", "models", "layouts"] {
        for entry in fs::read_dir(folder.join(part)).unwrap() {
            let path = entry.unwrap().path();
            let name = path.file_name().unwrap().to_string_lossy().into_owned();
            let stem = name.trim_end_matches(".gz").trim_end_matches(".fits");
            assert!(sources.contains(stem), "{part}/{name} is not in SOURCES.md");
            bytes += fs::metadata(&path).unwrap().len();
        }
    }
    assert!(bytes < 6_000_000, "test data take {bytes} bytes");
}
