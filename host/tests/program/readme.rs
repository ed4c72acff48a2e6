//! The commands of the README do what it says: each is run as it stands there, only shorter.

use crate::room::{Room, finish};
use std::path::Path;

/// The line a stranger types first, and the one after it.
const QUICK_START: [&str; 2] = ["cargo run --release -- demo", "cargo test --workspace"];
/// Commands that run here.
const TRIED: [&str; 9] =
    ["demo", "simulate", "analyse", "report", "receivers", "export", "ports", "plot", "trim"];

fn readme() -> String {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("../README.md");
    std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// Command lines of the blocks marked as shell, without prompts and comments.
fn command_lines(text: &str) -> Vec<String> {
    let mut lines = Vec::new();
    let mut is_shell = false;
    let mut is_inside = false;
    for line in text.lines() {
        if let Some(mark) = line.trim_start().strip_prefix("```") {
            is_inside = !is_inside;
            is_shell = is_inside && ["sh", "shell", "bash", "console"].contains(&mark.trim());
        } else if is_shell {
            let line = line.trim().trim_start_matches("$ ");
            let line = line.split(" #").next().unwrap_or("").trim();
            if !line.is_empty() && !line.starts_with('#') {
                lines.push(line.to_owned());
            }
        }
    }
    lines
}

/// Words of a line, as far as quotes matter here.
fn words(line: &str) -> Vec<String> {
    let parts = line.split('"').enumerate();
    let split = |(number, part): (usize, &str)| match number % 2 {
        0 => part.split_whitespace().map(str::to_owned).collect(),
        _ => vec![part.to_owned()],
    };
    parts.flat_map(split).collect()
}

/// Commands in running text and tables, such as `legwise report LOG`, with a name for each placeholder.
fn quoted_commands(text: &str) -> Vec<String> {
    let spans = text.split('`').skip(1).step_by(2);
    let commands = spans.filter(|span| span.starts_with("legwise ") && !span.contains('\n'));
    let fill = |command: &str| {
        let command = command.replace(['[', ']'], "");
        let mut words: Vec<&str> = command.split(' ').collect();
        for at in 1..words.len() {
            words[at] = match (words[1], words[at]) {
                ("receivers", "NAME") => "can-2003",
                (_, "SCENARIO" | "NAME") => "press-ground",
                (_, "RECORDING") => "night.csv",
                (_, "FILE") => "simulated.csv",
                (_, "LOG") => "night.lwlog",
                (_, "FOLDER") => "tables",
                (_, "PICTURE.svg") => "spectra.svg",
                (_, "BOARD.toml") => "measured.toml",
                (_, "TIED") => "tied.csv",
                (_, word) => word,
            };
        }
        words.join(" ")
    };
    commands.map(fill).collect()
}

/// The arguments of the program, where a line runs it.
fn arguments(line: &str) -> Option<Vec<String>> {
    let rest = line.strip_prefix("cargo run --release -- ").or_else(|| line.strip_prefix("legwise "))?;
    Some(words(rest))
}

/// Makes the file a command reads, where the lines before have not.
fn provide(room: &Room, arguments: &[String]) {
    let Some(file) = arguments.get(1).filter(|file| !file.starts_with('-') && !room.path(file).exists())
    else {
        return;
    };
    match arguments[0].as_str() {
        "analyse" => {
            room.done(&["simulate", "press-ground", "--seconds", "0.05", "-o", file]);
        }
        "trim" => {
            room.done(&["simulate", "tied-legs", "--seconds", "1", "-o", file]);
        }
        "report" | "export" | "plot" => {
            room.done(&["simulate", "press-ground", "--seconds", "0.05", "-o", "provided.csv"]);
            room.done(&["analyse", "provided.csv", "-o", file]);
        }
        _ => {}
    }
}

#[test]
fn the_readme_begins_with_the_two_commands_of_the_quick_start() {
    let lines = command_lines(&readme());
    for command in QUICK_START {
        assert!(lines.iter().any(|line| line == command), "no '{command}' among {lines:?}");
    }
}

#[test]
fn every_command_of_the_readme_that_needs_no_board_runs() {
    let room = Room::new();
    let mut tried = Vec::new();
    let text = readme();
    for line in command_lines(&text).into_iter().chain(quoted_commands(&text)) {
        let Some(mut arguments) = arguments(&line) else { continue };
        let name = arguments[0].clone();
        if !TRIED.contains(&name.as_str()) {
            continue;
        }
        match name.as_str() {
            "demo" => arguments.extend(["--minutes".to_owned(), "0.05".to_owned()]),
            "simulate" if arguments.contains(&"-o".to_owned()) => {
                // A board cannot be measured in less.
                let seconds = if arguments.contains(&"tied-legs".to_owned()) { "1" } else { "0.05" };
                arguments.extend(["--seconds".to_owned(), seconds.to_owned()]);
            }
            _ => {}
        }
        // A length the README names itself gives way to the shorter one.
        for option in ["--minutes", "--seconds"] {
            let places: Vec<usize> = (0..arguments.len()).filter(|&at| arguments[at] == option).collect();
            if let [first, _] = places[..] {
                arguments.drain(first..first + 2);
            }
        }
        provide(&room, &arguments);
        let ran = finish(room.command(&arguments));
        assert_eq!(ran.code, Some(0), "{line}: {ran:?}");
        assert!(!ran.out.is_empty(), "{line}");
        tried.push(name);
    }
    println!("tried: {tried:?}");
    for name in TRIED {
        assert!(tried.iter().any(|tried| tried == name), "the README shows no {name}");
    }
}

#[test]
fn every_option_the_readme_names_exists() {
    let room = Room::new();
    let commands =
        ["demo", "ports", "log", "report", "analyse", "simulate", "receivers", "export", "plot", "trim"];
    let helps: String = commands.iter().map(|command| room.done(&[command, "--help"]).out).collect();
    let text = readme();
    let spans =
        text.split('`').skip(1).step_by(2).filter(|span| !span.contains('\n') && !span.starts_with("cargo"));
    let options: Vec<&str> = spans
        .flat_map(|span| span.split([' ', ',', '[', ']']))
        .filter(|word| word.starts_with("--"))
        .collect();
    assert!(options.len() > 3, "{options:?}");
    for option in options {
        assert!(option == "--help" || helps.contains(&format!("{option} ")), "no {option} in any help");
    }
}
