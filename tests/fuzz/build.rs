//! Links libFuzzer, which `run` has built.

fn main() {
    println!("cargo:rerun-if-env-changed=FUZZ_ENGINE");
    // Without it there is nothing to link to, but everything can be checked.
    if let Ok(folder) = std::env::var("FUZZ_ENGINE") {
        println!("cargo:rustc-link-search=native={folder}");
        println!("cargo:rustc-link-lib=static=fuzzer");
        println!("cargo:rustc-link-lib=stdc++");
    }
}
