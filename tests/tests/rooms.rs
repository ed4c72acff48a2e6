//! The rooms and the arrows between them: who depends on whom, what stays out of the device crates,
//! and what lies at the top of the repository.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use serde_json::Value;
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::process::Command;

/// Room and the rooms it may use, in what is shipped.
const ARROWS: [(&str, &[&str]); 3] = [
    ("legwise-protocol", &[]),
    ("legwise-firmware", &["legwise-protocol"]),
    ("legwise", &["legwise-firmware", "legwise-protocol"]),
];
/// Everything at the top that belongs to the repository.
const TOP: [&str; 9] = [
    "Cargo.lock",
    "Cargo.toml",
    "DEVELOPERS.md",
    "LICENSE",
    "README.md",
    "firmware",
    "host",
    "protocol",
    "tests",
];
/// What builds and demos leave there.
const LEFT_BY_RUNS: [&str; 2] = ["target", "legwise-demo"];

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("..")
}

fn packages() -> Vec<Value> {
    let cargo = std::env::var_os("CARGO").unwrap_or_else(|| "cargo".into());
    let arguments = ["metadata", "--no-deps", "--format-version", "1", "--offline"];
    let output = Command::new(cargo).args(arguments).current_dir(root()).output().unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let metadata: Value = serde_json::from_slice(&output.stdout).unwrap();
    metadata["packages"].as_array().unwrap().clone()
}

/// Names of the workspace's own packages that `package` depends on; `kind` is null for what is shipped.
fn rooms_used<'a>(package: &'a Value, names: &BTreeSet<&str>, kind: &Value) -> BTreeSet<&'a str> {
    let dependencies = package["dependencies"].as_array().unwrap().iter();
    let of_kind = dependencies.filter(|dependency| dependency["kind"] == *kind);
    of_kind
        .map(|dependency| dependency["name"].as_str().unwrap())
        .filter(|name| names.contains(name))
        .collect()
}

/// Rust sources under a folder, built output left out.
fn sources(folder: &Path) -> Vec<PathBuf> {
    let mut found = Vec::new();
    for entry in std::fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        if path.is_dir() && path.file_name().is_some_and(|name| name != "target") {
            found.extend(sources(&path));
        } else if path.extension().is_some_and(|extension| extension == "rs") {
            found.push(path);
        }
    }
    found
}

/// Whether a word stands in a line of code, comments left out.
fn has_word(line: &str, word: &str) -> bool {
    let code = line.split("//").next().unwrap_or("");
    code.split(|character: char| !character.is_alphanumeric() && character != '_').any(|part| part == word)
}

#[test]
fn the_arrows_between_the_rooms_are_those_of_the_map() {
    let packages = packages();
    let names: BTreeSet<&str> = packages.iter().map(|package| package["name"].as_str().unwrap()).collect();
    let expected = BTreeSet::from(["legwise-protocol", "legwise-firmware", "legwise", "legwise-tests"]);
    assert_eq!(names, expected, "a room was added: draw its arrows here");
    for (room, permitted) in ARROWS {
        let package = packages.iter().find(|package| package["name"] == room).unwrap();
        let shipped = rooms_used(package, &names, &Value::Null);
        assert_eq!(shipped, permitted.iter().copied().collect(), "{room} depends on");
        // In tests too, nothing reaches against the arrows.
        let in_tests = rooms_used(package, &names, &"dev".into());
        let against: Vec<&str> = in_tests.into_iter().filter(|name| !permitted.contains(name)).collect();
        assert!(against.is_empty(), "{room} depends in its tests on {against:?}");
        assert!(rooms_used(package, &names, &"build".into()).is_empty(), "{room}");
    }
}

#[test]
fn device_rooms_do_without_std_and_without_an_allocator() {
    for room in ["protocol", "firmware"] {
        let library = std::fs::read_to_string(root().join(room).join("src/lib.rs")).unwrap();
        assert!(library.lines().any(|line| line.trim() == "#![no_std]"), "{room}/src/lib.rs has std");
        for path in sources(&root().join(room).join("src")) {
            let text = std::fs::read_to_string(&path).unwrap();
            // Unit tests run on the desktop, and stand last in a file or in a file of their own.
            let shipped = text.split("#[cfg(test)]").next().unwrap_or("");
            let is_test = path.file_name().is_some_and(|name| name == "tests.rs");
            for line in shipped.lines().filter(|_| !is_test) {
                assert!(!has_word(line, "std") && !has_word(line, "alloc"), "{}: {line}", path.display());
            }
        }
    }
}

#[test]
fn no_room_has_unsafe_code() {
    for package in packages() {
        let folder = Path::new(package["manifest_path"].as_str().unwrap()).parent().unwrap().to_owned();
        let manifest = std::fs::read_to_string(folder.join("Cargo.toml")).unwrap();
        assert!(manifest.contains("[lints]\nworkspace = true"), "{}: lints", folder.display());
        let sources = sources(&folder);
        assert!(!sources.is_empty());
        for path in sources {
            // Boards and fuzzing are workspaces of their own with their own rules.
            if path.starts_with(folder.join("boards")) || path.starts_with(folder.join("fuzz")) {
                continue;
            }
            let text = std::fs::read_to_string(&path).unwrap();
            let word = concat!("un", "safe");
            assert!(!text.lines().any(|line| has_word(line, word)), "{}", path.display());
        }
    }
    let workspace = std::fs::read_to_string(root().join("Cargo.toml")).unwrap();
    assert!(workspace.contains("unsafe_code = \"forbid\""), "forbidden for all rooms at once");
}

#[test]
fn the_top_of_the_repository_holds_what_the_map_shows_and_no_more() {
    let entries = std::fs::read_dir(root()).unwrap();
    let names: BTreeSet<String> =
        entries.map(|entry| entry.unwrap().file_name().to_string_lossy().into_owned()).collect();
    let belongs = |name: &str| !name.starts_with('.') && !LEFT_BY_RUNS.contains(&name);
    let found: Vec<&str> = names.iter().map(String::as_str).filter(|name| belongs(name)).collect();
    assert_eq!(found, TOP);
}

#[test]
fn words_are_found_in_code_and_not_in_comments() {
    let word = concat!("un", "safe");
    assert!(has_word(&format!("    {word} {{ read() }}"), word));
    assert!(!has_word(&format!("let {word}_code = 1; // {word}"), word));
}
