//! Makes `memory.x` from `budget.x` where the linker looks for it.
//!
//! The flash in it is a budget for the monitor. The image that counts instructions prints a table and is
//! larger: `LEGWISE_FLASH` in the environment, such as `256K`, grants it more.

use std::path::PathBuf;

fn main() {
    let out = PathBuf::from(std::env::var_os("OUT_DIR").unwrap_or_default());
    let flash = std::env::var("LEGWISE_FLASH").unwrap_or_else(|_| "96K".to_owned());
    let written = std::fs::read_to_string("budget.x")
        .and_then(|text| std::fs::write(out.join("memory.x"), text.replace("96K", &flash)));
    if let Err(error) = written {
        println!("cargo::error=could not write memory.x: {error}");
    }
    println!("cargo::rustc-link-search={}", out.display());
    println!("cargo::rustc-link-arg=-Tlink.x");
    println!("cargo::rerun-if-changed=budget.x");
    println!("cargo::rerun-if-env-changed=LEGWISE_FLASH");
}
