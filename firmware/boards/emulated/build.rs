//! Makes `memory.x` from `budget.x` where the linker looks for it.
//!
//! The memory in it is a budget for the monitor. The image that counts instructions prints a table and is
//! larger: with `LEGWISE_ROOM` set in the environment an image gets 256 KiB of each.

use std::path::PathBuf;

fn main() {
    let out = PathBuf::from(std::env::var_os("OUT_DIR").unwrap_or_default());
    let budgets = if std::env::var_os("LEGWISE_ROOM").is_some() { ["256K"; 2] } else { ["96K", "90K"] };
    let written = std::fs::read_to_string("budget.x").and_then(|text| {
        std::fs::write(out.join("memory.x"), text.replace("96K", budgets[0]).replace("90K", budgets[1]))
    });
    if let Err(error) = written {
        println!("cargo::error=could not write memory.x: {error}");
    }
    println!("cargo::rustc-link-search={}", out.display());
    println!("cargo::rustc-link-arg=-Tlink.x");
    if std::env::var_os("CARGO_FEATURE_DEFMT").is_some() {
        // Keeps the log texts in the image's file, out of its flash.
        println!("cargo::rustc-link-arg-bins=-Tdefmt.x");
    }
    println!("cargo::rerun-if-changed=budget.x");
    println!("cargo::rerun-if-env-changed=LEGWISE_ROOM");
}
