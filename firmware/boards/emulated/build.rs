//! Puts `memory.x` where the linker looks for it.

use std::path::PathBuf;

fn main() {
    let out = PathBuf::from(std::env::var_os("OUT_DIR").unwrap_or_default());
    if let Err(error) = std::fs::copy("memory.x", out.join("memory.x")) {
        println!("cargo::error=could not copy memory.x: {error}");
    }
    println!("cargo::rustc-link-search={}", out.display());
    println!("cargo::rustc-link-arg=-Tlink.x");
    println!("cargo::rerun-if-changed=memory.x");
}
