//! Puts `memory.x` where the linker looks for it.

use std::{env, fs, path::PathBuf};

fn main() {
    println!("cargo:rerun-if-changed=memory.x");
    let Some(out) = env::var_os("OUT_DIR").map(PathBuf::from) else {
        println!("cargo:warning=OUT_DIR is not set: run this through cargo");
        return;
    };
    if let Err(error) = fs::write(out.join("memory.x"), include_str!("memory.x")) {
        println!("cargo:warning=memory.x could not be written to {}: {error}", out.display());
        return;
    }
    println!("cargo:rustc-link-search={}", out.display());
    if env::var_os("CARGO_FEATURE_DEFMT").is_some() {
        println!("cargo:rustc-link-arg=-Tdefmt.x");
    }
}
