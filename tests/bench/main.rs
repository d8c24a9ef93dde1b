//! Benchmarks: `cargo bench`.
#![allow(missing_docs)]
fn main() {
    divan::main();
}
